"""What `verify` and `repair` have in common: run the job, show its result."""

from collections.abc import Callable
from pathlib import Path

from oakum.cli.output import emit
from oakum.cli.progress import reporting
from oakum.errors import OakumError
from oakum.progress import Progress
from oakum.results import CheckResult
from oakum.throttle import reading_at


def check(
    command: str,
    target: Path,
    *,
    as_json: bool,
    quiet: bool,
    read_rate: int | None,
    job: Callable[[Progress], CheckResult],
) -> CheckResult:
    """Runs `job` under a progress display and writes its report; a failed one gets its document too."""
    from oakum.report import json, text

    try:
        with reporting(quiet) as progress, reading_at(read_rate):
            result = job(progress)
    except OakumError as error:
        if as_json:
            emit(json.dump(json.unchecked_document(command, str(target), str(error))) + "\n")
        raise
    if as_json:
        emit(json.dump(json.check_document(result)) + "\n")
    elif not quiet:
        emit(text.check_text(result))
    return result
