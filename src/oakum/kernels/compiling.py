"""How kernels are compiled, kept and trusted.

A kernel is a numba function with one explicit signature. It is compiled when it is first used, kept in
a cache folder that only the user can write, and has to give a known answer before it is used in a
process. Whatever is wrong with the cache (no place for it, cut files, flipped bytes, other people's
files) costs the time to compile again and nothing else.

    <cache>/oakum/kernels-<key>/<kernel>/...    numba's files, and `seal`: their digests

The key hashes the sources of all kernels, the versions of Python, numba and llvmlite, and the CPU's
features. numba itself looks only at the file that holds a kernel, and would go on using code whose
intrinsics have changed in another file; nor does it notice a flipped byte. Hence key and seal.
"""

from __future__ import annotations

import contextlib
import hashlib
import os
import shutil
import stat
import sys
import tempfile
import threading
import time
from collections.abc import Callable
from functools import cache
from pathlib import Path
from typing import Any

from oakum.kernels import tiers

on_compile: Callable[[str], None] | None = None
"""Called with a sentence for the user before a kernel is compiled (not when it comes from the cache).

A job sets it. It is called in the thread that needs the kernel first; `Kernel.prepare` says which.
"""

KEPT_DAYS = 60
"""Cache folders of other versions or CPUs are removed when they have not been used for so long."""

_SEAL = "seal"
_lock = threading.RLock()


class Kernel:
    """A function compiled on first use. Call it like the function itself.

    `self_test` is given the compiled function and says whether its answers are right.
    """

    def __init__(
        self,
        function: Callable[..., Any],
        signature: Any,
        self_test: Callable[[Callable[..., Any]], bool],
        purpose: str,
    ) -> None:
        self.name = f"{function.__module__.rpartition('.')[2]}.{function.__name__}"
        self.function = function
        self.signature = signature
        self.self_test = self_test
        self.purpose = purpose
        self.__doc__ = function.__doc__
        self._compiled: Callable[..., Any] | None = None

    def __call__(self, *arguments: Any) -> Any:
        return (self._compiled or self.prepare())(*arguments)

    def prepare(self) -> Callable[..., Any]:
        """Compile now, or load from the cache, and test. Raises RuntimeError if the answers are wrong."""
        with _lock:
            if self._compiled is None:
                self._compiled = self._cached() or self._uncached()
            return self._compiled

    def _cached(self) -> Callable[..., Any] | None:
        """The kernel by way of the cache folder; None if anything at all is wrong with that."""
        home = cache_home()
        if home is None:
            return None
        folder = home / self.name
        try:
            if not _is_sealed(folder):
                shutil.rmtree(folder, ignore_errors=True)
                return self._into_cache(folder)
            compiled = _jit(self.function, self.signature, folder)
            if self.self_test(compiled):
                return compiled  # type: ignore[no-any-return]
        except Exception:  # unpickling damaged files can raise anything
            pass
        shutil.rmtree(folder, ignore_errors=True)
        return None

    def _into_cache(self, folder: Path) -> Callable[..., Any] | None:
        """Compile in a folder of our own and move it to its place when it is whole and sealed."""
        partial = Path(tempfile.mkdtemp(prefix=f"{self.name}.", dir=folder.parent))
        try:
            self._announce("later runs will find it ready")
            compiled: Callable[..., Any] = _jit(self.function, self.signature, partial)
            if not self.self_test(compiled):
                return None
            (partial / _SEAL).write_text(_digests(partial))
            with contextlib.suppress(OSError):  # another process was first
                partial.rename(folder)
            return compiled
        finally:
            shutil.rmtree(partial, ignore_errors=True)

    def _uncached(self) -> Callable[..., Any]:
        self._announce("it cannot be kept for later runs")
        compiled: Callable[..., Any] = _jit(self.function, self.signature, None)
        if not self.self_test(compiled):
            raise RuntimeError(
                f"the kernel {self.name} gives wrong answers on this CPU; "
                f"set {tiers.ENVIRONMENT_VARIABLE} to another of {', '.join(tiers.TIERS)}"
            )
        return compiled

    def _announce(self, prospect: str) -> None:
        if on_compile is not None:
            on_compile(f"compiling {self.purpose} for this CPU; {prospect}")


def kernel(
    signature: Any, *, self_test: Callable[[Callable[..., Any]], bool], purpose: str
) -> Callable[[Callable[..., Any]], Kernel]:
    """Decorator that makes a function of numba's subset of Python a `Kernel`.

    `signature` as numba takes it: in its notation, such as ``"void(intp, intp)"``, or of its types.
    `purpose` completes the sentence "compiling ... for this CPU".
    """

    def decorate(function: Callable[..., Any]) -> Kernel:
        return Kernel(function, signature, self_test, purpose)

    return decorate


def _jit(function: Callable[..., Any], signature: Any, folder: Path | None) -> Any:
    """The numba dispatcher of `function`, compiled for `signature` (through `folder`, if given)."""
    import numba
    from numba.core import config

    options = {"nogil": True, "no_cfunc_wrapper": True}
    if folder is None:
        return numba.njit(signature, **options)(function)
    with _lock:
        before = config.CACHE_DIR
        config.CACHE_DIR = str(folder)  # read once, when the function is decorated
        try:
            return numba.njit(signature, cache=True, **options)(function)
        finally:
            config.CACHE_DIR = before


@cache
def cache_key() -> str:
    """Hash of all that compiled code depends on: kernel sources, versions, target CPU.

    Place and times of the sources are in it because numba takes files from other ones for stale.
    """
    import llvmlite
    import numba

    digest = hashlib.sha256()
    for source in sorted(Path(__file__).parent.rglob("*.py")):
        digest.update(f"{source} {source.stat().st_mtime_ns}\n".encode())
        digest.update(hashlib.sha256(source.read_bytes()).digest())
    facts = (sys.version, numba.__version__, llvmlite.__version__, *tiers.target())
    digest.update("\n".join(facts).encode())
    return digest.hexdigest()[:16]


def cache_home() -> Path | None:
    """The folder for this version and CPU, made if need be; None if there is no safe place for it.

    Compiled kernels are pickles, and loading one runs what it says: so folders that belong to someone
    else, or that others may write, are passed over.
    """
    name = f"kernels-{cache_key()}"
    for parent in _cache_parents():
        home = parent / name
        try:
            parent.mkdir(mode=0o700, parents=True, exist_ok=True)
            if not _only_ours(parent):
                continue
            home.mkdir(mode=0o700, exist_ok=True)
            if _only_ours(home):
                os.utime(home)
                _forget_old(parent, keep=home)
                return home
        except OSError:
            continue
    return None


def _cache_parents() -> list[Path]:
    configured = os.environ.get("XDG_CACHE_HOME", "")
    try:
        base = Path(configured) if os.path.isabs(configured) else Path.home() / ".cache"
        parents = [base / "oakum"]
    except RuntimeError:  # no home folder
        parents = []
    user = os.getuid() if hasattr(os, "getuid") else "user"
    return [*parents, Path(tempfile.gettempdir()) / f"oakum-{user}"]


def _only_ours(folder: Path) -> bool:
    """Whether `folder` is a real folder that belongs to the user and that nobody else can write."""
    status = folder.lstat()
    if not stat.S_ISDIR(status.st_mode):
        return False
    if not hasattr(os, "geteuid"):
        return True
    return status.st_uid == os.geteuid() and not status.st_mode & (stat.S_IWGRP | stat.S_IWOTH)


def _forget_old(parent: Path, keep: Path) -> None:
    limit = time.time() - KEPT_DAYS * 86400
    for folder in parent.glob("kernels-*"):
        if folder != keep and folder.lstat().st_mtime < limit:
            shutil.rmtree(folder, ignore_errors=True)


def _digests(folder: Path) -> str:
    """One line for each of numba's files in `folder`: digest and relative path."""
    files = sorted(path for path in folder.rglob("*.nb[ic]") if path.is_file())
    return "".join(
        f"{hashlib.sha256(path.read_bytes()).hexdigest()}  {path.relative_to(folder)}\n" for path in files
    )


def _is_sealed(folder: Path) -> bool:
    """Whether the files in `folder` are those that were there when it was written."""
    try:
        seal = (folder / _SEAL).read_text()
    except (OSError, UnicodeDecodeError):
        return False
    return seal != "" and seal == _digests(folder)
