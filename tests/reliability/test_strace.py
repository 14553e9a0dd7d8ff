"""The same faults from outside: `strace` lets system calls of the installed tool fail, or kills it there.

Long, since every try is a process of its own: run with --long.
"""

from __future__ import annotations

import shutil
import subprocess
import sys
from collections import Counter
from collections.abc import Sequence
from pathlib import Path

import pytest
from commands import CASES, Case, Verify
from support import snapshot

ARGUMENTS = {
    "Protect": ["protect", "set"],
    "ProtectAgain": ["protect", "set", "--overwrite"],
    "Verify": ["verify", "set"],
    "Repair": ["repair", "set"],
    "RepairElsewhere": ["repair", "set", "--output", "out"],
    "InPlace": ["repair", "set", "--in-place"],
    "RollBack": ["repair", "set", "--roll-back"],
}
CALLS = (
    "preadv",
    "preadv2",
    "pread64",
    "pwrite64",
    "fsync",
    "ftruncate",
    "linkat",
    "renameat",
    "unlinkat",
    "mkdirat",
)


def traced(case: Case, *inject: str, program: Sequence[str] = ()) -> tuple[int, Counter[str]]:
    """Run the command (or another) under strace; its exit status and how often it made each call."""
    log = case.folder.parent / "log"
    oakum = ["-m", "oakum", *ARGUMENTS[type(case).__name__], "--quiet", "--jobs", "1"]
    command = [sys.executable, *(program or oakum)]
    trace = ["strace", "-f", "-o", str(log), "-e", f"trace={','.join(CALLS)}", *inject]
    done = subprocess.run([*trace, *command], cwd=case.folder, stderr=subprocess.DEVNULL)
    lines = log.read_text().splitlines()
    return done.returncode, Counter(line.split()[1].split("(")[0] for line in lines if "(" in line)


def works() -> bool:
    """Whether strace is there and may trace."""
    return (
        shutil.which("strace") is not None
        and not subprocess.run(["strace", "-o", "/dev/null", "true"], capture_output=True).returncode
    )


@pytest.mark.parametrize("case", CASES, ids=lambda c: c.__name__)
def test_failing_system_calls(tmp_path: Path, long: bool, case: type[Case]) -> None:
    if not long or not works():
        pytest.skip("long, and needs strace")
    first = case(tmp_path / "count")
    first.prepare()
    status, counts = traced(first)
    assert status in (0, 10)
    loading = traced(first, program=["-c", "import numpy"])[1]  # Calls of the dynamic linker, not ours.
    tried = 0
    for call in CALLS:
        for number in range(loading[call] + 1, counts[call] + 1, max(1, counts[call] // 8)):
            folder = tmp_path / "run"
            this = case(folder)
            this.prepare()
            before = snapshot(folder)
            error = "ENOSPC" if call in ("pwrite64", "ftruncate", "mkdirat") else "EIO"
            status, _ = traced(this, "-e", f"inject={call}:error={error}:when={number}")
            assert status in (0, 10, 20, 30), (call, number)
            this.sidecar = folder / "set.oakum"
            try:
                if case is not Verify:
                    good = status == 0 or (status == 10 and "roll-back" in ARGUMENTS[case.__name__][-1])
                    this.check(before, good)
                else:
                    assert snapshot(folder) == before
            except AssertionError as wrong:
                raise AssertionError(f"{call} number {number}, status {status}") from wrong
            shutil.rmtree(folder)
            tried += 1
    assert tried > 5
