"""`oakum repair`."""

from pathlib import Path
from typing import Annotated

import typer

from oakum.cli.checking import check
from oakum.cli.options import (
    Jobs,
    Json,
    Memory,
    Quiet,
    ReadRate,
    Root,
    Sidecar,
    Target,
    Unreadable,
)
from oakum.cli.verify import STATUS as CHECKED
from oakum.errors import UsageError
from oakum.jobs import DEFAULT_MEMORY
from oakum.results import Outcome

_STATUS = {Outcome.INTACT: 0, Outcome.CORRECTABLE: 0, Outcome.UNCORRECTABLE: 20, Outcome.UNCHECKED: 30}


def repair(
    target: Target,
    output: Annotated[
        Path | None,
        typer.Option(
            "--output",
            "-o",
            metavar="PATH",
            help="Folder to write the members under; for one file also its new name.",
        ),
    ] = None,
    in_place: Annotated[
        bool,
        typer.Option(
            "--in-place",
            help="Put the bytes right in the files themselves, under a journal.",
            show_default=False,
        ),
    ] = False,
    even_newer: Annotated[
        bool,
        typer.Option(
            "--even-newer",
            help="With --in-place: also put back files that look edited.",
            show_default=False,
        ),
    ] = False,
    undo: Annotated[
        bool,
        typer.Option(
            "--roll-back", help="Undo the last repair --in-place, or an interrupted one.", show_default=False
        ),
    ] = False,
    member: Annotated[
        list[str] | None,
        typer.Option(
            "--member", "-m", metavar="PATH", help="Write only this file or folder; may be repeated."
        ),
    ] = None,
    accept_loss: Annotated[
        bool,
        typer.Option(
            "--accept-loss", help="Also write files that are only partly right.", show_default=False
        ),
    ] = False,
    sidecar: Sidecar = None,
    root: Root = None,
    unreadable: Unreadable = None,
    json: Json = False,
    quiet: Quiet = False,
    memory: Memory = DEFAULT_MEMORY,
    jobs: Jobs = None,
    read_rate: ReadRate = None,
) -> int:
    """Write the corrected files beside the damaged ones, or put them right where they are."""
    _refuse_together(in_place, even_newer, undo, output=output, member=member, accept_loss=accept_loss)
    if undo:
        from oakum.jobs.repair import roll_back

        back = check(
            "repair",
            target,
            as_json=json,
            quiet=quiet,
            read_rate=read_rate,
            job=lambda progress: roll_back(
                target, sidecar=sidecar, root=root, memory=memory, jobs=jobs, progress=progress
            ),
        )
        return CHECKED[back.outcome]
    from oakum.jobs.repair import repair as job

    result = check(
        "repair",
        target,
        as_json=json,
        quiet=quiet,
        read_rate=read_rate,
        job=lambda progress: job(
            target,
            sidecar=sidecar,
            root=root,
            output=output,
            in_place=in_place,
            even_newer=even_newer,
            members=tuple(member or ()),
            accept_loss=accept_loss,
            unreadable=unreadable,
            memory=memory,
            jobs=jobs,
            progress=progress,
        ),
    )
    return _STATUS[result.outcome]


def _refuse_together(
    in_place: bool,
    even_newer: bool,
    undo: bool,
    *,
    output: Path | None,
    member: list[str] | None,
    accept_loss: bool,
) -> None:
    """Options that contradict each other."""
    if in_place and output is not None:
        raise UsageError("--in-place and --output contradict each other; give one of them")
    if in_place and accept_loss:
        raise UsageError("--accept-loss writes files that are only partly right, and never over others")
    if even_newer and not in_place:
        raise UsageError("--even-newer goes with --in-place; other repairs leave the files as they are")
    if undo and (in_place or accept_loss or output is not None or member):
        raise UsageError("--roll-back undoes the whole of the last repair in place; give it alone")
