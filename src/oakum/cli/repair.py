"""`oakum repair`."""

from pathlib import Path
from typing import Annotated

import typer

from oakum.cli.checking import check
from oakum.cli.options import DEFAULT_MEMORY, Jobs, Json, Memory, Quiet, Root, Sidecar, Target, Unreadable
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
) -> int:
    """Write the corrected files beside the damaged ones."""
    from oakum.jobs.repair import repair as job

    result = check(
        "repair",
        target,
        as_json=json,
        quiet=quiet,
        job=lambda progress: job(
            target,
            sidecar=sidecar,
            root=root,
            output=output,
            members=tuple(member or ()),
            accept_loss=accept_loss,
            unreadable=unreadable,
            memory=memory,
            jobs=jobs,
            progress=progress,
        ),
    )
    return _STATUS[result.outcome]
