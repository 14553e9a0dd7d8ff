"""`oakum verify`."""

from typing import Annotated

import typer

from oakum.cli.checking import check
from oakum.cli.options import (
    Fresh,
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
from oakum.jobs import DEFAULT_MEMORY
from oakum.results import Outcome

STATUS = {Outcome.INTACT: 0, Outcome.CORRECTABLE: 10, Outcome.UNCORRECTABLE: 20, Outcome.UNCHECKED: 30}


def verify(
    target: Target,
    sidecar: Sidecar = None,
    root: Root = None,
    digests_only: Annotated[
        bool,
        typer.Option(
            "--digests-only",
            help="Leave out SHA-256; the cells' digests alone find damage.",
            show_default=False,
        ),
    ] = False,
    unreadable: Unreadable = None,
    fresh: Fresh = False,
    json: Json = False,
    quiet: Quiet = False,
    memory: Memory = DEFAULT_MEMORY,
    jobs: Jobs = None,
    read_rate: ReadRate = None,
) -> int:
    """Find damage and say whether it can be corrected; writes nothing."""
    from oakum.jobs.verify import verify as job

    result = check(
        "verify",
        target,
        as_json=json,
        quiet=quiet,
        read_rate=read_rate,
        job=lambda progress: job(
            target,
            sidecar=sidecar,
            root=root,
            digests_only=digests_only,
            unreadable=unreadable,
            fresh=fresh,
            memory=memory,
            jobs=jobs,
            progress=progress,
        ),
    )
    return STATUS[result.outcome]
