"""Options of plan and rehearse that say what the medium does."""

import inspect
from collections.abc import Callable
from functools import wraps
from typing import TYPE_CHECKING, Annotated, Any

import typer

from oakum.cli.options import parse_size

if TYPE_CHECKING:
    from oakum.jobs.damage import Wishes


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


def damage_options(
    medium: Annotated[
        str | None,
        typer.Option(metavar="NAME", help="A preset: optical, tape, disk or flash (man oakum-plan)."),
    ] = None,
    flip_rate: Annotated[
        float | None, typer.Option(metavar="P", help="Chance of a bit to flip; a year, with --years.")
    ] = None,
    burst_length: Annotated[
        str | None,
        typer.Option(metavar="SIZE[:SHARE],...", help="Length of bursts; alone it means one burst."),
    ] = None,
    bursts_per_tb: Annotated[
        float | None, typer.Option(metavar="N", help="Bursts per terabyte and year.")
    ] = None,
    bursts: Annotated[
        int | None, typer.Option(metavar="N", min=1, help="So many bursts, instead of a rate.")
    ] = None,
    sector_size: Annotated[
        int | None,
        typer.Option(metavar="SIZE", parser=parse_size, help="Bytes lost with an unreadable sector."),
    ] = None,
    sectors_per_tb: Annotated[
        float | None, typer.Option(metavar="N", help="Sectors lost per terabyte and year.")
    ] = None,
    sector_cluster: Annotated[
        float | None, typer.Option(metavar="N", help="Sectors that are lost together, on average.")
    ] = None,
    lost_share: Annotated[
        float | None,
        typer.Option(metavar="SHARE", parser=parse_share, help="Part of the data lost in one piece."),
    ] = None,
    years: Annotated[float | None, typer.Option(metavar="N", help="Years until the data are read.")] = None,
    spare_sidecar: Annotated[
        bool,
        typer.Option(
            "--spare-sidecar", help="The sidecar is kept where nothing happens to it.", show_default=False
        ),
    ] = False,
) -> "Wishes":
    """The options, and what they say."""
    from oakum.jobs.damage import Wishes

    return Wishes(
        medium, flip_rate, parse_lengths(burst_length), bursts_per_tb, bursts, sector_size, sectors_per_tb,
        sector_cluster, lost_share, years, spare_sidecar,
    )  # fmt: skip


def takes_damage(command: Callable[..., None]) -> Callable[..., None]:
    """A command whose `wishes` are filled from the options above, which stand in their place."""
    options = inspect.signature(damage_options).parameters
    own = inspect.signature(command)

    @wraps(command, assigned=("__module__", "__name__", "__qualname__", "__doc__"))
    def filled(**given: Any) -> None:
        wishes = damage_options(**{name: given.pop(name) for name in options})
        command(wishes=wishes, **given)

    parameters: list[inspect.Parameter] = []
    for name, parameter in own.parameters.items():
        parameters += options.values() if name == "wishes" else [parameter]
    filled.__signature__ = own.replace(parameters=parameters)  # type: ignore[attr-defined]
    return filled
