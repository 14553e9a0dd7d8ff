"""Options that several commands share, and the sizes that they take."""

import re
from pathlib import Path
from typing import Annotated

import typer

_SIZE = re.compile(r"([0-9]+)\s*(?:([kmgt])(i?b)?|b)?", re.IGNORECASE)
_POWERS = {"k": 1, "m": 2, "g": 3, "t": 4}
_LARGEST = 1 << 62


def parse_size(text: str | int) -> int:
    """Bytes from `4096`, `64K`, `1M`, `512MiB` (powers of 1024) or `64kB`, `1MB` (powers of 1000).

    The convention of GNU coreutils. Raises `typer.BadParameter`.
    """
    if isinstance(text, int):  # the parser of the command line hands in the default as it is
        return text
    match = _SIZE.fullmatch(text.strip())
    if match is None:
        raise typer.BadParameter(f"{text!r} is not a size; write it like 4096, 64K, 1M or 512MiB")
    number, prefix, unit = match.groups()
    base = 1000 if unit is not None and unit.lower() == "b" else 1024
    nbytes: int = int(number) * base ** (_POWERS[prefix.lower()] if prefix else 0)
    if nbytes > _LARGEST:
        raise typer.BadParameter(f"{text!r} is too large")
    return nbytes


def parse_rate(text: str) -> int:
    """Bytes a second, as `parse_size` has them. Raises `typer.BadParameter`."""
    rate = parse_size(text)
    if not rate:
        raise typer.BadParameter("at a rate of 0 nothing is ever read; give more")
    return rate


Json = Annotated[
    bool, typer.Option("--json", help="Print one JSON document instead of text.", show_default=False)
]
Quiet = Annotated[
    bool, typer.Option("--quiet", "-q", help="Print only errors (and JSON, if asked).", show_default=False)
]
Memory = Annotated[
    int,
    typer.Option(
        "--memory",
        metavar="SIZE",
        parser=parse_size,
        help="Memory for buffers; 384MiB if not given.",
        show_default=False,
    ),
]
Depth = Annotated[
    str | None,
    typer.Option(
        "--depth",
        metavar="whole|SIZE",
        help="Codewords interleaved: whole (files), or windows of this depth (pipes: 1MiB).",
    ),
]
Jobs = Annotated[
    int | None,
    typer.Option("--jobs", "-j", metavar="N", min=1, help="Threads; as many as processors if not given."),
]
ReadRate = Annotated[
    int | None,
    typer.Option(
        "--read-rate",
        metavar="SIZE",
        parser=parse_rate,
        help="Read at most so many bytes a second; as fast as possible if not given.",
        show_default=False,
    ),
]
Target = Annotated[Path, typer.Argument(metavar="TARGET", help="A protected file or folder, or a sidecar.")]
Sidecar = Annotated[
    Path | None,
    typer.Option("--sidecar", "-s", metavar="FILE", help="The sidecar, if it is not beside TARGET."),
]
Root = Annotated[
    Path | None,
    typer.Option("--root", metavar="FOLDER", help="Where the members are, if not beside the sidecar."),
]
Fresh = Annotated[
    bool,
    typer.Option(
        "--fresh", help="Start afresh, also where an earlier run was interrupted.", show_default=False
    ),
]
Unreadable = Annotated[
    Path | None,
    typer.Option("--unreadable", metavar="CSV", help="Ranges known to be unreadable: path,offset,length."),
]
