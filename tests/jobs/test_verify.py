"""verify: what it finds, what it does not need, and which part of a damaged sidecar costs what."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from support import content, overwritten, plant, rewrite, snapshot, with_flips

from oakum import CannotCheck, FormatError, protect, repair, verify
from oakum.files import FileBytes
from oakum.results import MemberState, Outcome
from oakum.sidecar.reading import find_sections

WINDOWED = "RS(60,40)+EH(128,120)"
WINDOW = 40 * 4096


def windowed(tmp_path: Path, **files: bytes) -> tuple[Path, Path, list[tuple[int, int]]]:
    """A set cut into windows: the folder, its sidecar, and where each section lies in the sidecar."""
    folder = plant(tmp_path / "set", files)
    sidecar = protect([folder], code=WINDOWED, depth=4096).sidecar
    with FileBytes(sidecar) as source:
        return folder, sidecar, [(s.base, s.end) for s in find_sections(source)]


def states(result: object) -> dict[str, MemberState]:
    return {m.path: m.state for m in result.members}  # type: ignore[attr-defined]


def test_an_intact_set(tmp_path: Path) -> None:
    folder = plant(tmp_path / "set", {"a": content(100_000), "b": b"1", "c": b""})
    protect([folder])
    before = snapshot(tmp_path)
    result = verify(folder)
    assert snapshot(tmp_path) == before
    assert result.outcome is Outcome.INTACT
    assert (result.blocks, result.notes, result.weakest) == ((), (), 1.0)
    assert result.totals.bits_read == 8 * 100_001
    assert result.totals.blocks == result.totals.blocks_clean
    assert (result.sidecar.state, result.sidecar.bits_flipped) == (Outcome.INTACT, 0)
    assert set(states(result).values()) == {MemberState.INTACT}


@pytest.mark.parametrize("target", ["set", "set.oakum", "set/a", "."])
def test_the_target_may_be_the_set_a_member_or_the_sidecar(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, target: str
) -> None:
    folder = plant(tmp_path / "set", {"a": content(3000)})
    sidecar = protect([folder]).sidecar
    monkeypatch.chdir(tmp_path)
    given = None if target in ("set", "set.oakum") else sidecar
    assert verify(Path(target), sidecar=given).outcome is Outcome.INTACT


def test_a_sidecar_of_other_content(tmp_path: Path) -> None:
    for name in ("x.tar", "y.tar"):
        (tmp_path / name).write_bytes(content(2000))
    sidecar = protect([tmp_path / "y.tar"]).sidecar
    with pytest.raises(CannotCheck, match=r"y\.tar\.oakum does not protect .*x\.tar"):
        verify(tmp_path / "x.tar", sidecar=sidecar)
    sidecar.rename(tmp_path / "x.tar.oakum")
    for job in (verify, repair):
        with pytest.raises(CannotCheck, match="does not protect"):
            job(tmp_path / "x.tar")
    plant(tmp_path / "away", {})
    (tmp_path / "x.tar.oakum").rename(tmp_path / "away/y.tar.oakum")
    with pytest.raises(CannotCheck, match=f"--root {tmp_path}"):
        verify(tmp_path / "y.tar", sidecar=tmp_path / "away/y.tar.oakum")
    assert sorted(os.listdir(tmp_path)) == ["away", "x.tar", "y.tar"]


@pytest.mark.parametrize(
    ("name", "why"), [("nothing", "neither"), ("bare", "no sidecar"), ("nothing.oakum", "neither")]
)
def test_no_sidecar(tmp_path: Path, name: str, why: str) -> None:
    (tmp_path / "bare").write_bytes(b"1")
    with pytest.raises(CannotCheck, match=why):
        verify(tmp_path / name)


@pytest.mark.parametrize(
    "data", [b"", b"x", content(50_000), bytes(50_000)], ids=["empty", "one", "other", "zeros"]
)
def test_not_a_sidecar(tmp_path: Path, data: bytes) -> None:
    (tmp_path / "x.oakum").write_bytes(data)
    for job in (verify, repair):
        with pytest.raises(FormatError, match="not an oakum sidecar"):
            job(tmp_path / "x.oakum")
    assert os.listdir(tmp_path) == ["x.oakum"]


def test_folders_and_pipes_are_no_sidecars(tmp_path: Path) -> None:
    plant(tmp_path, {"x": b"1", "d.oakum/": b""})
    os.mkfifo(tmp_path / "p")
    for name in ("d.oakum", "p"):
        with pytest.raises(CannotCheck, match="is not a file"):
            verify(tmp_path / "x", sidecar=tmp_path / name)


def test_a_sidecar_without_permission(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "x").write_bytes(b"1")
    sidecar = protect([tmp_path / "x"]).sidecar
    through = os.open

    def refuse(path: object, *rest: object, **more: object) -> int:
        if os.fspath(path) == os.fspath(sidecar):  # type: ignore[call-overload]
            raise PermissionError(13, "Permission denied")
        return through(path, *rest, **more)  # type: ignore[arg-type]

    monkeypatch.setattr(os, "open", refuse)
    with pytest.raises(CannotCheck, match="permission denied"):
        verify(tmp_path / "x")


# -- digests only ----------------------------------------------------------------------------------


@pytest.mark.parametrize("size", [0, 1, 5000, 300_000])
def test_digests_only(tmp_path: Path, size: int) -> None:
    """Sets under 64 KiB have no digests of cells; they are decoded, and must not seem damaged."""
    folder = plant(tmp_path / "set", {"a": content(size), "b": content(7)})
    protect([folder])
    result = verify(folder, digests_only=True)
    assert result.outcome is Outcome.INTACT
    assert result.blocks == ()
    if size:
        rewrite(folder / "a", with_flips(content(size), 3))
        result = verify(folder, digests_only=True)
        assert (result.outcome, result.totals.bits_flipped) == (Outcome.CORRECTABLE, 3)
        assert states(result)["set/a"] is MemberState.ALTERED


def test_digests_only_with_a_small_last_window(tmp_path: Path) -> None:
    """The last of several windows is so short that it has no digests of cells."""
    data = content(2 * WINDOW + 3000)
    folder, _, places = windowed(tmp_path, a=data)
    assert len(places) == 3
    assert verify(folder, digests_only=True).outcome is Outcome.INTACT
    rewrite(folder / "a", with_flips(data, 4, within=(2 * WINDOW, len(data))))
    result = verify(folder, digests_only=True)
    assert (result.outcome, result.totals.bits_flipped) == (Outcome.CORRECTABLE, 4)
    assert states(result)["set/a"] is MemberState.ALTERED


def test_digests_only_past_capacity(tmp_path: Path) -> None:
    for size in (30_000, 300_000):
        (tmp_path / "f").write_bytes(content(size))
        protect([tmp_path / "f"], overwrite=True)
        rewrite(tmp_path / "f", overwritten(content(size), 0, size // 2))
        result = verify(tmp_path / "f", digests_only=True)
        assert result.outcome is Outcome.UNCORRECTABLE
        assert states(result)["f"] is MemberState.UNCORRECTABLE


# -- lost sections ---------------------------------------------------------------------------------


def test_losing_a_section_between_others_costs_only_its_window(tmp_path: Path) -> None:
    data = content(4 * WINDOW)
    folder, sidecar, places = windowed(tmp_path, a=data, b=content(1000, 9))
    assert len(places) == 5
    whole = sidecar.read_bytes()
    start, stop = places[1]
    sidecar.write_bytes(overwritten(whole, start, stop - start))
    result = verify(folder)
    assert set(states(result).values()) == {MemberState.INTACT}
    assert "of the sidecar's 5 sections 1 can no longer be read" in result.notes[0]
    assert result.sidecar.state is Outcome.CORRECTABLE
    rewrite(folder / "a", with_flips(data, 9, within=(2 * WINDOW, 3 * WINDOW)))
    result = repair(folder)
    assert (folder / "a.mended").read_bytes() == data
    assert result.totals.bits_flipped == 9
    assert result.sidecar.mended is not None
    assert result.sidecar.mended.read_bytes() == whole


def test_losing_the_end_costs_only_what_the_last_window_says(tmp_path: Path) -> None:
    data = content(2 * WINDOW + 5000)
    folder, sidecar, places = windowed(tmp_path, a=content(1000, 9), b=data)
    sidecar.write_bytes(sidecar.read_bytes()[: places[2][0]])
    rewrite(folder / "a", with_flips(content(1000, 9), 2))
    result = verify(folder)
    assert states(result)["set/a"] is MemberState.ALTERED
    assert "ends after window 1" in result.notes[0]
    assert repair(folder, members=["set/a"]).totals.bits_flipped == 2
    assert (folder / "a.mended").read_bytes() == content(1000, 9)


def test_losing_the_first_section(tmp_path: Path) -> None:
    folder, sidecar, places = windowed(tmp_path, a=content(2 * WINDOW), b=content(80_000, 2))
    whole = sidecar.read_bytes()
    sidecar.write_bytes(whole[places[1][0] :])
    rewrite(folder / "b", with_flips(content(80_000, 2), 11))
    result = verify(folder)
    assert states(result)["set/a"] is MemberState.INTACT
    assert states(result)["set/b"] is MemberState.ALTERED
    assert result.totals.bits_flipped == 11


def test_digests_that_are_lost_cost_time_but_no_data(tmp_path: Path) -> None:
    """Two thirds of the sidecar's records are gone: cells are unknown, and the SHA-256 decides."""
    folder = plant(tmp_path / "set", {"a": content(400_000), "b": content(50_000, 2)})
    sidecar = protect([folder]).sidecar
    whole = sidecar.read_bytes()
    with FileBytes(sidecar) as source:
        (section,) = find_sections(source)
        layout = section.layout
    hurt = np.frombuffer(whole, np.uint8).copy()
    for track in (2, 3):  # The digests of the data cells and of their inner parity.
        frame = layout.frame(type(next(layout.frames()).track)(track), 0)
        for place, row in layout.slice_extents(frame):
            if row % 45:
                length = layout.rows * frame.width
                hurt[place : place + length] = np.frombuffer(content(length, row), np.uint8)
    sidecar.write_bytes(hurt.tobytes())
    result = verify(folder)
    assert set(states(result).values()) == {MemberState.INTACT}
    assert result.totals.bits_flipped == 0
    assert result.totals.blocks_clean == result.totals.blocks
    rewrite(folder / "a", with_flips(content(400_000), 25))
    assert verify(folder).totals.bits_flipped == 25
    assert repair(folder).outcome is Outcome.CORRECTABLE
    assert (folder / "a.mended").read_bytes() == content(400_000)
    assert (tmp_path / "set.mended.oakum").read_bytes() == whole


# -- what is counted -------------------------------------------------------------------------------


def test_margins_say_how_close_it_was(tmp_path: Path) -> None:
    """One strip in a block unreadable is one erasure of r = 32 in each of its columns."""
    data = content(223 * 4096)
    (tmp_path / "f").write_bytes(data)
    protect([tmp_path / "f"])
    listed = tmp_path / "bad.csv"
    listed.write_text(f"f,{4096 * 7},4096\n")
    (block,) = verify(tmp_path / "f", unreadable=listed).blocks
    assert (block.bytes_erased, block.margin) == (4096, 1 - 1 / 32)
    # Two flips in one word are past the inner code: its two wrong bytes cost 2 of 32 each.
    hurt = bytearray(data)
    hurt[4096 * 9 + 100] ^= 1  # Strip 9: words begin at byte 9 of the cell, so that 99..113 are one word.
    hurt[4096 * 9 + 105] ^= 1
    rewrite(tmp_path / "f", bytes(hurt))
    (block,) = verify(tmp_path / "f").blocks
    assert (block.bits_flipped, block.symbols_wrong, block.margin) == (2, 2, 1 - 2 / 32)
    # A single flip is put right by the inner code and costs no margin.
    rewrite(tmp_path / "f", with_flips(data, 1))
    (block,) = verify(tmp_path / "f").blocks
    assert (block.bits_flipped, block.margin) == (1, 1.0)


def test_bursts_are_told_from_scattered_flips(tmp_path: Path) -> None:
    data = content(1_000_000)
    (tmp_path / "f").write_bytes(data)
    protect([tmp_path / "f"])
    hurt = bytearray(data)
    for i in range(40):  # Every byte of 40 wrong by one bit, over a boundary of two cells.
        hurt[4096 * 3 - 20 + i] ^= 4
    for i in range(10):
        hurt[500_000 + 1000 * i] ^= 2
    rewrite(tmp_path / "f", bytes(hurt))
    totals = verify(tmp_path / "f").totals
    assert (totals.bits_flipped_burst, totals.bits_flipped_scattered) == (40, 10)


# -- what is not imported --------------------------------------------------------------------------


@pytest.mark.parametrize("depth", [None, 4096])
def test_without_damage_neither_numba_nor_galois_is_imported(tmp_path: Path, depth: int | None) -> None:
    folder = plant(tmp_path / "set", {"a": content(200_000), "b": b"1"})
    protect([folder], code="shelf", depth=depth)
    program = (
        "import sys; from pathlib import Path; import oakum\n"
        "oakum.describe(Path(sys.argv[1] + '.oakum'))\n"
        "assert oakum.verify(Path(sys.argv[1])).outcome == 'intact'\n"
        "print(sorted({'numba', 'galois', 'scipy', 'llvmlite', 'rich', 'typer'} & set(sys.modules)))"
    )
    out = subprocess.run(
        [sys.executable, "-c", program, folder], capture_output=True, text=True, check=True,
        env={**os.environ, "PYTHONPATH": os.pathsep.join(sys.path)},
    )  # fmt: skip
    assert out.stdout == "[]\n"
