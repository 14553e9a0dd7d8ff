"""The application: its commands, and the options that belong to none of them."""

from typing import Annotated

import typer

from oakum import __version__
from oakum.cli import audit, describe, history, plan, protect, rehearse, repair, verify
from oakum.cli.values import Command, Group

app = typer.Typer(
    name="oakum",
    cls=Group,
    help=(
        "Keep archived files whole: write a sidecar of parity beside them, find every flipped bit years "
        "later, and put the bytes right."
    ),
    epilog="Exit status: 0 whole or put right, 10 correctable damage, 20 damage beyond correction, 30 could "
    "not check, 2 wrong usage, 1 a fault of the program itself. More: man oakum.",
    # Plain help loads in a third of the time, and reads the same in a pager, a log and a screen reader.
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    add_completion=False,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
)


def _show_version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"oakum {__version__}")
        raise typer.Exit


@app.callback()
def oakum(
    version: Annotated[
        bool, typer.Option("--version", help="Show the version.", callback=_show_version, is_eager=True)
    ] = False,
) -> None:
    """Options before the command; the help text stands above."""


app.command("plan", cls=Command)(plan.plan)
app.command("protect", cls=Command)(protect.protect)
app.command("verify", cls=Command)(verify.verify)
app.command("repair", cls=Command)(repair.repair)
app.command("audit", cls=Command)(audit.audit)
app.command("history", cls=Command)(history.history)
app.command("rehearse", cls=Command)(rehearse.rehearse)
app.command("describe", cls=Command)(describe.describe)
