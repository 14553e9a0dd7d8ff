"""Runs the application: exit status, signals, and errors as one plain sentence."""

import gc
import io
import os
import signal
import sys
import time
import traceback
from collections.abc import Sequence
from types import FrameType
from typing import NoReturn

import typer

from oakum.cli.output import Stopped, complain
from oakum.errors import OakumError

FAULT_OF_OURS = 1
COULD_NOT = OakumError.status
# A second signal within this time is the same wish once more; it must not break the tidying up.
_SAME_WISH_SECONDS = 2.0

_CYCLES_AFTER = 100_000
"""Objects made before Python looks for cycles among them: it would do so after 700, over and over, while the
list of a large set's members grows, in which there are none."""


def main() -> NoReturn:
    """The console script. Signals end it with 128 + their number, after the jobs have tidied up."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):  # it is None where the parent has closed it
            stream.reconfigure(errors="backslashreplace")
    gc.set_threshold(_CYCLES_AFTER)
    # No command has a use for scipy, and for threads of BLAS; numba and numpy would spend a fifth of a second
    # on getting them ready.
    sys.modules.setdefault("scipy", None)  # type: ignore[arg-type]
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    _turn_signals_into_exceptions()
    try:
        status = run(sys.argv[1:])
    except Stopped as stop:
        # Not sys.exit: it would wait for threads that are still at work on what nobody wants any more.
        os._exit(128 + stop.signal)
    sys.exit(status)


def run(arguments: Sequence[str]) -> int:
    """Runs one command and returns its exit status; every error has been told on standard error."""
    from oakum.cli.app import app

    try:
        status = app(args=list(arguments), prog_name="oakum", standalone_mode=False)
        return status if isinstance(status, int) else 0
    except SystemExit:
        # In this mode the parser leaves so only when the reader of its help text has gone.
        raise Stopped(signal.SIGPIPE) from None
    except typer.TyperException as error:
        complain(_usage_sentence(error))
        return error.exit_code
    except OakumError as error:
        complain(str(error))
        return error.status
    except BrokenPipeError:
        raise Stopped(signal.SIGPIPE) from None
    except OSError as error:
        complain(_system_sentence(error))
        return COULD_NOT
    except MemoryError:
        complain("there is not enough memory; try a smaller --memory or fewer --jobs")
        return COULD_NOT
    except Exception as error:
        return _own_fault(error)


def _own_fault(error: Exception) -> int:
    if os.environ.get("OAKUM_DEBUG") == "1":
        traceback.print_exception(error)
    what = f"{type(error).__name__}: {error}" if str(error) else type(error).__name__
    complain(f"a fault of oakum itself, please report it ({what}); OAKUM_DEBUG=1 shows where it arose")
    return FAULT_OF_OURS


def _usage_sentence(error: typer.TyperException) -> str:
    message = error.format_message().strip().rstrip(".")
    message = message[:1].lower() + message[1:]
    context = getattr(error, "ctx", None)
    command = context.command_path if context is not None else "oakum"
    return f"{message}; see {command} --help"


def _system_sentence(error: OSError) -> str:
    reason = (error.strerror or str(error)).lower()
    if error.filename is None:
        return f"reading or writing failed: {reason}"
    return f"{os.fsdecode(error.filename)}: {reason}"


def _turn_signals_into_exceptions() -> None:
    last = -_SAME_WISH_SECONDS

    def stop(number: int, _frame: FrameType | None) -> None:
        nonlocal last
        now = time.monotonic()
        if now - last >= _SAME_WISH_SECONDS:
            last = now
            raise Stopped(number)

    for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP):
        # One that the parent has set to be ignored (nohup, a shell's background job) stays ignored.
        if signal.getsignal(number) is not signal.SIG_IGN:
            signal.signal(number, stop)
