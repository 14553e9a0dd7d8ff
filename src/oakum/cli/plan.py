"""`oakum plan`."""

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from oakum.cli.damage import parse_share, takes_damage
from oakum.cli.options import Depth, Jobs, Json, Memory, Quiet, parse_size
from oakum.cli.output import emit
from oakum.errors import CannotCheck
from oakum.jobs import DEFAULT_MEMORY

if TYPE_CHECKING:
    from oakum.jobs.damage import Wishes


@takes_damage
def plan(
    path: Annotated[
        Path | None, typer.Argument(metavar="PATH", help="What is to be protected; or give --size.")
    ] = None,
    size: Annotated[
        int | None, typer.Option("--size", metavar="SIZE", parser=parse_size, help="Plan for so much data.")
    ] = None,
    *,
    wishes: "Wishes",
    overhead: Annotated[
        float | None,
        typer.Option("--overhead", metavar="SHARE", parser=parse_share, help="Most parity there may be."),
    ] = None,
    target_loss: Annotated[
        float,
        typer.Option("--target-loss", metavar="P", help="Chance of loss to stay below.", show_default=False),
    ] = 1e-9,
    depth: Depth = None,
    chart: Annotated[
        Path | None, typer.Option("--chart", metavar="FILE", help="Write the chart as SVG as well.")
    ] = None,
    json: Json = False,
    quiet: Quiet = False,
    _memory: Memory = DEFAULT_MEMORY,  # taken as everywhere; planning reads nothing
    _jobs: Jobs = None,
) -> None:
    """Choose a code for a medium, a period and a budget; gives the chance of loss."""
    from oakum.jobs.plan import plan as job
    from oakum.report import json as json_report
    from oakum.report import plan_json, text

    result = job(
        path,
        wishes,
        size=size,
        overhead=overhead,
        target=target_loss,
        depth=None if depth in (None, "whole") else parse_size(depth),
    )
    if chart is not None:
        from oakum.report.svg import chart_svg

        try:
            chart.write_text(
                chart_svg(result.curves, result.flip_rate, "Loss against flip rate"), encoding="utf-8"
            )
        except OSError as error:
            reason = (error.strerror or str(error)).lower()
            raise CannotCheck(f"{chart} could not be written: {reason}") from None
    if json:
        emit(json_report.dump(plan_json.plan_document(result)) + "\n")
    elif not quiet:
        emit(text.plan_text(result))
