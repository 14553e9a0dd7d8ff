"""The journal's own format: what is written is read back, and whatever is not whole is refused."""

from __future__ import annotations

import errno
import os
from dataclasses import replace
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from oakum.errors import CannotCheck, OakumError
from oakum.jobs import journal as format_
from oakum.jobs.journal import Condition, Draft, Entry, Journal, Thing, journal_path

SET = bytes(range(16))
FILE = Entry(Thing.FILE, b"set/a", Condition(0o640, -5, 10), Condition(0o640, -5, 12, bytes(range(32))))
LINK = Entry(Thing.LINK, b"set/l", Condition(target=b"old"), Condition(target=b"new\xff"))
MADE = Entry(Thing.FILE, b"set/caf\xe9", None, Condition(0o600, 1 << 60, 1 << 40))
ENTRIES = [FILE, LINK, MADE]


@pytest.fixture
def sidecar(tmp_path: Path) -> Path:
    """The path of a sidecar whose journal was written."""
    path = tmp_path / "x.oakum"
    with Draft(path, SET) as draft:
        assert [draft.add(entry) for entry in ENTRIES] == [0, 1, 2]
        draft.patch(0, 3, b"old bytes", b"new bytes")
        draft.patch(0, 7, None, b"new")
        draft.patch(2, 0, b"", b"made")
        assert not journal_path(path).exists()
        assert [draft.new_bytes(p) for p in draft.contents.patches[0]] == [b"new bytes", b"new"]
        draft.commit()
    return path


def test_what_is_written_is_read(sidecar: Path) -> None:
    with Journal(sidecar) as journal:
        assert journal.contents.identity == SET
        assert journal.contents.entries == ENTRIES
        first, second = journal.contents.patches[0]
        assert (first.offset, journal.old_bytes(first), journal.new_bytes(first)) == (
            3,
            b"old bytes",
            b"new bytes",
        )
        assert (second.offset, second.blind, journal.new_bytes(second)) == (7, True, b"new")
        assert [len(p) for p in journal.contents.patches] == [2, 0, 1]
        assert not journal.finished
        journal.finish()
        assert journal.finished
    with Journal(sidecar, write=False) as journal:
        assert journal.finished
    with Journal(sidecar) as journal:
        journal.begin_undoing()
    with Journal(sidecar) as journal:
        assert not journal.finished
        journal.finish()
        journal.remove()
    with pytest.raises(FileNotFoundError):
        Journal(sidecar)
    assert os.listdir(sidecar.parent) == []


def test_a_draft_that_is_given_up_leaves_nothing(tmp_path: Path) -> None:
    with Draft(tmp_path / "x.oakum", SET) as draft:
        draft.add(FILE)
    assert os.listdir(tmp_path) == []


def test_a_draft_that_cannot_be_begun_leaves_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def full(*_: object) -> int:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(os, "pwrite", full)
    with pytest.raises(CannotCheck, match="no space left"):
        Draft(tmp_path / "x.oakum", SET)
    assert os.listdir(tmp_path) == []


def test_a_digest_that_is_known_later(tmp_path: Path) -> None:
    path = tmp_path / "x.oakum"
    with Draft(path, SET) as draft:
        draft.add(LINK)
        draft.add(MADE)
        draft.patch(1, 0, b"", b"made")
        draft.amend(1, b"d" * 32)
        draft.commit()
    with Journal(path) as journal:
        assert journal.contents.entries == [LINK, replace(MADE, after=replace(MADE.after, digest=b"d" * 32))]
        assert [len(patches) for patches in journal.contents.patches] == [0, 1]


def test_every_flip_is_noticed(sidecar: Path) -> None:
    path = journal_path(sidecar)
    whole = path.read_bytes()
    for place in range(len(whole)):
        hurt = bytearray(whole)
        hurt[place] ^= 1 << place % 8
        path.write_bytes(hurt)
        with pytest.raises(CannotCheck, match=r"is damaged and cannot be used"):
            Journal(sidecar)


def test_every_length_is_noticed(sidecar: Path) -> None:
    path = journal_path(sidecar)
    whole = path.read_bytes()
    for length in range(len(whole)):
        path.write_bytes(whole[:length])
        with pytest.raises(CannotCheck, match=r"is damaged"):
            Journal(sidecar)


def test_a_mark_that_was_cut_is_no_mark(sidecar: Path) -> None:
    path = journal_path(sidecar)
    whole = path.read_bytes()
    with Journal(sidecar) as journal:
        journal.finish()
    done = path.read_bytes()
    assert len(done) == len(whole) + 40
    for length in range(len(whole), len(done)):
        path.write_bytes(done[:length])
        with Journal(sidecar) as journal:
            assert not journal.finished
            journal.finish()  # Over the part of a mark that is there.
        assert path.read_bytes() == done


def record(
    kind: int, detail: int = 0, entry: int = 0, old: bytes = b"", new: bytes = b"", offset: int = 0
) -> bytes:
    return format_._record(format_._Kind(kind), detail, entry, old, new, offset)


BEGIN, END = record(1, old=SET), record(4)
PACKED = format_._packed(FILE)


@pytest.mark.parametrize(
    "data",
    [
        b"",
        END,
        record(1, old=SET[:-1]) + END,
        BEGIN,
        BEGIN + record(4, entry=1),
        BEGIN + BEGIN + END,
        BEGIN + record(3, entry=0) + END,
        BEGIN + record(5) + END,
        BEGIN + record(2, 1, 0, PACKED[:-1]) + record(4, entry=1),
        BEGIN + record(2, 1, 0, PACKED + b"x") + record(4, entry=1),
        BEGIN + record(2, 9, 0, PACKED) + record(4, entry=1),
        BEGIN + record(2, 1, 0, b"") + record(4, entry=1),
        BEGIN + record(2, 1, 0, format_._packed(FILE)[:-55] + bytes(55)) + record(4, entry=1),
        BEGIN + record(2, 1, 0, PACKED.replace(b"set/a", b"../.a")) + record(4, entry=1),
        BEGIN + record(3, 0, 0, bytes((1 << 20) + 1)) + END,
    ],
)
def test_what_no_writer_would_write(tmp_path: Path, data: bytes) -> None:
    journal_path(tmp_path / "x").write_bytes(data)
    with pytest.raises(CannotCheck):
        Journal(tmp_path / "x")


@given(st.binary(max_size=300), st.integers(0, 600), st.booleans())
def test_any_bytes(tmp_path_factory: pytest.TempPathFactory, data: bytes, place: int, whole: bool) -> None:
    sidecar = tmp_path_factory.mktemp("any") / "x"
    start = (
        (BEGIN + record(2, 1, 0, PACKED) + record(3, 0, 0, b"1", b"2") + record(4, entry=1))
        if whole
        else BEGIN
    )
    journal_path(sidecar).write_bytes(start[:place] + data + start[place:])
    try:
        Journal(sidecar).close()
    except OakumError:
        return
    assert whole


def test_what_is_no_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    journal_path(tmp_path / "x").mkdir()
    with pytest.raises(CannotCheck, match="cannot be opened: is a directory"):
        Journal(tmp_path / "x")
    with pytest.raises(CannotCheck, match="is damaged"):
        Journal(tmp_path / "x", write=False)
    journal_path(tmp_path / "y").write_bytes(BEGIN + END)
    monkeypatch.setattr(os, "pread", lambda *_: (_ for _ in ()).throw(OSError(5, "Input/output error")))
    with pytest.raises(CannotCheck, match="cannot be read: input/output error"):
        Journal(tmp_path / "y")
