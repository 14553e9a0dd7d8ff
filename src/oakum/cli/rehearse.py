"""`oakum rehearse`."""

from typing import Annotated

import typer

from oakum.cli.damage import (
    BurstLength,
    Bursts,
    BurstsPerTb,
    FlipRate,
    LostShare,
    Medium,
    SectorCluster,
    SectorSize,
    SectorsPerTb,
    SpareSidecar,
    Years,
    parse_lengths,
)
from oakum.cli.options import DEFAULT_MEMORY, Jobs, Json, Memory, Quiet, Root, Sidecar, Target
from oakum.cli.output import emit
from oakum.cli.progress import reporting


def rehearse(
    target: Target,
    medium: Medium = None,
    flip_rate: FlipRate = None,
    burst_length: BurstLength = None,
    bursts_per_tb: BurstsPerTb = None,
    bursts: Bursts = None,
    sector_size: SectorSize = None,
    sectors_per_tb: SectorsPerTb = None,
    sector_cluster: SectorCluster = None,
    lost_share: LostShare = None,
    years: Years = None,
    spare_sidecar: SpareSidecar = False,
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
    from oakum.jobs.damage import Wishes
    from oakum.jobs.rehearse import rehearse as job
    from oakum.report import json as json_report
    from oakum.report import plan_json, text

    wishes = Wishes(
        medium, flip_rate, parse_lengths(burst_length), bursts_per_tb, bursts, sector_size, sectors_per_tb,
        sector_cluster, lost_share, years, spare_sidecar,
    )  # fmt: skip
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
