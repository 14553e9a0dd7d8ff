"""`oakum history`."""

from enum import StrEnum
from typing import Annotated

import typer

from oakum.cli.audit import Html, Ledger, MediumId, Overwrite
from oakum.cli.options import Json, Quiet
from oakum.cli.output import emit
from oakum.errors import UsageError


class Export(StrEnum):
    """The forms in which the ledger's entries can be had."""

    JSONL = "jsonl"
    CSV = "csv"
    PREMIS = "premis"


def history(
    ledger: Ledger = None,
    medium_id: MediumId = None,
    threshold: Annotated[
        float,
        typer.Option(
            "--threshold", metavar="CHANCE", min=1e-12, max=0.5, help="The chance of loss to stay below."
        ),
    ] = 0.001,
    export: Annotated[
        Export | None,
        typer.Option("--export", metavar="FORM", help="Print all entries instead: jsonl, csv or premis."),
    ] = None,
    html: Html = None,
    overwrite: Overwrite = False,
    json: Json = False,
    quiet: Quiet = False,
) -> None:  # fmt: skip
    """Show how a medium's errors have grown, and by when to refresh it."""
    if export is not None and (json or html is not None):
        raise UsageError("--export prints the entries as they are; leave out --json and --html")
    from oakum.ledger import default_path

    path = ledger or default_path()
    if export is not None:
        from oakum.jobs.export import export_entries

        emit(export_entries(path, medium_id, str(export)))
        return
    from oakum.jobs.history import history as job
    from oakum.report import audit_json
    from oakum.report import json as documents
    from oakum.report.text import audit as texts

    save = None
    if html is not None:
        from oakum.jobs.pages import PageFile

        save = PageFile(html, overwrite=overwrite)
    trends = job(path, medium_id, threshold=threshold)
    if json:
        emit(documents.dump(audit_json.history_document(trends)) + "\n")
    elif not quiet:
        emit(texts.history_text(trends))
    if save is not None:
        from oakum.report.html import history_page

        save.write(history_page(trends))
