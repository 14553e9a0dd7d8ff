"""SIGKILL at every call that changes something: the journal or the old file stands, the next run works.

The command runs in a child process that ends before its N-th such call, as the kernel would end it.
"""

from __future__ import annotations

import os
import shutil
from pathlib import Path

import pytest
from commands import CASES, Case, InPlace, Protect, ProtectAgain, Repair, RollBack, Verify, calls
from faults import CHANGING, Faults
from support import snapshot

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
            from oakum import repair

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
