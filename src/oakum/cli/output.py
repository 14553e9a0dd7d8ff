"""What goes to standard output and standard error, and what happens when it cannot."""

import contextlib
import os
import signal
import sys

from oakum.errors import CannotCheck
from oakum.report.terminal import safe


class Stopped(BaseException):
    """A signal asks to stop. Not an `Exception`, so that no job takes it for an error of its own."""

    def __init__(self, number: int) -> None:
        super().__init__(number)
        self.signal = number


def emit(text: str) -> None:
    """Writes a report to standard output, whole and flushed. The text must be `safe` already."""
    if sys.stdout is not None:
        _write(text.encode(sys.stdout.encoding, "backslashreplace"))


def emit_bytes(content: bytes) -> None:
    """Writes lines that hold raw names to standard output; to a terminal only in their safe form."""
    if sys.stdout is None:
        return
    if sys.stdout.isatty():
        emit("\n".join(map(safe, content.decode(errors="surrogateescape").split("\n"))))
    else:
        _write(content)


def complain(sentence: str) -> None:
    """One sentence on standard error about what went wrong."""
    tell(f"oakum: {safe(sentence)}\n")


def tell(text: str) -> None:
    """Writes `text`, `safe` already, to standard error; if that is gone, there is nobody to tell."""
    with contextlib.suppress(OSError, ValueError):
        print(text, end="", file=sys.stderr, flush=True)


def _write(content: bytes) -> None:
    try:
        sys.stdout.flush()
        sys.stdout.buffer.write(content)
        sys.stdout.buffer.flush()
    except BrokenPipeError:
        _forget_output()
        raise Stopped(signal.SIGPIPE) from None
    except OSError as error:
        _forget_output()
        reason = (error.strerror or str(error)).lower()
        raise CannotCheck(f"the report could not be written to standard output: {reason}") from error


def _forget_output() -> None:
    """Lets the interpreter flush what is left to nowhere at exit, instead of failing once more."""
    nowhere = os.open(os.devnull, os.O_WRONLY)
    os.dup2(nowhere, sys.stdout.fileno())
    os.close(nowhere)
