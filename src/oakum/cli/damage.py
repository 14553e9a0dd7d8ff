"""Options of plan and rehearse that say what the medium does."""

from typing import Annotated

import typer

from oakum.cli.options import parse_size


def parse_lengths(text: str | None) -> tuple[tuple[int, float], ...] | None:
    """Burst lengths from `64K`, or with their shares `512:0.2,64K:0.8`. Raises `typer.BadParameter`."""
    if text is None:
        return None
    lengths = []
    for part in text.split(","):
        length, _, share = part.partition(":")
        try:
            lengths.append((parse_size(length), float(share or 1)))
        except ValueError:
            raise typer.BadParameter(
                f"{text!r} is no burst length; write it like 64K or 512:0.2,64K:0.8"
            ) from None
    return tuple(lengths)


def parse_share(text: str | float) -> float:
    """A share from `25%` or `0.25`, not yet held against any limits. Raises `typer.BadParameter`."""
    if isinstance(text, float):
        return text
    try:
        return float(text.strip().rstrip("%")) / (100 if text.strip().endswith("%") else 1)
    except ValueError:
        raise typer.BadParameter(f"{text!r} is no share; write it like 25% or 0.25") from None


Medium = Annotated[
    str | None,
    typer.Option("--medium", metavar="NAME", help="A preset: optical, tape, disk or flash (man oakum-plan)."),
]
FlipRate = Annotated[
    float | None,
    typer.Option("--flip-rate", metavar="P", help="Chance of a bit to flip; a year, with --years."),
]
BurstLength = Annotated[
    str | None,
    typer.Option(
        "--burst-length", metavar="SIZE[:SHARE],...", help="Length of bursts; alone it means one burst."
    ),
]
BurstsPerTb = Annotated[
    float | None, typer.Option("--bursts-per-tb", metavar="N", help="Bursts per terabyte and year.")
]
Bursts = Annotated[
    int | None, typer.Option("--bursts", metavar="N", min=1, help="So many bursts, instead of a rate.")
]
SectorSize = Annotated[
    int | None,
    typer.Option(
        "--sector-size", metavar="SIZE", parser=parse_size, help="Bytes lost with an unreadable sector."
    ),
]
SectorsPerTb = Annotated[
    float | None,
    typer.Option("--sectors-per-tb", metavar="N", help="Sectors lost per terabyte and year."),
]
SectorCluster = Annotated[
    float | None,
    typer.Option("--sector-cluster", metavar="N", help="Sectors that are lost together, on average."),
]
LostShare = Annotated[
    float | None,
    typer.Option(
        "--lost-share", metavar="SHARE", parser=parse_share, help="Part of the data lost in one piece."
    ),
]
Years = Annotated[float | None, typer.Option("--years", metavar="N", help="Years until the data are read.")]
SpareSidecar = Annotated[
    bool,
    typer.Option(
        "--spare-sidecar", help="The sidecar is kept where nothing happens to it.", show_default=False
    ),
]
