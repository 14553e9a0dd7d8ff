"""Sections that are lost whole: where their data is as it was, the sidecar comes back byte for byte.

What proves it is in the format: a section's record holds the identity of the one before, which is a hash of
that one's record and member table, and the table holds SHA-256 (oakum-sidecar(5)).
"""

from __future__ import annotations

import io
import os
import shutil
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from pathlib import Path

import pytest
from support import content, overwritten, plant, rewrite, snapshot

from oakum import CannotCheck, protect, protect_pipe, repair, roll_back, verify
from oakum.geometry import CELL
from oakum.jobs.opening import open_set
from oakum.results import MemberState, Outcome
from oakum.sidecar.bootstrap import HEAD_BYTES, MARKER, encode
from oakum.sidecar.layout import TEXT_BYTES
from oakum.sidecar.reading import Section

CODE = "RS(60,40)+EH(128,120)"
WINDOW = 40 * CELL


@dataclass
class Shelf:
    """A protected folder of six windows, its sidecar as it was written, and its sections."""

    folder: Path
    target: Path
    whole: bytes
    sections: list[Section]

    @property
    def sidecar(self) -> Path:
        """The sidecar's path."""
        return self.folder / f"{self.target.name}.oakum"

    def damage(self, place: int, length: int = 3000) -> None:
        """Overwrite a range of the stream, which lies in one member."""
        files = [self.target] if self.target.is_file() else [
            p for p in sorted(self.target.rglob("*"), key=os.fsencode) if p.is_file() and not p.is_symlink()
        ]  # fmt: skip
        for path in files:
            size = path.stat().st_size
            if place < size:
                rewrite(path, overwritten(path.read_bytes(), place, length))
                return
            place -= size


def one_member(folder: Path) -> Path:
    plant(folder / "set", {"a": content(5000, 1), "large.tar": content(950_000, 2), "z": content(3, 3)})
    protect([folder / "set"], code=CODE, depth=CELL)
    return folder / "set"


def many_members(folder: Path) -> Path:
    """Whole files, folders, a link and empty files lie in every window and on its bounds."""
    files = {f"{i:02}/{j}": content(20_480, 10 * i + j + 4) for i in range(6) for j in range(8)}
    empty = {f"{i:02}/{j}-empty": b"" for i in range(6) for j in range(8)}
    plant(folder / "set", files | empty | {"03/hollow/": b""})
    (folder / "set/03/link").symlink_to("../00/0")
    protect([folder / "set"], code=CODE, depth=CELL)
    return folder / "set"


def pipe(folder: Path) -> Path:
    data = content(950_000, 2)
    plant(folder, {"backup": data})
    protect_pipe(io.BytesIO(data), name="backup", output=folder / "backup.oakum", code=CODE, depth=CELL)
    return folder / "backup"


@pytest.fixture(params=[one_member, many_members, pipe])
def shelf(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[Shelf]:
    yield made(request.param, tmp_path / "shelf")


def made(make: Callable[[Path], Path], folder: Path) -> Shelf:
    target = make(folder)
    opened = open_set(folder / f"{target.name}.oakum", None)
    opened.close()
    assert len(opened.sections) == 6
    return Shelf(folder, target, (folder / f"{target.name}.oakum").read_bytes(), opened.sections)


def cut_out(sidecar: bytearray, section: Section) -> None:
    del sidecar[section.base : section.end]


def overwrite(sidecar: bytearray, section: Section) -> None:
    sidecar[section.base : section.end] = content(section.layout.size, 9)


def keep_one_head(sidecar: bytearray, section: Section) -> None:
    """Only the first stretch's head can be read, and a third of the parity: the records are lost."""
    start, stop = section.base + TEXT_BYTES + HEAD_BYTES, section.end - section.layout.size // 4
    sidecar[start:stop] = content(stop - start, 9)


LOSSES = [cut_out, overwrite, keep_one_head]
Loss = Callable[[bytearray, Section], None]


def lose(shelf: Shelf, loss: Loss, *windows: int) -> None:
    hurt = bytearray(shelf.whole)
    for window in sorted(windows, reverse=True):
        loss(hurt, shelf.sections[window])
    rewrite(shelf.sidecar, bytes(hurt))


@pytest.mark.parametrize("windows", [(0,), (1, 2), (0, 3, 4)])
@pytest.mark.parametrize("loss", LOSSES)
def test_they_are_written_anew_from_data_that_is_right(
    shelf: Shelf, tmp_path: Path, loss: Loss, windows: tuple[int, ...]
) -> None:
    original = snapshot(shelf.target) if shelf.target.is_dir() else shelf.target.read_bytes()
    lose(shelf, loss, *windows)
    seen = verify(shelf.target)
    assert seen.outcome is Outcome.CORRECTABLE
    assert {m.state for m in seen.members} == {MemberState.INTACT}
    assert sum("written anew" in note for note in seen.notes) == 1
    (tmp_path / "out").mkdir()
    result = repair(shelf.target, output=tmp_path / "out")
    assert result.outcome is Outcome.CORRECTABLE
    assert result.sidecar.mended is not None
    assert result.sidecar.mended.read_bytes() == shelf.whole
    out = tmp_path / "out" / shelf.target.name
    assert (snapshot(out) if out.is_dir() else out.read_bytes()) == original


@pytest.mark.parametrize("loss", LOSSES)
def test_damage_elsewhere_is_put_right_first(shelf: Shelf, tmp_path: Path, loss: Loss) -> None:
    """The last window keeps a head or follows the lost one: both prove what the others said."""
    lost = 4 if loss is not keep_one_head else 5
    original = snapshot(shelf.folder)
    shelf.damage(WINDOW + 5000)
    lose(shelf, loss, lost)
    result = repair(shelf.target, in_place=True)
    assert result.outcome is Outcome.CORRECTABLE
    assert {n: d for n, d in snapshot(shelf.folder).items() if n in original} == original
    roll_back(shelf.target)
    assert shelf.sidecar.read_bytes() != shelf.whole
    (tmp_path / "out").mkdir()
    result = repair(shelf.target, output=tmp_path / "out")
    out = tmp_path / "out" / shelf.target.name
    before = {n.removeprefix("set/"): d for n, d in original.items() if n.startswith("set/")}
    assert (snapshot(out) if out.is_dir() else out.read_bytes()) == (before or original["backup"])
    assert (tmp_path / "out" / shelf.sidecar.name).read_bytes() == shelf.whole


@pytest.mark.parametrize("loss", LOSSES)
def test_data_that_is_not_right_proves_nothing(shelf: Shelf, tmp_path: Path, loss: Loss) -> None:
    """Nothing is vouched for then, and it is said; what other windows hold comes back all the same."""
    shelf.damage(3 * WINDOW + 5000, 100)
    received = snapshot(shelf.folder)
    lose(shelf, loss, 3)
    seen = verify(shelf.target)
    assert seen.outcome is Outcome.UNCORRECTABLE
    assert any("window 3 is lost" in note and "neither found nor put right" in note for note in seen.notes)
    assert repair(shelf.target).outcome is Outcome.UNCORRECTABLE
    assert {**snapshot(shelf.folder), shelf.sidecar.name: shelf.whole} == received
    (tmp_path / "out").mkdir()
    result = repair(shelf.target, output=tmp_path / "out", accept_loss=True)
    assert result.outcome is Outcome.UNCORRECTABLE
    assert result.sidecar.mended is None
    for name, data in snapshot(tmp_path / "out").items():
        assert data == received[name]


@pytest.mark.parametrize("loss", [cut_out, overwrite])
def test_the_last_one_cannot_be_told(shelf: Shelf, loss: Loss) -> None:
    lose(shelf, loss, 5)
    seen = verify(shelf.target)
    assert seen.outcome is Outcome.UNCORRECTABLE
    assert any("nothing is left that says" in note for note in seen.notes)
    assert repair(shelf.target).sidecar.mended is None


@pytest.mark.parametrize("change", ["renamed", "newer", "gone", "added", "unreadable"])
def test_members_of_lost_windows_alone_must_be_as_they_were(tmp_path: Path, change: str) -> None:
    shelf = made(many_members, tmp_path / "shelf")
    lose(shelf, overwrite, 2)
    victim, listed = shelf.target / "02/2", None
    match change:
        case "renamed":
            victim.rename(victim.with_name("2-other"))
        case "newer":
            os.utime(victim)
        case "gone":
            victim.unlink()
        case "added":
            victim.with_name("2-copy").write_bytes(b"")
        case "unreadable":
            (tmp_path / "bad.csv").write_text("set/02/2,5,1\nset/02/0,5,1\nset/01/7,5,1\n")
            listed = tmp_path / "bad.csv"
    seen = verify(shelf.target, unreadable=listed)
    assert seen.outcome is Outcome.UNCORRECTABLE
    assert "set/02/2" not in {m.path for m in seen.members}


def test_a_file_added_to_other_windows_does_not_matter(tmp_path: Path) -> None:
    shelf = made(many_members, tmp_path / "shelf")
    lose(shelf, overwrite, 2)
    (shelf.target / "00/0-copy").write_bytes(content(70))
    assert verify(shelf.target).outcome is Outcome.CORRECTABLE


@pytest.mark.parametrize(
    "changes",
    [
        {"window": 1 << 50},
        {"window": 1 << 50, "stream_length": 1 << 59, "start": 0},
        {"window": 40},
        {"stream_length": 1 << 59},
        {"set_depth": 0},
        {"set_depth": CELL + 64},
        {"set_depth": 1 << 40},
        {"flags": 0},
    ],
)
def test_a_last_record_that_tells_stories_is_not_believed(tmp_path: Path, changes: dict[str, int]) -> None:
    """And costs no time: there is no list of windows as long as it says."""
    shelf = made(one_member, tmp_path / "shelf")
    last = shelf.sections[5]
    forged = replace(last.bootstrap, **changes).identified(last.table_bytes())
    hurt = bytearray(shelf.whole)
    for stretch in range(last.layout.stretches):
        at = last.base + last.layout.stretch_start(stretch)
        hurt[at : at + HEAD_BYTES] = MARKER + encode(replace(forged, stretch=stretch).pack())
    overwrite(hurt, shelf.sections[2])
    rewrite(shelf.sidecar, bytes(hurt))
    try:
        assert verify(shelf.target).outcome is Outcome.UNCORRECTABLE
    except CannotCheck:
        assert changes["window"] > 5


def test_something_else_in_the_place_of_the_set(tmp_path: Path) -> None:
    shelf = made(pipe, tmp_path / "shelf")
    lose(shelf, overwrite, 0)
    shelf.target.unlink()
    os.mkfifo(shelf.target)
    with pytest.raises(CannotCheck, match="medium"):
        verify(shelf.sidecar)


def test_a_sidecar_without_its_set(tmp_path: Path) -> None:
    """Nothing of a lost section can be told when the members are not there."""
    shelf = made(many_members, tmp_path / "shelf")
    lose(shelf, overwrite, 2)
    shutil.move(shelf.target, tmp_path / "elsewhere")
    with pytest.raises(CannotCheck, match="medium"):
        verify(shelf.sidecar)
