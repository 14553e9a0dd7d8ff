"""How kernels are compiled, kept and trusted.

A kernel is a function of numba's subset of Python with one explicit signature. It is compiled when it is
first used, kept as machine code (see `oakum.kernels.store` and `machine`), and has to give a known answer
before it is used in a process. numba is imported only to compile.
"""

from __future__ import annotations

import contextlib
import threading
from collections.abc import Callable, Iterator
from importlib import import_module
from typing import Any

from oakum.kernels import machine, store, tiers
from oakum.kernels.machine import Code, Kind

on_compile: Callable[[str], None] | None = None
"""Called with a sentence for the user before a kernel is compiled (not when it comes from the cache).

A job sets it. It is called in the thread that needs the kernel first; `Kernel.prepare` says which.
"""

OUTSIDE = ("memcpy", "memmove", "memset", "llvm.")
"""What names begin with that a kernel may refer to."""

OPTIONS: dict[str, Any] = {
    "no_cpython_wrapper": True,
    "no_cfunc_wrapper": True,
    "error_model": "numpy",
    "_nrt": False,
}
"""What numba is told: no wrappers for calls from Python, no checks of divisors, no memory management."""

_lock = threading.RLock()


def typed(signature: Any) -> Callable[[Callable[..., Any]], Callable[..., Any]]:
    """Marks a function that `Kernel` compiles with its signature.

    As numba takes it: in its notation, such as ``"void(intp, intp)"``, or of its types. Numbers are intp,
    or tuples of them; arrays may not be made in a kernel.
    """

    def mark(function: Callable[..., Any]) -> Callable[..., Any]:
        function.signature = signature  # type: ignore[attr-defined]
        return function

    return mark


class Kernel:
    """A function compiled on first use. Call it like the function itself.

    `place` is "module.function", the module relative to this package with a leading dot; that module, which
    may import numba, is imported only to compile. `self_test` is given the compiled function and says whether
    its answers are right. `purpose` completes the sentence "compiling ... for this CPU".
    """

    def __init__(self, place: str, self_test: Callable[[Callable[..., Any]], bool], purpose: str) -> None:
        self.name = place.lstrip(".")
        self.self_test = self_test
        self.purpose = purpose
        self._place = place
        self._code: Code | None = None

    def __call__(self, *arguments: Any) -> Any:
        return (self._code or self.prepare())(*arguments)

    def prepare(self) -> Code:
        """Compile now, or load from the cache, and test. Raises RuntimeError if the answers are wrong."""
        with _lock:
            if self._code is None:
                self._code = self._kept() or self._compiled()
            return self._code

    def _kept(self) -> Code | None:
        """The kernel from the cache; None if anything at all is wrong with that."""
        content = store.load(self.name)
        with contextlib.suppress(Exception):  # content of another making can raise anything
            if content is not None and self.self_test(code := Code(content)):
                return code
        return None

    def _compiled(self) -> Code:
        if on_compile is not None:
            kept = store.cache_home() is not None
            prospect = "later runs will find it ready" if kept else "it cannot be kept for later runs"
            on_compile(f"compiling {self.purpose} for this CPU; {prospect}")
        content = self.compile()
        code = Code(content)
        if not self.self_test(code):
            raise RuntimeError(
                f"the kernel {self.name} gives wrong answers on this CPU; "
                f"set {tiers.ENVIRONMENT_VARIABLE} to another of {', '.join(tiers.TIERS)}"
            )
        store.save(self.name, content)
        return code

    def compile(self) -> bytes:
        """The kernel compiled anew, as `machine.packed`."""
        result = self.compiled_by_numba()
        library, returns = result.library, str(result.signature.return_type) != "none"
        if outside := [name for name in _declared(library) if not name.startswith(OUTSIDE)]:
            raise RuntimeError(f"the kernel {self.name} refers to {', '.join(outside)}")
        kinds = [_kind_of(argument) for argument in result.signature.args]
        code, _ = library.serialize_using_object_code()[2]
        return machine.packed(result.fndesc.llvm_func_name, kinds, returns, code)

    def compiled_by_numba(self) -> Any:
        """numba's result of compiling the kernel."""
        import numba

        module, _, name = self._place.rpartition(".")
        function = getattr(import_module(module, __package__), name)
        with _lock:
            dispatcher = numba.njit(function.signature, **OPTIONS)(function)
        (result,) = dispatcher.overloads.values()
        return result


def _declared(library: Any) -> Iterator[str]:
    """Names of the functions that a compiled module refers to and does not hold."""
    for function in library._final_module.functions:
        if function.is_declaration:
            yield function.name


def _kind_of(argument: Any) -> Kind:
    """How numba's type of an argument is passed on."""
    from numba import types

    if isinstance(argument, types.Array):
        return (str(argument.dtype), argument.ndim, argument.layout == "C", argument.mutable)
    if isinstance(argument, types.BaseTuple):
        return len(argument.types)
    if argument == types.intp:
        return None
    raise TypeError(f"a kernel cannot take {argument}")
