"""Where reports go: terminals, odd encodings, raw names."""

import os
import subprocess
import sys
import textwrap

from oakum.report.terminal import safe

WRITES = """
    import sys
    from oakum.cli.output import emit, emit_bytes
    emit("caf\\u00e9 \\u6f22\\n")
    emit_bytes(b"raw \\xff\\x1b[2J\\n")
"""


def written(environment: dict[str, str], stdout: int = subprocess.PIPE) -> bytes:
    program = [sys.executable, "-c", textwrap.dedent(WRITES)]
    return subprocess.run(program, env=os.environ | environment, stdout=stdout, check=True).stdout


def test_a_pipe_gets_names_as_they_are() -> None:
    assert written({"PYTHONIOENCODING": "utf-8"}) == "café 漢\n".encode() + b"raw \xff\x1b[2J\n"


def test_an_encoding_that_lacks_a_letter_gets_its_escape() -> None:
    assert written({"PYTHONIOENCODING": "latin-1"}).startswith("café \\u6f22\n".encode("latin-1"))


def test_a_terminal_gets_nothing_that_it_obeys() -> None:
    ours, theirs = os.openpty()
    try:
        written({"PYTHONIOENCODING": "utf-8"}, stdout=theirs)
        shown = os.read(ours, 10_000).decode()
    finally:
        os.close(theirs)
        os.close(ours)
    assert "raw \\xff\\x1b[2J" in shown
    assert all(safe(line) == line for line in shown.split("\r\n"))
