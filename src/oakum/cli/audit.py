"""`oakum audit`."""

from pathlib import Path
from typing import Annotated

import typer

from oakum.cli.options import Jobs, Json, Memory, ReadRate, Root, Sidecar, Unreadable
from oakum.cli.output import complain, emit
from oakum.cli.progress import reporting
from oakum.jobs import DEFAULT_MEMORY
from oakum.results import Outcome
from oakum.throttle import reading_at

_STATUS = {Outcome.INTACT: 0, Outcome.CORRECTABLE: 10, Outcome.UNCORRECTABLE: 20, Outcome.UNCHECKED: 30}

Ledger = Annotated[
    Path | None,
    typer.Option("--ledger", metavar="FILE", help="The ledger; one in your state folder if not given."),
]
MediumId = Annotated[
    str | None, typer.Option("--medium-id", metavar="LABEL", help="The label of the medium in the ledger.")
]
Html = Annotated[
    Path | None, typer.Option("--html", metavar="FILE", help="Write a page with pictures as well.")
]
Overwrite = Annotated[
    bool, typer.Option("--overwrite", help="Replace an HTML page that exists.", show_default=False)
]


def parse_share(text: str | float) -> float:
    """A share from `5%` or `0.05`. Raises `typer.BadParameter`."""
    if isinstance(text, float):
        return text
    try:
        share = float(text.rstrip("%")) / (100 if text.endswith("%") else 1)
    except ValueError:
        share = 0.0
    if not 0 < share <= 1:
        raise typer.BadParameter(f"{text!r} is no share; write it like 5% or 0.05")
    return share


def parse_counter(text: str) -> tuple[str, float]:
    """A counter from `NAME=VALUE`. Raises `typer.BadParameter`."""
    name, _, value = text.partition("=")
    try:
        number = float(value)
        if not name or number != number or number in (float("inf"), float("-inf")):
            raise ValueError
    except ValueError:
        raise typer.BadParameter(f"{text!r} is no counter; write it like reallocated=12") from None
    return name, number


def audit(
    targets: Annotated[
        list[Path], typer.Argument(metavar="TARGET...", help="Protected files or folders, or sidecars.")
    ],
    sidecar: Sidecar = None,
    root: Root = None,
    unreadable: Unreadable = None,
    ledger: Ledger = None,
    medium_id: MediumId = None,
    counter: Annotated[
        list[str] | None,
        typer.Option("--counter", metavar="NAME=VALUE", help="A counter of the drive, kept with the entry."),
    ] = None,
    sample: Annotated[
        float,
        typer.Option(
            "--sample", metavar="SHARE", parser=parse_share, help="Read only such a share, as 5%.",
            show_default=False,
        ),
    ] = 1.0,
    seed: Annotated[
        int | None,
        typer.Option("--seed", metavar="N", min=0, help="Which share is read; the day decides if not given."),
    ] = None,
    resume: Annotated[
        bool,
        typer.Option("--resume", help="Go on with an audit that was stopped.", show_default=False),
    ] = False,
    html: Html = None,
    overwrite: Overwrite = False,
    json: Json = False,
    quiet: Annotated[
        bool, typer.Option("--quiet", "-q", help="Print one line (and JSON, if asked).", show_default=False)
    ] = False,
    memory: Memory = DEFAULT_MEMORY,
    jobs: Jobs = None,
    read_rate: ReadRate = None,
) -> int:  # fmt: skip
    """Read everything, estimate error rates, name likely causes, and enter it all in the ledger."""
    from oakum.jobs.audit import AuditOptions
    from oakum.jobs.audit import audit as job
    from oakum.ledger import default_path
    from oakum.report import audit_json
    from oakum.report import json as documents
    from oakum.report.text import audit as texts

    counters = tuple(parse_counter(text) for text in counter or ())
    save = None
    if html is not None:
        from oakum.jobs.pages import PageFile

        save = PageFile(html, overwrite=overwrite)
    options = AuditOptions(
        sidecar, root, unreadable, sample, seed, medium_id or "", counters, ledger or default_path(),
        resume, memory, jobs,
    )  # fmt: skip
    with reporting(quiet) as progress, reading_at(read_rate):
        result = job(targets, options, progress=progress)
    if json:
        emit(documents.dump(audit_json.audit_document(result)) + "\n")
    elif quiet:
        emit(texts.summary_line(result) + "\n")
    else:
        emit(texts.audit_text(result))
    if result.ledger_note:
        complain(f"no entry in the ledger: {result.ledger_note}")
    if save is not None:
        from oakum.report.html import audit_page

        save.write(audit_page(result))
    return _STATUS[result.outcome]
