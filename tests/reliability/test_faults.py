"""Every call fails once: no command breaks a promise, whichever it was.

For each command the calls that touch its files are counted, and it is run as often as there are calls, each
time with another one failing, once only and from then on. After every run: members as they were (or brought
back by the journal), the sidecar old or new and whole, no temporary file, success only with right results.
"""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest
from commands import CASES, Case, calls
from faults import Faults
from support import snapshot

from oakum import OakumError


@pytest.mark.parametrize("case", CASES, ids=lambda c: c.__name__)
@pytest.mark.parametrize("how", ["once", "for_good", "short"])
def test_every_call_fails(tmp_path: Path, long: bool, case: type[Case], how: str) -> None:
    names = ("preadv", "pread", "pwrite") if how == "short" else None
    total, n, step = 1, 1, 1
    while n <= total:
        folder = tmp_path / "run"
        this = case(folder)
        this.prepare()
        before = snapshot(folder)
        faults = Faults(folder, at=n, for_good=how == "for_good", short=how == "short")
        if names is not None:
            faults.names = names
        with pytest.MonkeyPatch.context() as patch:
            faults.install(patch)
            try:
                succeeded = this.run()
            except (OakumError, OSError):  # The command line ends both with 30.
                succeeded = False
        if "unlink" in faults.failed:  # Then it cannot be helped; the next run takes it away.
            for leftover in folder.rglob(".*.oakum-part"):
                leftover.unlink()
        note = f"call {n} of {faults.count}: {faults.failed}"
        try:
            this.check(before, succeeded)
            # Threads take turns as they like, and so a run may need a call less than the one before.
            assert faults.failed or n > faults.count, "the call that should fail was never made"
            assert succeeded or how != "short"
        except (AssertionError, OakumError) as error:
            raise AssertionError(note) from error
        if n == 1:
            total = faults.count if how == "short" else calls(case, tmp_path / "count")
            step = 1 if long else max(1, total // (8 if how == "short" else 20))
        shutil.rmtree(folder)
        n += step


def test_the_seam_seescalls(tmp_path: Path) -> None:
    assert all(calls(case, tmp_path / case.__name__) > 30 for case in CASES)
