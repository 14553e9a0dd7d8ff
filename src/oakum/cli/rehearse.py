"""`oakum rehearse`."""

from typing import TYPE_CHECKING, Annotated

import typer

from oakum.cli.damage import takes_damage
from oakum.cli.options import Jobs, Json, Memory, Quiet, Root, Sidecar, Target
from oakum.cli.output import emit
from oakum.cli.progress import reporting
from oakum.jobs import DEFAULT_MEMORY

if TYPE_CHECKING:
    from oakum.jobs.damage import Wishes


@takes_damage
def rehearse(
    target: Target,
    *,
    wishes: "Wishes",
    trials: Annotated[
        int,
        typer.Option("--trials", metavar="N", min=1, help="How often; 20 if not given.", show_default=False),
    ] = 20,
    seed: Annotated[
        int,
        typer.Option("--seed", metavar="N", min=0, help="Another seed, other damage.", show_default=False),
    ] = 1,
    find_limit: Annotated[
        bool,
        typer.Option(
            "--find-limit", help="Search the flip rate or burst length that is too much.", show_default=False
        ),
    ] = False,
    sidecar: Sidecar = None,
    root: Root = None,
    json: Json = False,
    quiet: Quiet = False,
    _memory: Memory = DEFAULT_MEMORY,  # taken as everywhere; checking keeps to less
    jobs: Jobs = None,
) -> None:
    """Damage a copy in memory and prove what the sidecar survives; writes nothing."""
    from oakum.jobs.rehearse import rehearse as job
    from oakum.report import json as json_report
    from oakum.report import plan_json, text

    with reporting(quiet) as progress:
        result = job(
            target,
            wishes,
            trials=trials,
            seed=seed,
            find_limit=find_limit,
            sidecar=sidecar,
            root=root,
            jobs=jobs,
            progress=progress,
        )
    if json:
        emit(json_report.dump(plan_json.rehearsal_document(result)) + "\n")
    elif not quiet:
        emit(text.rehearsal_text(result))
