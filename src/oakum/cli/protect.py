"""`oakum protect`."""

import sys
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated

import typer

from oakum.cli.options import Depth, Fresh, Jobs, Json, Memory, Quiet, ReadRate, parse_size
from oakum.cli.output import emit, tell
from oakum.cli.progress import reporting
from oakum.errors import UsageError
from oakum.jobs import DEFAULT_MEMORY
from oakum.progress import Progress
from oakum.results import ProtectResult
from oakum.throttle import reading_at

PIPE = Path("-")
PIPE_DEPTH = 1 << 20


def protect(
    paths: Annotated[
        list[Path], typer.Argument(metavar="PATH", help="Files or folders; - reads standard input.")
    ],
    output: Annotated[
        Path | None,
        typer.Option("--output", "-o", metavar="FILE", help="The sidecar to write; PATH.oakum if not given."),
    ] = None,
    code: Annotated[
        str,
        typer.Option(
            "--code", "-c", metavar="CODE", help="slim, shelf, stout, plain, or RS(255,239)+EB(128,112)."
        ),
    ] = "shelf",
    depth: Depth = None,
    overwrite: Annotated[
        bool, typer.Option("--overwrite", help="Replace a sidecar that exists.", show_default=False)
    ] = False,
    name: Annotated[
        str | None, typer.Option("--name", metavar="NAME", help="Name of what comes through the pipe.")
    ] = None,
    read_back: Annotated[
        bool,
        typer.Option("--read-back", help="Read the new sidecar again and check it.", show_default=False),
    ] = False,
    bag: Annotated[
        bool,
        typer.Option(
            "--bag",
            help="PATH lies in a bag (BagIt): make the sidecar one of its tag files.",
            show_default=False,
        ),
    ] = False,
    fresh: Fresh = False,
    json: Json = False,
    quiet: Quiet = False,
    memory: Memory = DEFAULT_MEMORY,
    jobs: Jobs = None,
    read_rate: ReadRate = None,
) -> None:
    """Write the sidecar that protects files and folders."""
    options = _Options(code=code, depth=depth, overwrite=overwrite, memory=memory, jobs=jobs)
    if PIPE in paths:
        if paths != [PIPE]:
            raise UsageError(
                "- stands for standard input and goes alone; protect files with a call of their own"
            )
        if json and output == PIPE:
            raise UsageError("the sidecar and --json cannot both go to standard output; give --output a file")
        if bag:
            raise UsageError("--bag needs files that lie in a bag; what comes through a pipe lies nowhere")
        if read_back:
            raise UsageError("--read-back needs files; check what came through a pipe with oakum verify")
        with reporting(quiet) as progress, reading_at(read_rate):
            result = _protect_pipe(name, output, options, progress)
    else:
        if name is not None:
            raise UsageError("--name is for what comes through a pipe; files keep their own names")
        with reporting(quiet) as progress, reading_at(read_rate):
            result = _protect_files(paths, output, read_back, bag, fresh, options, progress)
    _report(result, as_json=json, quiet=quiet, on_stderr=output == PIPE)


@dataclass(frozen=True)
class _Options:
    """What protecting files and protecting a pipe have in common."""

    code: str
    depth: str | None
    overwrite: bool
    memory: int
    jobs: int | None


def _protect_files(
    paths: list[Path],
    output: Path | None,
    read_back: bool,
    bag: bool,
    fresh: bool,
    options: _Options,
    progress: Progress,
) -> ProtectResult:
    from oakum.jobs.protect import protect as job

    if output == PIPE:
        raise UsageError("only a pipe's sidecar can go to standard output; give --output a file")
    return job(
        paths,
        output=output,
        code=options.code,
        depth=None if options.depth in (None, "whole") else parse_size(options.depth),
        overwrite=options.overwrite,
        read_back=read_back,
        bag=bag,
        fresh=fresh,
        memory=options.memory,
        jobs=options.jobs,
        progress=progress,
    )


def _protect_pipe(
    name: str | None, output: Path | None, options: _Options, progress: Progress
) -> ProtectResult:
    from oakum.jobs.pipe import protect_pipe as job

    if name is None:
        raise UsageError("what comes through a pipe has no name; give it one, such as --name backup.tar")
    if options.depth == "whole":
        raise UsageError("a pipe cannot be read as a whole; give --depth a size, such as 1MiB")
    return job(
        sys.stdin.buffer,
        name=name,
        output=sys.stdout.buffer if output == PIPE else output or Path(f"{name}.oakum"),
        code=options.code,
        depth=PIPE_DEPTH if options.depth is None else parse_size(options.depth),
        overwrite=options.overwrite,
        memory=options.memory,
        jobs=options.jobs,
        progress=progress,
    )


def _report(result: ProtectResult, *, as_json: bool, quiet: bool, on_stderr: bool) -> None:
    from oakum.report import json, text

    if as_json:
        emit(json.dump(json.protect_document(result)) + "\n")
    elif not quiet:
        report = text.protect_text(result)
        if on_stderr:
            tell(report)
        else:
            emit(report)
