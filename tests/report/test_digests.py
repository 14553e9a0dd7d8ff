"""`describe --digests` writes what checksum tools read."""

import hashlib
import shutil
import subprocess
from dataclasses import replace
from pathlib import Path

import pytest

from oakum.report.digests import checksum_lines
from oakum.results import Description

NAMES = (b"plain", b"back\\slash", b"line\nbreak", b"return\rhere", b"odd\xff", b" blank", b"*star", b"\\n")


def test_escapes_as_the_coreutils_manual_says(described: Description) -> None:
    """GNU coreutils manual, md5sum invocation: a leading backslash, and \\\\ and \\n in the name; seen."""
    assert checksum_lines(described) == b"".join(
        [
            b"00" * 32 + b"  plates/a.tif\n",
            b"\\" + b"01" * 32 + b"  plates/back\\\\slash\n",
            b"\\" + b"02" * 32 + b"  plates/line\\nbreak\n",
            b"03" * 32 + b"  plates/odd\xff\n",
        ]
    )


@pytest.mark.skipif(shutil.which("sha256sum") is None, reason="needs sha256sum")
def test_sha256sum_agrees(described: Description, tmp_path: Path) -> None:
    template = described.members[0]
    members = []
    for name in NAMES:
        path = tmp_path / name.decode(errors="surrogateescape")
        path.write_bytes(name * 3)
        members.append(replace(template, raw_path=name, sha256=hashlib.sha256(name * 3).digest()))
    lines = checksum_lines(replace(described, members=tuple(members)))
    check = ["sha256sum", "--check", "--strict", "--quiet"]
    subprocess.run(check, input=lines, cwd=tmp_path, check=True)
    (tmp_path / "back\\slash").write_bytes(b"changed")
    assert subprocess.run(check, input=lines, cwd=tmp_path, capture_output=True).returncode == 1
