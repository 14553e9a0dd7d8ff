"""Hostile sidecars: nothing outside the target folder is touched, no terminal is reached."""

from __future__ import annotations

import json
import os
import unicodedata
from collections.abc import Callable
from contextlib import suppress
from dataclasses import replace
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from support import content, plant, rewrite, snapshot, with_flips

import oakum.jobs.protect as protecting
from oakum import FormatError, OakumError, UsageError, describe, protect, repair, roll_back, verify
from oakum.cli.running import run
from oakum.members import Folder, collect
from oakum.results import Outcome
from oakum.sidecar.bootstrap import MARKER, encode, unpack
from oakum.sidecar.layout import TEXT_BYTES
from oakum.sidecar.table import Kind, Piece, packed_length, unpack_table

Names = dict[bytes, bytes]
JOBS: list[Callable[[Path], object]] = [
    lambda sidecar: verify(sidecar),
    lambda sidecar: describe(sidecar),
    lambda sidecar: repair(sidecar),
    lambda sidecar: repair(sidecar, output=sidecar.parent / "out"),
    lambda sidecar: repair(sidecar, in_place=True),
]


def forge(folder: Path, names: Names, monkeypatch: pytest.MonkeyPatch, **changes: object) -> Path:
    """A sidecar that calls members by other names, and is otherwise one that protect would write."""

    class Renamed(Folder):
        def open(self, path: bytes) -> int:
            return super().open({b: a for a, b in names.items()}.get(path, path))

        def stat(self, path: bytes) -> os.stat_result:
            return super().stat({b: a for a, b in names.items()}.get(path, path))

    def renamed(paths: list[Path], root: Path) -> tuple[list[Piece], list[str]]:
        members, notes = collect(paths, root)
        return [m._replace(path=names.get(m.path, m.path), **changes) for m in members], notes

    with monkeypatch.context() as patch:
        patch.setattr(protecting, "collect", renamed)
        patch.setattr(protecting, "Folder", Renamed)
        patch.setattr(protecting, "_refuse_changed", lambda *_: None)
        return protect([folder]).sidecar


@pytest.fixture
def room(tmp_path: Path) -> Path:
    """A folder to work in, with things around it that must stay as they are."""
    plant(
        tmp_path,
        {"around/evil": b"mine", "evil": b"mine too", "room/set/a": content(3000), "room/set/b": b"b"},
    )
    return tmp_path / "room"


def outside(room: Path) -> dict[str, bytes | str | None]:
    """Everything but the room."""
    return {n: d for n, d in snapshot(room.parent).items() if not n.startswith("room/")}


@pytest.mark.parametrize(
    "name",
    [
        b"../evil", b"set/../../evil", b"/etc/evil", b"..", b".", b"", b"set//a", b"set/", b"./set",
        b"set/a/..",         b"set/\0", b"a\0b", b"n" * 256, b"n/" * 20_000 + b"n", b"\0",
    ],
)  # fmt: skip
def test_names_that_no_member_can_have(room: Path, monkeypatch: pytest.MonkeyPatch, name: bytes) -> None:
    sidecar = forge(room / "set", {b"set/a": name}, monkeypatch)
    (room / "set/a").unlink()
    before, around = snapshot(room), outside(room)
    for job in JOBS:
        with pytest.raises(FormatError):
            job(sidecar)
    assert snapshot(room) == before
    assert outside(room) == around


@pytest.mark.parametrize("one", [b"set/b", b"set"])
def test_a_name_that_is_given_twice(room: Path, monkeypatch: pytest.MonkeyPatch, one: bytes) -> None:
    sidecar = forge(room / "set", {b"set/a": one}, monkeypatch)
    for job in JOBS:
        with pytest.raises(FormatError, match="twice"):
            job(sidecar)


@pytest.mark.parametrize(
    "names", [("caf\u00e9", "cafe\u0301"), ("README", "readme"), ("stra\u00dfe", "STRASSE")]
)
def test_names_that_some_file_systems_take_for_one(tmp_path: Path, names: tuple[str, str]) -> None:
    """Here they are two, and both come back; where they are one, none is written over the other."""
    assert len({unicodedata.normalize("NFC", n).casefold() for n in names}) == 1
    folder = plant(tmp_path / "set", {names[0]: content(500, 1), names[1]: content(600, 2)})
    if len(os.listdir(folder)) == 1:
        pytest.skip("this file system takes them for one")
    original = snapshot(folder)
    sidecar = protect([folder]).sidecar
    for name in names:
        (folder / name).unlink()
    repair(sidecar, output=tmp_path / "out")
    assert snapshot(tmp_path / "out/set") == original
    with pytest.raises(UsageError, match="exists already"):
        repair(sidecar, output=tmp_path / "out")


def test_a_link_and_a_file_beneath_it(room: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The table makes a link to a folder outside and then a file in it: the file does not go there."""
    (room / "set/away").symlink_to("../../around")
    around = outside(room)
    sidecar = forge(room / "set", {b"set/b": b"set/away/evil"}, monkeypatch)
    (room / "set/b").unlink()
    (room / "set/away").unlink()
    for output, in_place in ((None, False), (room / "out", False), (None, True)):
        with suppress(OakumError):
            repair(sidecar, output=output, in_place=in_place)
        assert outside(room) == around


@pytest.mark.parametrize("part", ["set", "set/deep", "set/deep/down"])
def test_links_planted_at_any_component(tmp_path: Path, part: str) -> None:
    """In the output folder, and in the set itself: nothing is written through them, in place neither."""
    folder = plant(tmp_path / "in/set", {"deep/down/f": content(900), "g": b"g"})
    sidecar = protect([folder]).sidecar
    elsewhere = plant(
        tmp_path / "elsewhere", {"deep/down/f": b"not ours", "down/f": b"nor this", "f": b"nor that"}
    )
    before = snapshot(elsewhere)
    place = tmp_path / "out" / part
    place.parent.mkdir(parents=True)
    place.symlink_to(elsewhere)
    with pytest.raises(OakumError):
        repair(sidecar, output=tmp_path / "out")
    assert snapshot(elsewhere) == before
    (tmp_path / "in" / part).rename(tmp_path / "gone")
    (tmp_path / "in" / part).symlink_to(elsewhere)
    for in_place in (False, True):
        with suppress(OakumError):
            repair(sidecar, in_place=in_place)
        assert snapshot(elsewhere) == before


def test_a_link_in_the_place_of_a_file_and_of_the_temporary_file(tmp_path: Path) -> None:
    folder = plant(tmp_path / "set", {"f": content(900), "g": b"g"})
    sidecar = protect([folder]).sidecar
    (tmp_path / "mine").write_bytes(b"mine")
    rewrite(folder / "f", with_flips(content(900), 2))
    for name in (".f.mended.oakum-part", ".set.oakum.journal.oakum-part"):
        for place in (folder, tmp_path):
            (place / name).symlink_to(tmp_path / "mine")
    with pytest.raises(OakumError):
        repair(sidecar)
    with pytest.raises(OakumError):
        repair(sidecar, in_place=True)
    (tmp_path / "set.oakum.journal").symlink_to(tmp_path / "mine")
    with pytest.raises(OakumError):
        roll_back(sidecar)
    assert (tmp_path / "mine").read_bytes() == b"mine"


# -- sizes ------------------------------------------------------------------------------------------------


FIELDS = (
    "length", "depth", "table_length", "entries", "stream_length", "start", "section_offset", "window",
    "set_depth",
)  # fmt: skip
SIZES = (0, 1, (1 << 16) - 1, (1 << 31) - 1, (1 << 32) - 1, 1 << 60, (1 << 63) - 1, (1 << 64) - 1)


@pytest.mark.parametrize("value", SIZES)
@pytest.mark.parametrize("field", FIELDS)
def test_sizes_that_promise_too_much(room: Path, field: str, value: int) -> None:
    """Each number of the bootstrap record at its limits, the checksum right: refused, or passed over."""
    sidecar = protect([room / "set"]).sidecar
    data = bytearray(sidecar.read_bytes())
    at = TEXT_BYTES + len(MARKER)
    found = unpack(bytes(data[at : at + 200]))
    assert found is not None
    if field in ("entries", "window"):
        value &= (1 << 32) - 1
    record = encode(replace(found, **{field: value}).pack())
    data[at : at + len(record)] = record
    sidecar.write_bytes(data)
    before = snapshot(room)
    for job in JOBS[:3]:
        try:
            job(sidecar)
        except OakumError:
            continue
    assert {n: snapshot(room)[n] for n in before} == before


@given(st.integers(0, 1 << 64), st.integers(0, 1 << 64), st.integers(0, 1 << 64), st.booleans())
def test_entries_with_impossible_sizes(size: int, offset: int, length: int, ends: bool) -> None:
    size, offset, length = (min(x, (1 << 64) - 1) for x in (size, offset, length))
    table = Piece(Kind.FILE, b"f", 0o644, 0, size, offset, length, ends).pack()
    try:
        (piece,) = unpack_table(table, 1, length)
    except FormatError:
        return
    assert piece.offset + piece.length <= piece.size <= 1 << 60
    assert not ends or piece.offset + piece.length == piece.size


@given(st.binary(min_size=1, max_size=40), st.binary(max_size=40))
def test_the_length_of_an_entry(path: bytes, target: bytes) -> None:
    entry = Piece(Kind.LINK, path, 0o777, 0, 0, 0, 0, True, target=target).pack()
    assert packed_length(path, target) == len(entry)


def test_a_member_that_claims_to_be_huge(room: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A size that nothing proves costs no time and no room: the member is beyond help, and that is all."""
    true = Piece.pack

    def larger(self: Piece, *args: object) -> bytes:
        huge = self.kind is Kind.FILE and self.path == b"set/b"
        return true(self._replace(size=1 << 59, ends=False) if huge else self, *args)

    with monkeypatch.context() as patch:
        patch.setattr(Piece, "pack", larger)
        sidecar = protect([room / "set"]).sidecar
    assert verify(sidecar).outcome is not Outcome.INTACT
    for accept_loss in (False, True):
        with suppress(OakumError):
            repair(sidecar, output=room / f"out{accept_loss}", accept_loss=accept_loss)
    with suppress(OakumError):
        repair(sidecar, in_place=True)
    assert (room / "set/b").read_bytes() == b"b"


# -- splices and replays ------------------------------------------------------------------------------------


@pytest.mark.parametrize("stretches", [(3,), (0, 1), (2, 5, 9, 14)])
def test_stretches_of_another_sidecar(tmp_path: Path, stretches: tuple[int, ...]) -> None:
    """Records and parity of a set with the same geometry are damage here, and are put right."""
    data = {name: content(300_000, seed) for name, seed in (("mine", 1), ("other", 2))}
    plant(tmp_path, data)
    whole, other = (protect([tmp_path / name]).sidecar.read_bytes() for name in data)
    assert len(whole) == len(other)
    from oakum.jobs.opening import open_set

    opened = open_set(tmp_path / "mine.oakum", None)
    opened.close()
    layout = opened.sections[0].layout
    spliced = bytearray(whole)
    for stretch in stretches:
        start = layout.stretch_start(stretch)
        spliced[start : start + layout.stretch_bytes] = other[start : start + layout.stretch_bytes]
    (tmp_path / "mine.oakum").write_bytes(spliced)
    rewrite(tmp_path / "mine", with_flips(data["mine"], 9))
    result = repair(tmp_path / "mine")
    assert (result.outcome, result.totals.bits_flipped) == (Outcome.CORRECTABLE, 9)
    assert (tmp_path / "mine.mended").read_bytes() == data["mine"]
    assert (tmp_path / "mine.mended.oakum").read_bytes() == whole


def test_an_old_sidecar_of_the_same_name(tmp_path: Path) -> None:
    """Replayed: the content of today is not "repaired" to that of yesterday unless that is asked for."""
    file = tmp_path / "f"
    file.write_bytes(content(90_000, 1))
    os.utime(file, ns=(10**18, 10**18))
    old = protect([file]).sidecar.read_bytes()
    file.write_bytes(with_flips(content(90_000, 1), 8))
    protect([file], overwrite=True)
    (tmp_path / "f.oakum").write_bytes(old)
    (report,) = verify(file).members
    assert report.edited
    with pytest.raises(UsageError, match="edited rather than decayed"):
        repair(file, in_place=True)
    assert file.read_bytes() == with_flips(content(90_000, 1), 8)


# -- terminals -------------------------------------------------------------------------------------


NASTY = [
    "\x1b[2J\x1b]0;owned\x07", "a\rb\nc\td", "\u202egnp.exe", "\u2066\u2069\u200f", "\x9b31m",
    "[bold red]x[reset]",    "\udcff\udcfe", "\u2028\u2029", "\x7f\x08\x08",
]  # fmt: skip


def harmless(text: str) -> bool:
    """Whether a terminal shows this as it is: no control, format or surrogate character but newlines."""
    return all(c == "\n" or unicodedata.category(c) not in ("Cc", "Cf", "Cs", "Zl", "Zp") for c in text)


@pytest.mark.parametrize("name", NASTY)
def test_nothing_reaches_a_terminal(
    tmp_path: Path, capfdbinary: pytest.CaptureFixture[bytes], monkeypatch: pytest.MonkeyPatch, name: str
) -> None:
    folder = plant(tmp_path / "in" / f"set{name}", {name: content(2000), f"{name}2": b"2"})
    os.symlink(name, folder / "link")
    monkeypatch.chdir(tmp_path / "in")
    target = folder.name
    protected = run(["protect", target])
    (folder / name).write_bytes(with_flips(content(2000), 3))
    (folder / f"{name}2").unlink()
    (folder / "link").unlink()
    os.symlink(name + name, folder / "link")
    for arguments in (
        ["verify", target], ["verify", target, "--json"], ["describe", f"{target}.oakum"],
        ["describe", f"{target}.oakum", "--json"], ["repair", target, "--in-place"],
        ["repair", target, "--member", name], ["repair", target, "--output", f"out{name}", "--json"],
        ["repair", target], ["protect", target], ["verify", f"no{name}"], ["verify", name, "--sidecar", name],
        ["repair", target, "--in-place", "--even-newer"], ["repair", target, "--roll-back"],
    ):  # fmt: skip
        run(arguments)
    captured = capfdbinary.readouterr()
    assert protected == 0
    for stream in captured:
        assert harmless(stream.decode("utf-8", "surrogateescape"))
    documents = captured.out.decode().split('{\n  "schema"')
    assert len(documents) > 2
    json.loads('{\n  "schema"' + documents[-1].split("\n}\n")[0] + "\n}")
