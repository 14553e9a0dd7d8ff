"""A sidecar as sturdy as the data: whatever a tenth of it suffers, data and sidecar come back.

Together with the damage to the sidecar the data is damaged inside what capacity is left: every parity strip
that lost a byte counts as erased, and a contiguous run of what the others can make good is overwritten.
"""

from __future__ import annotations

import re
import shutil
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
from support import content, overwritten, plant, rewrite, snapshot, with_flips

from oakum import protect, repair, verify
from oakum.geometry import CELL
from oakum.jobs.opening import open_set
from oakum.results import MemberState, Outcome

PIECE = 64 << 10
SIZE = 1_700_000
WINDOW = 223 * CELL


@dataclass
class Shelf:
    """A protected set, its sidecar's bytes, and a place to damage both in."""

    folder: Path
    whole: bytes
    windows: bool

    @property
    def sidecar(self) -> Path:
        """The sidecar's path."""
        return self.folder / "set.oakum"

    @property
    def data(self) -> Path:
        """The path of the large member."""
        return self.folder / "set/large.tar"


@pytest.fixture(scope="module", params=["shelf-whole", "shelf-windows", "plain-whole", "plain-windows"])
def shelf(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Shelf]:
    """One set for each code and depth; tests put back what they damage."""
    code, depth = request.param.split("-")
    folder = tmp_path_factory.mktemp(request.param)
    plant(folder / "set", {"a": content(5000, 1), "large.tar": content(SIZE, 2), "z": content(3, 3)})
    sidecar = protect([folder / "set"], code=code, depth=CELL if depth == "windows" else None).sidecar
    yield Shelf(folder, sidecar.read_bytes(), depth == "windows")


def capacity_left(shelf: Shelf, hurt: bytes) -> int:
    """Strips that can still be lost anywhere when the parity strips with a differing byte count as lost."""
    opened = open_set(shelf.sidecar, None)
    try:
        left = []
        for section in opened.sections:
            g, lost = section.geometry, np.zeros((section.geometry.r, section.geometry.blocks), bool)
            for j in range(g.r):
                for place, done, size in section.layout.body_extents(j * g.depth, g.depth):
                    at = section.base + place
                    now = np.frombuffer(hurt[at : at + size].ljust(size, b"\0"), np.uint8)
                    wrong = np.flatnonzero(now != np.frombuffer(shelf.whole[at : at + size], np.uint8))
                    lost[j, np.unique((done + wrong) // CELL)] = True
            left.append(g.r - int(lost.sum(axis=0).max()))
        return min(left)
    finally:
        opened.close()


def survive(shelf: Shelf, tmp_path: Path, hurt: bytes, strips: int) -> None:
    """Damage sidecar and data, repair to another folder, and compare every byte."""
    original, data = snapshot(shelf.folder / "set"), shelf.data.read_bytes()
    depth = CELL if shelf.windows else -(-(SIZE + 5003) // 223 // 64) * 64
    try:
        rewrite(shelf.sidecar, hurt)
        if strips > 0:
            length = strips * depth - 2 * CELL
            starts = range(CELL, SIZE - length, WINDOW) if shelf.windows else [300_000]
            damaged = data
            for start in starts:
                damaged = overwritten(damaged, start, length, seed=start)
            rewrite(shelf.data, with_flips(damaged, 20) if strips > 6 else damaged)
        seen = verify(shelf.folder / "set")
        result = repair(shelf.folder / "set", output=tmp_path / "out")
        assert seen.outcome is result.outcome is Outcome.CORRECTABLE
        assert seen.totals == result.totals
        assert snapshot(tmp_path / "out/set") == original
        assert (tmp_path / "out/set.oakum").read_bytes() == shelf.whole
        if hurt != shelf.whole and seen.sidecar.bits_flipped is not None and len(hurt) == len(shelf.whole):
            both = (np.frombuffer(b, np.uint8) for b in (hurt, shelf.whole))
            assert seen.sidecar.bits_flipped == int(np.bitwise_count(np.bitwise_xor(*both)).sum())
    finally:
        shutil.rmtree(tmp_path / "out", ignore_errors=True)
        rewrite(shelf.sidecar, shelf.whole)
        rewrite(shelf.data, data)


def section_length(shelf: Shelf) -> int:
    """Bytes of the first section."""
    opened = open_set(shelf.sidecar, None)
    opened.close()
    return opened.sections[0].layout.size


@pytest.mark.parametrize("with_data", [False, True], ids=["alone", "with-data"])
def test_a_tenth_is_overwritten_anywhere(shelf: Shelf, tmp_path: Path, long: bool, with_data: bool) -> None:
    """With windows a tenth of the sidecar can be more than a third of a section; then a tenth of that."""
    tenth = (section_length(shelf) if shelf.windows else len(shelf.whole)) // 10
    places = np.linspace(0, len(shelf.whole) - tenth, 200 if long else 9).astype(int)
    for start in places.tolist():
        hurt = overwritten(shelf.whole, start, tenth, seed=start)
        strips = int(capacity_left(shelf, hurt) * 0.8) if with_data else 0
        survive(shelf, tmp_path, hurt, strips)


@pytest.mark.parametrize("with_data", [False, True], ids=["alone", "with-data"])
def test_flips_all_over(shelf: Shelf, tmp_path: Path, long: bool, with_data: bool) -> None:
    """Flips at 8e-3. Parity strips are hardly ever right then; a fifth of the capacity is asked too."""
    for seed in range(20 if long else 1):
        hurt = with_flips(shelf.whole, int(8 * len(shelf.whole) * 8e-3), seed=seed)
        survive(shelf, tmp_path, hurt, 7 if with_data else 0)


LOSSES: dict[str, Callable[[bytes], bytes]] = {
    "the first 64 KiB cut off": lambda b: b[PIECE:],
    "the first 64 KiB zeroed": lambda b: bytes(PIECE) + b[PIECE:],
    "the last 64 KiB cut off": lambda b: b[:-PIECE],
    "the last 64 KiB zeroed": lambda b: b[:-PIECE] + bytes(PIECE),
    "a third cut off": lambda b: b[: 2 * len(b) // 3],
}


@pytest.mark.parametrize("with_data", [False, True], ids=["alone", "with-data"])
@pytest.mark.parametrize("loss", LOSSES)
def test_ends_are_lost(shelf: Shelf, tmp_path: Path, loss: str, with_data: bool) -> None:
    hurt = LOSSES[loss](shelf.whole)
    if shelf.windows and "third" in loss and with_data:
        pytest.skip("a whole window's parity goes with it: see the next test")
    aligned = bytes(PIECE) + hurt if loss == "the first 64 KiB cut off" else hurt
    strips = int(capacity_left(shelf, aligned) * 0.8) if with_data else 0
    survive(shelf, tmp_path, hurt, strips)


def test_what_goes_with_whole_windows_is_said(shelf: Shelf, tmp_path: Path) -> None:
    """Cut by a third, a sidecar of two windows can do nothing about damage in the second, and says so.

    What happens where the data of that window is right is tried in test_lost_sections.py.
    """
    if not shelf.windows:
        pytest.skip("one window")
    data = shelf.data.read_bytes()
    damaged = overwritten(data, WINDOW + 100_000, 30_000)
    try:
        rewrite(shelf.sidecar, shelf.whole[: 2 * len(shelf.whole) // 3])
        rewrite(shelf.data, damaged)
        seen = verify(shelf.folder / "set")
        assert any("neither found nor put right" in note for note in seen.notes)
        assert seen.sidecar.state is Outcome.UNCORRECTABLE
        assert {m.path: m.state for m in seen.members}["set/a"] is MemberState.INTACT
        result = repair(shelf.folder / "set", output=tmp_path / "out", accept_loss=True)
        assert result.sidecar.mended is None
        assert (tmp_path / "out/set/large.tar").read_bytes() == damaged
    finally:
        rewrite(shelf.sidecar, shelf.whole)
        rewrite(shelf.data, data)


def test_what_it_can_no_longer_do_is_said(shelf: Shelf) -> None:
    """While nothing else is wrong, verify tells how much less of the members could be lost."""
    tenth = section_length(shelf) // 10
    try:
        rewrite(shelf.sidecar, overwritten(shelf.whole, 60_000, tenth))
        (note,) = [n for n in verify(shelf.folder / "set").notes if "contiguous loss" in n]
        rewrite(shelf.sidecar, shelf.whole)
        assert not any("contiguous loss" in n for n in verify(shelf.folder / "set").notes)
    finally:
        rewrite(shelf.sidecar, shelf.whole)
    left, whole = (int(number.replace(",", "")) for number in re.findall(r"[0-9][0-9,]*", note))
    assert 0 < left < whole
