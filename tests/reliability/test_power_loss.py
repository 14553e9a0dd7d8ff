"""Power loss: of what was not synced any part may be missing. The result is all old or all new.

Every file's changes are recorded; then for points all along the run the states are built that a medium could
be in, with none, some or all of the unsynced changes, and the promises are held against each.
"""

from __future__ import annotations

import shutil
from pathlib import Path

import numpy as np
import pytest
from commands import GOOD, Case, InPlace, Protect, ProtectAgain, Repair
from recording import Recorder
from support import snapshot

from oakum import repair, roll_back, verify
from oakum.results import Outcome

COMMANDS: list[type[Case]] = [Protect, ProtectAgain, Repair, InPlace]


@pytest.mark.parametrize("case", COMMANDS, ids=lambda c: c.__name__)
def test_all_old_or_all_new(tmp_path: Path, long: bool, case: type[Case]) -> None:
    folder = tmp_path / "run"
    this = case(folder)
    this.prepare()
    before = snapshot(folder)
    recorder = Recorder(folder)
    with pytest.MonkeyPatch.context() as patch:
        recorder.install(patch)
        assert this.run()
    after = snapshot(folder)
    luck = np.random.default_rng(5)
    points = len(recorder.events)
    assert points > 20
    tried = 0
    for upto in [*range(0, points, 1 if long else max(1, points // 25)), points]:
        for kept in (0.0, 0.5, 0.9, 1.0):
            target = tmp_path / "lost"
            target.mkdir()
            recorder.after_loss(upto, luck, kept, target)
            try:
                _check(this, target, before, after)
            except BaseException as error:
                raise AssertionError(f"power lost after event {upto} of {points}, kept {kept}") from error
            shutil.rmtree(target)
            tried += 1
    recorder.after_loss(points, luck, 0.0, tmp_path / "end")
    assert (after["set.oakum"] == snapshot(tmp_path / "end")["set.oakum"]) or case is Repair
    assert tried > 80


def _check(
    case: Case, folder: Path, before: dict[str, bytes | str | None], after: dict[str, bytes | str | None]
) -> None:
    now = {n: d for n, d in snapshot(folder).items() if "oakum-part" not in n}
    if isinstance(case, InPlace):
        if "set.oakum.journal" not in now:
            assert now == before
            return
        roll_back(folder / "set")
        now = {n: d for n, d in snapshot(folder).items() if "oakum-part" not in n}
        assert now == before
        assert repair(folder / "set", in_place=True, even_newer=True).outcome is Outcome.CORRECTABLE
        assert GOOD.items() <= snapshot(folder).items()
        return
    assert {n: now[n] for n in before if n != "set.oakum"} == {
        n: d for n, d in before.items() if n != "set.oakum"
    }
    assert now.get("set.oakum") in (before.get("set.oakum"), after.get("set.oakum"))
    new = {n: d for n, d in now.items() if n not in before}
    assert new.items() <= after.items(), "a new file has its name only when all of it is there"
    if "set.oakum" in now and not isinstance(case, Repair):
        assert verify(folder / "set").sidecar.state is Outcome.INTACT
