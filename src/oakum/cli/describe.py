"""`oakum describe`."""

from pathlib import Path
from typing import Annotated

import typer

from oakum.cli.options import Jobs, Json, Memory, Quiet
from oakum.cli.output import complain, emit, emit_bytes
from oakum.errors import UsageError
from oakum.jobs import DEFAULT_MEMORY


def describe(
    sidecar: Annotated[Path, typer.Argument(metavar="SIDECAR", help="The sidecar.")],
    digests: Annotated[
        bool,
        typer.Option(
            "--digests", help="Only the SHA-256 of each file, as sha256sum -c reads it.", show_default=False
        ),
    ] = False,
    json: Json = False,
    quiet: Quiet = False,
    _memory: Memory = DEFAULT_MEMORY,  # taken as everywhere; a description needs little memory
    _jobs: Jobs = None,  # and one thread
) -> None:
    """Show what a sidecar says about itself; reads nothing else."""
    if json and digests:
        raise UsageError("--json and --digests exclude each other; the JSON document holds the digests too")
    from oakum.jobs.describe import describe as job
    from oakum.report import digests as digest_report
    from oakum.report import json as json_report
    from oakum.report import text

    description = job(sidecar)
    if json:
        emit(json_report.dump(json_report.description_document(description)) + "\n")
    elif digests:
        emit_bytes(digest_report.checksum_lines(description))
        if not quiet:
            for note in description.notes:
                complain(note)
    else:
        emit(text.description_text(description))
