"""The compiler of kernels: numba from the source to LLVM's code, and LLVM from there to machine code.

Left to itself, numba compiles a function to machine code once on its own, and once more within every function
that calls it, after passes in the service of features that kernels do without. Here a subroutine is taken no
further than to LLVM's code, and is optimised and compiled with the kernel: that takes half of the time.

The passes are numba's own; its interface for choosing them is `pipeline_class`.
"""

from __future__ import annotations

import gc
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

import numba
from llvmlite import binding as llvm
from numba.core.codegen import JITCodeLibrary
from numba.core.compiler import CompilerBase
from numba.core.compiler_machinery import PassManager
from numba.core.registry import cpu_target
from numba.core.typed_passes import AnnotateTypes, NativeLowering, NoPythonBackend, NopythonTypeInference
from numba.core.untyped_passes import FixupArgs, GenericRewrites, IRProcessing, TranslateByteCode

PASSES = (
    TranslateByteCode, FixupArgs, IRProcessing, GenericRewrites, NopythonTypeInference, AnnotateTypes,
    NativeLowering, NoPythonBackend,
)  # fmt: skip
"""Those that no function can do without. A variable has one type throughout."""

OPTIONS: dict[str, Any] = {
    "no_cpython_wrapper": True,
    "no_cfunc_wrapper": True,
    "error_model": "numpy",
    "_nrt": False,
}
"""What numba is told: no wrappers for calls from Python, no checks of divisors, no memory management."""


class _Library(JITCodeLibrary):  # type: ignore[misc]
    """The LLVM code of one function, as it was written: it is optimised when all is joined."""

    def _optimize_functions(self, ll_module: llvm.ModuleRef) -> None:
        ll_module.data_layout = self._codegen._data_layout

    def finalize(self) -> None:
        """Callers are about to use it: nothing has to be done for that."""
        self._finalized = True


class _ToLLVM(CompilerBase):  # type: ignore[misc]
    """numba's compiler, without the half that makes machine code."""

    def __init__(
        self,
        typingctx: Any,
        targetctx: Any,
        library: Any,
        args: Any,
        return_type: Any,
        flags: Any,
        locals: Any,
    ) -> None:
        flags.no_compile = True
        library = _Library(targetctx.codegen(), "kernel")
        super().__init__(typingctx, targetctx, library, args, return_type, flags, locals)

    def define_pipelines(self) -> list[PassManager]:
        manager = PassManager("kernel")
        for one in PASSES:
            manager.add_pass(one, one.__name__)
        manager.finalize()
        return [manager]

    def compile_extra(self, func: Callable[..., Any]) -> Any:
        """The result, and callers of the function are told of it.

        numba knows it by the built-in function that would be called from Python. Nobody does that, so that
        any will do which is no other function's.
        """
        stand_in = list[Any]().append
        result = super().compile_extra(func)._replace(entry_point=stand_in)
        self.state.targetctx.insert_user_function(stand_in, result.fndesc, [result.library])
        return result


def subroutine(function: Callable[..., Any]) -> Callable[..., Any]:
    """Marks a function that only kernels and other subroutines call."""
    return numba.njit(pipeline_class=_ToLLVM, **OPTIONS)(function)  # type: ignore[no-any-return]


class Compiled:
    """A kernel as LLVM's optimised code.

    symbol: its name there; arguments, returns: numba's types of what it takes and gives.
    """

    def __init__(self, function: Callable[..., Any], signature: Any) -> None:
        with _no_collection():
            dispatcher = numba.njit(signature, pipeline_class=_ToLLVM, **OPTIONS)(function)
            (result,) = dispatcher.overloads.values()
            self.symbol = result.fndesc.llvm_func_name
            self.arguments, self.returns = result.signature.args, result.signature.return_type
            self._machine = cpu_target.target_context.codegen()._tm
            self._module = self._joined(result.library)
            self._optimise()

    def outside(self) -> list[str]:
        """The names of the functions that the kernel calls and that are not in its code."""
        return [function.name for function in self._module.functions if function.is_declaration]

    def object_code(self) -> bytes:
        return self._machine.emit_object(self._module)  # type: ignore[no-any-return]

    def assembly(self) -> str:
        return str(self._machine.emit_assembly(self._module))

    def _joined(self, library: Any) -> llvm.ModuleRef:
        """One module of the code of a function and of all that it calls, which may be inlined."""
        module = library._final_module
        for part in dict.fromkeys(_parts(library)):
            module.link_in(part._final_module, preserve=True)
        for function in module.functions:
            if not function.is_declaration and function.name != self.symbol:
                function.linkage = llvm.Linkage.linkonce_odr
        return module

    def _optimise(self) -> None:
        """Loops are not vectorised: where that pays, kernels are written in vectors."""
        tuning = llvm.create_pipeline_tuning_options(speed_level=3)
        tuning.loop_vectorization = tuning.slp_vectorization = False
        builder = llvm.create_pass_builder(self._machine, tuning)
        first = llvm.create_new_module_pass_manager()
        first.add_instruction_combine_pass()  # the column decoder is slower by a sixth without it
        first.run(self._module, builder)
        builder.getModulePassManager().run(self._module, builder)


def _parts(library: Any) -> Iterator[Any]:
    for part in library._linking_libraries:
        yield part
        yield from _parts(part)


@contextmanager
def _no_collection() -> Iterator[None]:
    """Compiling makes many objects that stay, and the collector would look through them again and again."""
    enabled = gc.isenabled()
    gc.disable()
    try:
        yield
    finally:
        if enabled:
            gc.enable()
