"""Members: a fixed order, links never followed, and a stream whose holes are known."""

from __future__ import annotations

import errno
import hashlib
import os
import tempfile
import threading
from concurrent.futures import ThreadPoolExecutor
from contextlib import closing
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from support import BadSectors, content, plant

from oakum import members
from oakum.errors import CannotCheck, UsageError
from oakum.members import SMALL, Folder, MemberHasher, MemberStream, Span, collect, open_folder
from oakum.sidecar.table import Kind


def paths(folder: Path, *given: str) -> list[bytes]:
    return [m.path for m in collect([folder / g for g in given], folder)[0]]


# -- collecting ------------------------------------------------------------------------------------


def test_order_is_that_of_the_bytes_and_folders_come_first(tmp_path: Path) -> None:
    plant(tmp_path / "s", dict.fromkeys(("b", "B", "a/z", "a/y/x", "a.b", "ä", "empty/"), b""))
    expected = [b"s", b"s/B", b"s/a", b"s/a/y", b"s/a/y/x", b"s/a/z", b"s/a.b", b"s/b", b"s/empty",
                "s/ä".encode()]  # fmt: skip
    assert paths(tmp_path, "s") == expected
    assert paths(tmp_path, "s") == expected


def test_what_is_recorded(tmp_path: Path) -> None:
    plant(tmp_path / "s", {"f": b"12345"})
    (tmp_path / "s/f").chmod(0o4711)
    os.utime(tmp_path / "s/f", ns=(1, 1_234_567_890_123_456_789))
    (tmp_path / "s/l").symlink_to("../anywhere\n")
    (tmp_path / "s").chmod(0o2755)
    folder, file, link = collect([tmp_path / "s"], tmp_path)[0]
    assert (folder.kind, folder.path, folder.size, folder.mode) == (Kind.FOLDER, b"s", 0, 0o2755)
    assert (file.kind, file.size, file.mode) == (Kind.FILE, 5, 0o4711)
    assert file.modified_ns == 1_234_567_890_123_456_789
    assert (link.kind, link.size, link.target) == (Kind.LINK, 0, b"../anywhere\n")


def test_links_are_recorded_and_not_followed(tmp_path: Path) -> None:
    plant(tmp_path, {"out/secret": b"1", "s/a": b"2"})
    (tmp_path / "s/dir").symlink_to(tmp_path / "out")
    (tmp_path / "s/loop").symlink_to(".")
    assert paths(tmp_path, "s") == [b"s", b"s/a", b"s/dir", b"s/loop"]
    assert [m.kind for m in collect([tmp_path / "s/dir"], tmp_path)[0]] == [Kind.LINK]


def test_names_that_are_not_utf8(tmp_path: Path) -> None:
    name = os.fsencode(tmp_path) + b"/\xff\xfe"
    os.mkdir(name)
    assert [m.path for m in collect([Path(os.fsdecode(name))], tmp_path)[0]] == [b"\xff\xfe"]


def test_special_files_are_named_in_a_note(tmp_path: Path) -> None:
    plant(tmp_path / "s", {"a": b""})
    os.mkfifo(tmp_path / "s/pipe")
    members, notes = collect([tmp_path / "s"], tmp_path)
    assert [m.path for m in members] == [b"s", b"s/a"]
    assert notes == [f"{tmp_path}/s/pipe is neither a file, a folder nor a link and is not protected"]


def test_nothing_twice(tmp_path: Path) -> None:
    plant(tmp_path / "s", {"a": b""})
    for given_paths in (["s", "s"], ["s", "s/a"], ["s/a", "s"]):
        with pytest.raises(UsageError, match="given twice"):
            paths(tmp_path, *given_paths)
    with pytest.raises(CannotCheck, match="cannot be read: no such file"):
        paths(tmp_path, "nothing")


# -- opening ---------------------------------------------------------------------------------------


def test_no_part_of_a_path_is_followed_as_a_link(tmp_path: Path) -> None:
    plant(tmp_path, {"real/deep/f": b"1", "s/f": b"2"})
    (tmp_path / "s/last").symlink_to("f")
    (tmp_path / "s/middle").symlink_to(tmp_path / "real")
    folder = Folder(tmp_path)
    os.close(folder.open(b"s/f"))
    os.close(folder.open(b"real/deep/f"))
    for path in (b"s/last", b"s/middle/deep/f"):
        with pytest.raises(OSError) as caught:
            folder.open(path)
        assert caught.value.errno in (errno.ELOOP, errno.ENOTDIR)
    assert folder.readlink(b"s/last") == b"f"
    assert folder.stat(b"s/last").st_size == 1
    folder.close()


def test_a_fifo_does_not_hang(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "p")
    folder = Folder(tmp_path)
    stream = MemberStream(folder, [Span(b"p", 0, 10)])
    assert stream.read_into(0, memoryview(bytearray(10))) == [(0, 10)]
    stream.close()
    folder.close()


def test_open_folder_makes_what_is_missing_and_says_so(tmp_path: Path) -> None:
    (tmp_path / "a").mkdir()
    (tmp_path / "l").symlink_to("a")
    root = os.open(tmp_path, os.O_RDONLY)
    made: list[bytes] = []
    os.close(open_folder(root, b"a/b/c", made=made))
    assert made == [b"a/b", b"a/b/c"]
    os.close(open_folder(root, b"a/b/c", made=made))
    assert len(made) == 2
    for path in (b"l/x", b"nothing"):
        with pytest.raises(OSError):
            open_folder(root, path)
    with pytest.raises(OSError):
        open_folder(root, b"l/x", made=made)
    assert not (tmp_path / "a/x").exists()
    os.close(root)


def test_a_root_that_is_not_there(tmp_path: Path) -> None:
    with pytest.raises(CannotCheck, match="cannot be opened: no such file"):
        Folder(tmp_path / "nothing")


# -- streams ---------------------------------------------------------------------------------------


class Case:
    """Three files and the stream of some spans of them."""

    def __init__(self, place: Path, bad: list[tuple[int, int]] | None = None) -> None:
        self.files = {"a": content(1000, 1), "b": content(20_000, 2), "c": content(300, 3)}
        plant(place, self.files)
        spans = [Span(b"a", 0, 1000), Span(b"x", 0, 0), Span(b"b", 5000, 15_000), Span(b"c", 0, 300)]
        self.data = self.files["a"] + self.files["b"][5000:] + self.files["c"]
        self.folder = Folder(place)
        self.stream = MemberStream(self.folder, spans, bad or ())

    def read(self, offset: int, length: int) -> tuple[bytes, list[tuple[int, int]]]:
        buffer = bytearray(b"?" * length)
        faults = self.stream.read_into(offset, memoryview(buffer))
        return bytes(buffer), faults


@given(st.integers(0, 17_000), st.integers(0, 17_000))
def test_any_range_of_a_stream(tmp_path_factory: pytest.TempPathFactory, offset: int, length: int) -> None:
    case = Case(tmp_path_factory.mktemp("stream"))
    got, faults = case.read(offset, length)
    assert faults == []
    assert got == case.data[offset : offset + length].ljust(length, b"\0")
    case.stream.close()
    case.folder.close()


@given(st.lists(st.tuples(st.integers(0, 16_200), st.integers(1, 4000)), max_size=5), st.integers(0, 16_000),
       st.integers(1, 17_000))  # fmt: skip
def test_known_bad_ranges_are_not_tried_and_reported_once(
    tmp_path_factory: pytest.TempPathFactory, bad: list[tuple[int, int]], offset: int, length: int
) -> None:
    ranges = [(a, min(a + n, 16_300)) for a, n in bad]
    case = Case(tmp_path_factory.mktemp("bad"), ranges)
    got, faults = case.read(offset, length)
    lost = {i for a, b in ranges for i in range(a, b)}
    expected = bytes(
        0 if i in lost or i >= len(case.data) else case.data[i] for i in range(offset, offset + length)
    )
    assert got == expected
    marked = [i for a, b in faults for i in range(offset + a, offset + b)]
    assert marked == sorted(lost & set(range(offset, offset + length)))
    case.stream.close()
    case.folder.close()


def test_what_is_absent_short_or_unreadable_is_a_fault(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    case = Case(tmp_path)
    (tmp_path / "a").unlink()
    os.truncate(tmp_path / "b", 19_000)
    BadSectors({tmp_path / "b": [(6144, 6656)]}).install(monkeypatch)
    got, faults = case.read(0, len(case.data))
    assert faults == [(0, 1000), (2144, 2656), (15_000, 16_000)]
    for start, stop in faults:
        assert got[start:stop] == bytes(stop - start)
    assert got[2656:15_000] == case.data[2656:15_000]
    assert case.stream.path_at(999) == b"a"
    assert case.stream.path_at(1000) == b"b"
    case.stream.close()
    case.folder.close()


def test_a_link_in_place_of_a_member_is_a_fault(tmp_path: Path) -> None:
    case = Case(tmp_path)
    (tmp_path / "c").rename(tmp_path / "d")
    (tmp_path / "c").symlink_to("d")
    assert case.read(16_000, 300) == (bytes(300), [(0, 300)])
    case.stream.close()
    case.folder.close()


def test_many_members_do_not_use_up_descriptors(tmp_path: Path) -> None:
    plant(tmp_path, {f"{i}": bytes([i % 256]) * 3 for i in range(300)})
    folder = Folder(tmp_path)
    stream = MemberStream(folder, [Span(f"{i}".encode(), 0, 3) for i in range(300)])
    before = len(os.listdir("/proc/self/fd"))
    buffer = bytearray(900)
    assert stream.read_into(0, memoryview(buffer)) == []
    assert bytes(buffer) == b"".join(bytes([i % 256]) * 3 for i in range(300))
    assert len(os.listdir("/proc/self/fd")) - before <= 64
    stream.close()
    assert len(os.listdir("/proc/self/fd")) == before
    folder.close()


def test_closing_waits_for_no_reader_and_takes_no_descriptor_from_one(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    plant(tmp_path, {"read": bytes(SMALL + 1), "idle": bytes(SMALL + 1)})
    spans = [Span(name, 0, SMALL + 1) for name in (b"read", b"idle")]
    reading, go_on, seen = threading.Event(), threading.Event(), []

    def slowly(fd: int, offset: int, buffer: memoryview) -> list[tuple[int, int]]:
        seen.append(fd)
        reading.set()
        assert go_on.wait(60)
        os.fstat(fd)  # Still that of the member.
        return []

    with closing(Folder(tmp_path)) as folder:
        stream = MemberStream(folder, spans)
        stream.read_into(SMALL + 1, memoryview(bytearray(SMALL + 1)))
        monkeypatch.setattr(members, "read_into", slowly)
        with ThreadPoolExecutor() as threads:
            reader = threads.submit(stream.read_into, 0, memoryview(bytearray(SMALL + 1)))
            assert reading.wait(60)
            stream.close()
            go_on.set()
            assert reader.result() == []
            with pytest.raises(OSError):
                os.fstat(seen[0])
            with pytest.raises(RuntimeError, match="closed"):
                stream.read_into(0, memoryview(bytearray(SMALL + 1)))


def test_no_permission_is_no_erasure(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    case = Case(tmp_path)

    def refuse(path: bytes) -> int:
        raise PermissionError(errno.EACCES, "Permission denied")

    monkeypatch.setattr(case.folder, "open", refuse)
    with pytest.raises(CannotCheck, match="a cannot be opened: permission denied"):
        case.read(0, 10)
    case.folder.close()


# -- hashing ---------------------------------------------------------------------------------------


@given(st.lists(st.integers(0, 50), max_size=8), st.integers(1, 40))
def test_hasher_over_windows(sizes: list[int], step: int) -> None:
    """Members of any size, windows of `step` bytes: each span's digest is that of its member so far."""
    members = {f"{i}".encode(): content(size, i) for i, size in enumerate(sizes)}
    stream = b"".join(members.values())
    spans, at = [], 0
    for path, data in members.items():
        spans.append((at, Span(path, 0, len(data))))
        at += len(data)
    hasher = MemberHasher()
    for start in range(0, max(1, len(stream)), step):
        stop = start + step
        here = []
        for begin, span in spans:
            a, b = max(begin, start), min(begin + span.length, stop)
            if a < b or (span.length == 0 and start <= begin < stop):
                here.append(Span(span.path, a - begin, max(0, b - a)))
        hasher.expect(here)
        hasher.update(memoryview(stream[start:stop]))
        for span, digest in zip(here, hasher.digests, strict=True):
            so_far = members[span.path][: span.offset + span.length]
            assert digest == hashlib.sha256(so_far).digest()


@given(st.data())
def test_small_members_are_hashed_while_they_are_read(data: st.DataObject) -> None:
    """Pieces of the stream in any order, then the stream in order: digests as of the members one by one."""
    sizes = data.draw(st.lists(st.sampled_from([0, 1, 300, 5000, SMALL, SMALL + 1]), min_size=1, max_size=8))
    with tempfile.TemporaryDirectory() as place:
        root = Path(place)
        contents = {f"{i}": content(size, i) for i, size in enumerate(sizes)}
        plant(root, contents)
        spans = [Span(name.encode(), 0, len(held)) for name, held in contents.items()]
        spans[-1] = Span(spans[-1].path, 0, spans[-1].length // 2)  # It goes on in another window.
        folder, hasher = Folder(root), MemberHasher()
        stream = MemberStream(folder, spans)
        hasher.expect(spans)
        step = data.draw(st.sampled_from([700, 10_000, 1 << 20]))
        buffer = bytearray(stream.length)
        starts = data.draw(st.permutations(range(0, stream.length, step)))
        for start in starts:
            part = memoryview(buffer)[start : start + step]
            assert stream.read_into(start, part, hasher) == []
        for start in range(0, stream.length, pace := data.draw(st.sampled_from([100, SMALL, 1 << 20]))):
            hasher.update(memoryview(buffer)[start : start + pace])
        expected = [hashlib.sha256(contents[s.path.decode()][: s.length]).digest() for s in spans]
        assert hasher.digests == expected
        later = Span(spans[-1].path, spans[-1].length, sizes[-1] - spans[-1].length)
        hasher.expect([later])
        hasher.update(memoryview(contents[later.path.decode()][later.offset :]))
        assert hasher.digests == [hashlib.sha256(contents[later.path.decode()]).digest()]
        stream.close()
        folder.close()


@pytest.mark.parametrize("trouble", ["short read", "read error", "cut short", "a folder instead"])
def test_a_small_member_that_gives_trouble_is_read_again(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, trouble: str
) -> None:
    plant(tmp_path, {"a": content(1000), "b": content(2000, 1)})
    if trouble == "cut short":
        os.truncate(tmp_path / "b", 1500)
    if trouble == "a folder instead":
        (tmp_path / "b").unlink()
        (tmp_path / "b").mkdir()
    true, calls = os.preadv, 0

    def preadv(fd: int, buffers: list[memoryview], offset: int) -> int:
        nonlocal calls
        calls += 1
        if calls == 1 and trouble == "read error":
            raise OSError(errno.EIO, "Input/output error")
        return true(fd, [buffers[0][:1]] if calls == 1 and trouble == "short read" else buffers, offset)

    monkeypatch.setattr(os, "preadv", preadv)
    folder = Folder(tmp_path)
    stream = MemberStream(folder, [Span(b"a", 0, 1000), Span(b"b", 0, 2000)])
    buffer = bytearray(3000)
    faults = stream.read_into(0, memoryview(buffer))
    lost = {"cut short": 500, "a folder instead": 2000}.get(trouble, 0)
    assert faults == ([(3000 - lost, 3000)] if lost else [])
    whole = content(1000) + content(2000, 1)
    assert bytes(buffer) == whole[: 3000 - lost] + bytes(lost)
    stream.close()
    folder.close()
