"""What several jobs share: where sidecars and members are, and summaries of codes."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path

from oakum.algebra.concatenated import ConcatenatedCode
from oakum.errors import CannotCheck, UsageError
from oakum.progress import Progress
from oakum.results import CodeSummary

SUFFIX = ".oakum"


def announce_compiling(progress: Progress) -> None:
    """Let the user know when the compiled loops have to be made first, which takes some seconds."""
    from oakum.kernels import compiling

    compiling.on_compile = progress.note


def summarise(code: ConcatenatedCode) -> CodeSummary:
    """The code as results show it."""
    inner = None if code.inner.p == 0 else (code.inner.n, code.inner.k, code.inner.d)
    return CodeSummary(code.name, (code.outer.n, code.outer.k), inner, code.overhead, code.guaranteed_flips)


def absolute(path: Path) -> Path:
    """The path from the root on, with links in its folders resolved but its last part as it is."""
    path = Path(os.path.abspath(path))
    return Path(os.path.realpath(path.parent)) / path.name if path.name else path


def sidecar_path(paths: Sequence[Path], output: Path | None) -> Path:
    """Where the sidecar of `paths` goes: beside the one path there is, or `output`."""
    if output is not None:
        return absolute(output)
    if len(paths) != 1:
        raise UsageError("several paths need --output to say where their sidecar goes")
    path = absolute(paths[0])
    if not path.name:
        raise UsageError(
            "a whole file system has no folder beside it; say with --output where the sidecar goes"
        )
    return path.with_name(path.name + SUFFIX)


def members_root(paths: Sequence[Path], sidecar: Path) -> Path:
    """The folder that paths are relative to: the sidecar's where all members are below it, else their own."""
    parents = [path.parent for path in paths]
    common = Path(os.path.commonpath(parents))
    return sidecar.parent if common.is_relative_to(sidecar.parent) else common


def find_sidecar(target: Path, sidecar: Path | None) -> Path:
    """The sidecar that `target` means: itself, or the one beside it. Raises CannotCheck if there is none."""
    if sidecar is not None:
        if not sidecar.exists():
            raise CannotCheck(f"there is no sidecar {sidecar}")
        return absolute(sidecar)
    if target.name.endswith(SUFFIX) and target.is_file():
        return absolute(target)
    beside = absolute(target)
    beside = beside.with_name(beside.name + SUFFIX)
    if beside.is_file():
        return beside
    if (target / "bagit.txt").is_file() and (target / f"data{SUFFIX}").is_file():
        return absolute(target / f"data{SUFFIX}")  # A bag whose payload is protected.
    if not os.path.lexists(target):
        raise CannotCheck(
            f"neither {target} nor a sidecar of it is there; check the path, or that the medium is mounted"
        )
    raise CannotCheck(
        f"{target} has no sidecar {beside.name} beside it; "
        "name one with --sidecar, or make one with oakum protect"
    )
