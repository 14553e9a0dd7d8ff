"""How kernels are compiled, kept and trusted.

A kernel is a function of numba's subset of Python with one explicit signature. It is compiled when it is
first used, kept as machine code (see `oakum.kernels.store` and `machine`), and has to give a known answer
before it is used in a process. numba is imported only to compile.
"""

from __future__ import annotations

import contextlib
import threading
from collections.abc import Callable
from concurrent.futures import Future
from importlib import import_module
from typing import TYPE_CHECKING, Any

from oakum.kernels import machine, store, tiers
from oakum.kernels.machine import Code, Kind

if TYPE_CHECKING:
    from oakum.kernels.compiler import Compiled

on_compile: Callable[[str], None] | None = None
"""Called with a sentence for the user before a kernel is compiled (not when it comes from the cache).

A job sets it. It is called in the thread that needs the kernel first; `Kernel.prepare` says which.
"""

OUTSIDE = ("memcpy", "memmove", "memset", "llvm.")
"""What names begin with that a kernel may refer to."""

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
                self._code = self._kept() or self._made()
            return self._code

    def _kept(self) -> Code | None:
        """The kernel from the cache; None if anything at all is wrong with that."""
        content = store.load(self.name)
        with contextlib.suppress(Exception):  # content of another making can raise anything
            if content is not None and self.self_test(code := Code(content)):
                return code
        return None

    def _made(self) -> Code:
        if on_compile is not None:
            kept = store.cache_home() is not None
            prospect = "later runs will find it ready" if kept else "it cannot be kept for later runs"
            on_compile(f"compiling {self.purpose} for this CPU; {prospect}")
        content = _aside(self.compile)
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
        compiled = self.compiled()
        if outside := [name for name in compiled.outside() if not name.startswith(OUTSIDE)]:
            raise RuntimeError(f"the kernel {self.name} refers to {', '.join(outside)}")
        kinds = [_kind_of(argument) for argument in compiled.arguments]
        returns = str(compiled.returns) != "none"
        return machine.packed(compiled.symbol, kinds, returns, compiled.object_code())

    def compiled(self) -> Compiled:
        """The kernel as LLVM's code, made anew."""
        from oakum.kernels.compiler import Compiled

        module, _, name = self._place.rpartition(".")
        function = getattr(import_module(module, __package__), name)
        return Compiled(function, function.signature)


def _aside(work: Callable[[], bytes]) -> bytes:
    """What comes of work in a thread of its own. A signal ends the waiting for it, not the work.

    Handlers of signals run in the main thread. What they raise would be lost where LLVM calls numba back.
    """
    done: Future[bytes] = Future()

    def run() -> None:
        try:
            done.set_result(work())
        except BaseException as error:
            done.set_exception(error)

    threading.Thread(target=run, daemon=True).start()
    return done.result()


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
