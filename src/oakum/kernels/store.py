"""Where compiled kernels are kept: a cache folder that only the user can write.

    <cache>/oakum/kernels-<key>/<name>      SHA-256 of the content, then the content

The key hashes the sources of all kernels, the versions of Python, numba and llvmlite, the CPU's features and
what the environment tells numba. Whatever is wrong with the folder (no place for it, cut files, flipped
bytes, other people's files) costs the time to compile again and nothing else.
"""

from __future__ import annotations

import contextlib
import hashlib
import os
import shutil
import stat
import sys
import tempfile
import time
from functools import cache
from importlib.util import find_spec
from pathlib import Path

KEPT_DAYS = 60
"""Cache folders of other versions or CPUs are removed when they have not been used for so long."""

_SEAL = hashlib.sha256().digest_size


def load(name: str) -> bytes | None:
    """What was kept under a name; None if there is nothing, or not as it was written."""
    home = cache_home()
    if home is None:
        return None
    try:
        content = (home / name).read_bytes()
    except OSError:
        return None
    sealed = content[_SEAL:]
    return sealed if hashlib.sha256(sealed).digest() == content[:_SEAL] else None


def save(name: str, content: bytes) -> bool:
    """Keep something under a name; whether that could be done."""
    home = cache_home()
    if home is None:
        return False
    try:
        fd, partial = tempfile.mkstemp(prefix=f"{name}.", dir=home)
    except OSError:
        return False
    try:
        with open(fd, "wb") as file:
            file.write(hashlib.sha256(content).digest() + content)
        os.replace(partial, home / name)
    except OSError:
        with contextlib.suppress(OSError):
            os.unlink(partial)
        return False
    _forget_old(keep=home)
    return True


@cache
def cache_key() -> str:
    """Hash of all that compiled code depends on: kernel sources, versions, target CPU."""
    import llvmlite
    import llvmlite.binding as llvm

    digest = hashlib.sha256()
    for source in sorted(Path(__file__).parent.rglob("*.py")):
        digest.update(f"{source.name}\n".encode())
        digest.update(hashlib.sha256(source.read_bytes()).digest())
    facts = [
        sys.version, _version_of_numba(), llvmlite.__version__,
        llvm.get_process_triple(), llvm.get_host_cpu_name(), llvm.get_host_cpu_features().flatten(),
        *sorted(f"{name}={value}" for name, value in os.environ.items() if name.startswith("NUMBA_")),
    ]  # fmt: skip
    digest.update("\n".join(facts).encode(errors="surrogateescape"))
    return digest.hexdigest()[:16]


def _version_of_numba() -> str:
    """The file that says it: to import numba would take longer than everything else here."""
    spec = find_spec("numba")
    if spec is None or spec.origin is None:
        return ""
    return Path(spec.origin).with_name("_version.py").read_text()


def cache_home() -> Path | None:
    """The folder for this version and CPU, made if need be; None if there is no safe place for it.

    Compiled kernels are run as they are: so folders that belong to someone else, or that others may write,
    are passed over.
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


def _forget_old(keep: Path) -> None:
    limit = time.time() - KEPT_DAYS * 86400
    for folder in keep.parent.glob("kernels-*"):
        with contextlib.suppress(OSError):
            if folder != keep and folder.lstat().st_mtime < limit:
                shutil.rmtree(folder, ignore_errors=True)
