"""SIGKILL at every call that changes something: the journal or the old file stands, the next run works.

The command runs in a child process that ends before its N-th such call, as the kernel would end it. Larger
runs, with several threads and a state to go on from, are killed from outside at random moments.
"""

from __future__ import annotations

import os
import shutil
import signal
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from commands import CASES, Case, InPlace, Protect, ProtectAgain, Repair, RollBack, Verify, calls
from faults import CHANGING, Faults
from support import content, overwritten, rewrite, snapshot, with_flips

from oakum import encoding, protect, repair, roll_back
from oakum.jobs import resuming
from oakum.results import Outcome


def killed_at(case: Case, number: int) -> bool:
    """Run the command in a child that dies at its call `number`; whether it died."""
    child = os.fork()
    if child == 0:
        status = 1
        try:
            Faults(case.folder, names=CHANGING, at=number, kill=True).install(pytest.MonkeyPatch())
            case.run()
            status = 0
        finally:
            os._exit(status)
    _, status = os.waitpid(child, 0)
    return os.WIFSIGNALED(status)


def leftovers(folder: Path) -> list[Path]:
    """Temporary files that the dead process left."""
    return list(folder.rglob(".*.oakum-part"))


@pytest.mark.parametrize("case", [c for c in CASES if c is not Verify], ids=lambda c: c.__name__)
def test_killed_at_every_call(tmp_path: Path, long: bool, case: type[Case]) -> None:
    total = calls(case, tmp_path / "count", CHANGING)
    assert total > 5
    for number in range(1, total + 1, 1 if long else max(1, total // 25)):
        folder = tmp_path / "run"
        this = case(folder)
        this.prepare()
        before = snapshot(folder)
        assert killed_at(this, number), number
        try:
            _check(this, before)
        except BaseException as error:
            raise AssertionError(f"killed at call {number} of {total}") from error
        shutil.rmtree(folder)


def _check(case: Case, before: dict[str, bytes | str | None]) -> None:
    """What stands is old or new; then the same command is run again, works, and leaves nothing temporary."""
    remains = {p: p.read_bytes() for p in leftovers(case.folder)}
    for path in remains:
        path.unlink()
    case.sidecar = case.folder / "set.oakum"
    if isinstance(case, Repair) and not isinstance(case, InPlace | RollBack):
        now = snapshot(case.folder)
        assert {name: now[name] for name in before} == before
        for path in [
            p for p in now if p not in before
        ]:  # Written already, and whole: in the way of another run.
            there = case.folder / path
            if there.is_file():
                there.unlink()
        shutil.rmtree(case.folder / "out", ignore_errors=True)
        before_again = snapshot(case.folder)
    else:
        before_again = before
        if type(case) in (Protect, ProtectAgain):
            case.check(before, False)
            if type(case) is Protect:
                case.sidecar.unlink(missing_ok=True)
    for path, data in remains.items():
        if path.parent.exists():
            path.write_bytes(data)
    journal = (case.folder / "set.oakum.journal").exists()
    if isinstance(case, RollBack):
        if journal:
            case.run()
        case.check(before, not journal)
    elif isinstance(case, InPlace):
        if journal:
            assert repair(case.folder / "set", in_place=True).outcome is Outcome.INTACT
        else:
            assert case.run()
        case.check(before, True) if not journal else _finished(case)
    else:
        assert case.run()
        case.check(before_again, True)
    assert not leftovers(case.folder) or isinstance(case, RollBack) or journal


def _finished(case: InPlace) -> None:
    """An interrupted repair in place was finished by the next run, and can still be undone."""
    from commands import GOOD

    now = snapshot(case.folder)
    assert now.pop("set.oakum.journal") is not None
    assert {k: v for k, v in now.items() if ".oakum-part" not in k} == {**GOOD, "set.oakum": case.whole}


# -- at any moment -----------------------------------------------------------------------------------

RUNS: dict[str, Callable[[Path], object]] = {
    "protect": lambda path: protect([path], jobs=2, memory=encoding.RESERVE + (4 << 20)),
    "repair": lambda path: repair(path, jobs=2),
    "in-place": lambda path: repair(path, in_place=True, jobs=2),
}


def killed_after(seconds: float, run: Callable[[Path], object], path: Path) -> bool:
    """Run in a child that is killed after some time; whether it was still at work."""
    child = os.fork()
    if child == 0:
        try:
            run(path)
        finally:
            os._exit(0)
    time.sleep(seconds)
    os.kill(child, signal.SIGKILL)
    return os.WIFSIGNALED(os.waitpid(child, 0)[1])


@pytest.mark.parametrize("command", RUNS)
def test_killed_at_any_moment(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, long: bool, command: str
) -> None:
    """After a kill every file is old, or new and whole; the next run ends as if there had been no kill."""
    monkeypatch.setattr(resuming, "LEAST", 1 << 20)
    monkeypatch.setattr(resuming, "INTERVAL", 0.0)
    monkeypatch.setattr(resuming, "SHARE", 0)
    monkeypatch.setattr(encoding, "CHUNK", 1 << 20)
    run, folder, data = RUNS[command], tmp_path / "set", content(12 << 20)
    folder.mkdir()
    (folder / "f").write_bytes(data)
    if command != "protect":
        protect([folder / "f"])
        rewrite(folder / "f", overwritten(with_flips(data, 2_000), 5_000_000, 300_000))
    before = snapshot(folder)
    shutil.copytree(folder, tmp_path / "start")

    def begin_again() -> None:
        shutil.rmtree(folder)
        shutil.copytree(tmp_path / "start", folder)

    length = 0.0
    for _ in range(2):  # The first one loads kernels.
        begin_again()
        begin = time.monotonic()
        run(folder / "f")
        length, after = time.monotonic() - begin, snapshot(folder)
    luck, killed = np.random.default_rng(8), 0
    for _ in range(150 if long else 5):
        begin_again()
        killed += killed_after(luck.uniform(0, length), run, folder / "f")
        now = {n: d for n, d in snapshot(folder).items() if n[0] != "." and not n.endswith(".unfinished")}
        if "f.oakum.journal" in now:
            roll_back(folder / "f")
            assert {n: d for n, d in snapshot(folder).items() if n[0] != "."} == before
        else:
            assert now in (before, after)
        if now != after or command == "in-place":
            run(folder / "f")
        assert snapshot(folder) == after
    assert killed
