"""Long runs that were interrupted go on where they stopped, and give what an uninterrupted run gives."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from oakum import encoding
from oakum.errors import CannotCheck
from oakum.jobs import checking, resuming
from oakum.jobs.protect import protect
from oakum.jobs.verify import verify
from oakum.results import CheckResult, Outcome

SIDECAR = "plates.oakum"
STATE = "plates.oakum.unfinished"
TWICE = 38 << 20
"""So little memory that the set below is read twice."""


class Interrupted(BaseException):
    """As a signal is raised: no `Exception`."""


class Stopwatch:
    """A `Progress` that interrupts the run when so many bytes have been read."""

    def __init__(self, after: int = 1 << 62) -> None:
        self.left = after
        self.first = 0
        """The work of the first phase, which is reading."""

        self.notes: list[str] = []

    def phase(self, name: str, total: int | None) -> None:
        self.first = self.first or total or 0

    def advance(self, nbytes: int) -> None:
        self.left -= nbytes
        if self.left < 0:
            raise Interrupted

    def note(self, text: str) -> None:
        self.notes.append(text)


@pytest.fixture(autouse=True)
def eager(monkeypatch: pytest.MonkeyPatch) -> None:
    """Small sets keep a state as well, at every opportunity, and there are many of these."""
    monkeypatch.setattr(resuming, "LEAST", 1 << 20)
    monkeypatch.setattr(resuming, "INTERVAL", 0.0)
    monkeypatch.setattr(resuming, "SHARE", 0)
    monkeypatch.setattr(encoding, "CHUNK", 1 << 20)
    monkeypatch.setattr(checking, "CHUNK", 1 << 20)
    monkeypatch.setattr(checking, "RUN", 1 << 18)
    monkeypatch.setattr(encoding, "PIECE", 8 << 10)


@pytest.fixture
def plates(tmp_path: Path) -> Path:
    """24 MB: a large member that is neither first nor last, small ones, an empty one, a folder, a link."""
    rng = np.random.default_rng(11)
    root = tmp_path / "plates"
    (root / "box").mkdir(parents=True)
    for i in range(40):
        (root / "box" / f"{i:02}.tif").write_bytes(rng.bytes(1000 + 997 * i))
    (root / "c-empty").touch()
    (root / "d-large.tif").write_bytes(rng.bytes(18_000_001))
    (root / "e.tif").write_bytes(rng.bytes(5_000_000))
    (root / "f-link").symlink_to("e.tif")
    return root


def part_of(plates: Path) -> Path:
    """The unfinished sidecar."""
    (part,) = plates.parent.glob(".plates.oakum.*.oakum-part")
    return part


def depth_or_memory(depth: int | None) -> dict[str, Any]:
    return {"memory": TWICE} if depth is None else {"depth": depth}


@pytest.mark.parametrize("depth", [None, 8192])
@pytest.mark.parametrize("share", [0.3, 0.6, 0.9])
def test_an_interrupted_protect_goes_on(plates: Path, depth: int | None, share: float) -> None:
    options = depth_or_memory(depth)
    watch = Stopwatch()
    protect([plates], output=plates.parent / "whole.oakum", progress=watch, **options)
    whole = (plates.parent / "whole.oakum").read_bytes()

    with pytest.raises(Interrupted):
        protect([plates], progress=Stopwatch(int(share * watch.first)), **options)
    assert (plates.parent / STATE).exists() and part_of(plates).exists()
    assert not (plates.parent / SIDECAR).exists()

    again = Stopwatch()
    result = protect([plates], progress=again, **options)
    assert (plates.parent / SIDECAR).read_bytes() == whole
    assert again.first < watch.first
    assert any("an earlier run was interrupted" in note for note in result.notes)
    assert again.notes == [note for note in result.notes if "interrupted" in note]
    assert sorted(os.listdir(plates.parent)) == ["plates", SIDECAR, "whole.oakum"]


def facts_of(result: CheckResult) -> object:
    """All that a check found out, but for how long it took and what it skipped."""
    return result.outcome, result.totals, result.blocks, result.members, result.sidecar


@pytest.fixture
def damaged(plates: Path, request: pytest.FixtureRequest) -> Path:
    """A protected set with damage in the members and in the sidecar, and an absent member."""
    protect([plates], **depth_or_memory(request.param))
    rng = np.random.default_rng(12)
    for path, flips in ((plates / "d-large.tif", 60), (plates / "e.tif", 20), (plates.parent / SIDECAR, 30)):
        content = bytearray(path.read_bytes())
        for place in rng.integers(20_000, len(content), flips).tolist():
            content[place] ^= 1 << int(rng.integers(8))
        path.write_bytes(content)
    (plates / "box" / "07.tif").unlink()
    return plates


@pytest.mark.parametrize("damaged", [None, 8192], indirect=True)
@pytest.mark.parametrize("digests_only", [False, True])
@pytest.mark.parametrize("share", [0.2, 0.5, 0.95])
def test_an_interrupted_verify_goes_on(damaged: Path, digests_only: bool, share: float) -> None:
    watch = Stopwatch()
    expected = verify(damaged, digests_only=digests_only, progress=watch, fresh=True)
    # Decoding tells its progress too; the total of reading is the first one.
    with pytest.raises(Interrupted):
        verify(damaged, digests_only=digests_only, progress=Stopwatch(int(share * watch.first)))
    assert STATE in os.listdir(damaged.parent)

    again = Stopwatch()
    found = verify(damaged, digests_only=digests_only, progress=again)
    assert facts_of(found) == facts_of(expected)
    assert again.first < watch.first
    assert any("an earlier run was interrupted" in note for note in found.notes)
    assert sorted(os.listdir(damaged.parent)) == ["plates", SIDECAR]


def interrupted_protect(plates: Path) -> None:
    with pytest.raises(Interrupted):
        protect([plates], progress=Stopwatch(25_000_000), memory=TWICE)


def test_a_set_that_changed_is_protected_anew(plates: Path) -> None:
    interrupted_protect(plates)
    (plates / "box" / "03.tif").write_bytes(b"others")
    result = protect([plates], memory=TWICE)
    (note,) = result.notes
    assert note.startswith(f"{plates.parent / STATE} is what an interrupted run left")
    assert verify(plates).outcome is Outcome.INTACT
    assert sorted(os.listdir(plates.parent)) == ["plates", SIDECAR]


def test_a_member_touched_after_it_was_read_is_read_again(plates: Path) -> None:
    """Its content is the same length and its time of change was put back: the inode's own time tells."""
    interrupted_protect(plates)
    first = plates / "box" / "00.tif"
    was = first.stat()
    first.write_bytes(bytes(was.st_size))
    os.utime(first, ns=(was.st_atime_ns, was.st_mtime_ns))
    protect([plates], memory=TWICE)
    assert verify(plates).outcome is Outcome.INTACT


@pytest.mark.parametrize("damage", ["cut", "flipped", "rubbish", "empty", "no part"])
def test_a_state_of_no_use_is_not_used(plates: Path, damage: str) -> None:
    protect([plates], output=plates.parent / "whole.oakum", memory=TWICE)
    interrupted_protect(plates)
    state, part = plates.parent / STATE, part_of(plates)
    content = state.read_bytes()
    middle = len(content) // 2
    flipped = content[:middle] + bytes([content[middle] ^ 1]) + content[middle + 1 :]
    if damage == "no part":
        part.unlink()
    else:
        state.write_bytes(
            {"cut": content[:middle], "flipped": flipped, "rubbish": b"x", "empty": b""}[damage]
        )
    result = protect([plates], memory=TWICE)
    assert not any("interrupted; " in note for note in result.notes)
    assert (plates.parent / SIDECAR).read_bytes() == (plates.parent / "whole.oakum").read_bytes()
    assert sorted(os.listdir(plates.parent)) == ["plates", SIDECAR, "whole.oakum"]


def test_other_options_begin_anew(plates: Path) -> None:
    interrupted_protect(plates)
    assert len(protect([plates], code="slim", memory=TWICE).notes) == 1
    assert sorted(os.listdir(plates.parent)) == ["plates", SIDECAR]
    assert verify(plates).code.name == "slim"


def test_fresh_begins_anew(plates: Path) -> None:
    interrupted_protect(plates)
    watch = Stopwatch()
    assert protect([plates], memory=TWICE, fresh=True, progress=watch).notes == ()
    assert watch.notes == []
    assert sorted(os.listdir(plates.parent)) == ["plates", SIDECAR]


def test_a_run_that_fails_leaves_nothing(plates: Path) -> None:
    """Only who was interrupted wants to go on: here a member cannot be read to its end any more."""
    interrupted_protect(plates)

    class Cutting(Stopwatch):
        def advance(self, nbytes: int) -> None:
            os.truncate(plates / "e.tif", 100)

    with pytest.raises(CannotCheck):
        protect([plates], memory=TWICE, progress=Cutting())
    assert os.listdir(plates.parent) == ["plates"]


def test_a_second_run_does_not_take_the_state_of_one_that_lives(plates: Path) -> None:
    class Rival(Stopwatch):
        refused = ""

        def advance(self, nbytes: int) -> None:
            if not self.refused and (plates.parent / STATE).exists():
                with pytest.raises(CannotCheck) as refusal:
                    protect([plates], memory=TWICE)
                self.refused = str(refusal.value)

    rival = Rival()
    protect([plates], memory=TWICE, progress=rival)
    assert "another run is writing" in rival.refused
    assert verify(plates).outcome is Outcome.INTACT


def test_the_state_of_a_verify_goes_where_it_can_be_written(
    plates: Path, tmp_path_factory: pytest.TempPathFactory, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Something stands in the way beside the sidecar, as a medium that is read only would."""
    home = tmp_path_factory.mktemp("state")
    monkeypatch.setenv("XDG_STATE_HOME", str(home))
    protect([plates], memory=TWICE)
    (plates.parent / STATE / "in the way").mkdir(parents=True)
    with pytest.raises(Interrupted):
        verify(plates, progress=Stopwatch(12_000_000))
    assert len(list(home.glob("oakum/*.unfinished"))) == 1
    assert any("interrupted; " in note for note in verify(plates).notes)
    assert list(home.glob("oakum/*")) == []


def test_without_any_place_for_a_state_a_verify_goes_on_without(
    plates: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    protect([plates], memory=TWICE)
    (plates.parent / STATE / "in the way").mkdir(parents=True)
    monkeypatch.setenv("XDG_STATE_HOME", str(plates / "e.tif"))
    assert verify(plates).outcome is Outcome.INTACT


def test_a_verify_begins_anew_when_a_member_changed(plates: Path) -> None:
    protect([plates], memory=TWICE)
    with pytest.raises(Interrupted):
        verify(plates, progress=Stopwatch(12_000_000))
    content = bytearray((plates / "box" / "00.tif").read_bytes())
    content[10] ^= 1
    (plates / "box" / "00.tif").write_bytes(content)
    assert verify(plates).totals.bits_flipped == 1


PROGRAM = """
import sys
from oakum import encoding
from oakum.cli import main
from oakum.jobs import resuming
resuming.LEAST, resuming.INTERVAL, resuming.SHARE = 1 << 20, 0.0, 0
encoding.CHUNK, encoding.PIECE = 1 << 20, 8 << 10
main()
"""


@pytest.mark.parametrize("number", [signal.SIGKILL, signal.SIGTERM, signal.SIGINT])
def test_a_command_that_is_killed_goes_on(plates: Path, number: signal.Signals) -> None:
    command = [sys.executable, "-c", PROGRAM, "protect", "--memory", "38MiB"]
    protect([plates], output=plates.parent / "whole.oakum", memory=TWICE)
    process = subprocess.Popen(
        [*command, "--read-rate", "20MiB", str(plates)],
        stderr=subprocess.PIPE,
        preexec_fn=lambda: signal.signal(signal.SIGINT, signal.SIG_DFL),  # The tests may run under nohup.
    )
    while not (plates.parent / STATE).exists():
        assert process.poll() is None
        time.sleep(0.01)
    process.send_signal(number)
    process.communicate()
    assert process.returncode == (-number if number is signal.SIGKILL else 128 + number)
    ended = subprocess.run([*command, str(plates)], capture_output=True, text=True, check=True)
    assert "an earlier run was interrupted; " in ended.stdout
    assert (plates.parent / SIDECAR).read_bytes() == (plates.parent / "whole.oakum").read_bytes()
    assert sorted(os.listdir(plates.parent)) == ["plates", SIDECAR, "whole.oakum"]
