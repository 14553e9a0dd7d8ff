"""protect: the same input gives the same sidecar, bad input leaves nothing, and members stay as they are."""

from __future__ import annotations

import errno
import io
import os
import shutil
import time
from collections.abc import Callable
from pathlib import Path

import pytest
from support import BadSectors, content, plant, rewrite, snapshot, with_flips

from oakum import (
    CannotCheck,
    OakumError,
    UsageError,
    describe,
    encoding,
    pools,
    protect,
    protect_pipe,
    repair,
    verify,
)
from oakum.encoding import RESERVE
from oakum.results import Outcome

SMALL = "RS(60,40)+EH(128,120)"
"""A short code: windows of 160 KiB at the least depth."""

TIGHT = RESERVE + 255 * 4096
"""So little memory that a window of a few megabytes is read twice."""


def sidecar_of(path: Path, **options: object) -> bytes:
    out = path.parent / "sidecar"
    protect([path], output=out, overwrite=True, **options)  # type: ignore[arg-type]
    return out.read_bytes()


@pytest.fixture
def tree(tmp_path: Path) -> Path:
    return plant(
        tmp_path / "set", {"a": content(70_000), "d/b": content(5), "d/e": b"", "z": content(900_000, 2)}
    )


# -- the same bytes --------------------------------------------------------------------------------


@pytest.mark.parametrize("depth", [None, 4096])
@pytest.mark.parametrize("code", ["shelf", "stout", "plain", SMALL])
def test_threads_and_memory_do_not_show(tree: Path, code: str, depth: int | None) -> None:
    first = sidecar_of(tree, code=code, depth=depth, jobs=1)
    assert sidecar_of(tree, code=code, depth=depth, jobs=4) == first
    assert sidecar_of(tree, code=code, depth=depth, memory=TIGHT) == first


# The last length leaves as much of the last strip empty as can be: some of its cells are virtual.
@pytest.mark.parametrize("length", [5_000_000, 9_000_000, 223 * (26_240 - 64) + 1])
@pytest.mark.parametrize("code", ["shelf", SMALL])
def test_one_read_and_two_give_the_same(tmp_path: Path, code: str, length: int) -> None:
    file = tmp_path / "f"
    file.write_bytes(content(length))
    once = protect([file], code=code)
    first = once.sidecar.read_bytes()
    twice = protect([file], code=code, memory=TIGHT, overwrite=True)
    assert (once.reads, twice.reads) == (1, 2)
    assert twice.sidecar.read_bytes() == first


@pytest.mark.parametrize("length", [0, 1, 100, 160 << 10, (160 << 10) + 1, 700_000])
def test_a_pipe_and_a_file_are_repaired_alike(tmp_path: Path, length: int) -> None:
    data = content(length)
    result = protect_pipe(io.BytesIO(data), name="f", output=tmp_path / "f.oakum", code=SMALL, depth=4096)
    assert (result.stream_bytes, result.windows) == (length, max(1, -(-length // (160 << 10))))
    (tmp_path / "f").write_bytes(data)
    assert verify(tmp_path / "f").outcome is Outcome.INTACT
    sent = io.BytesIO()
    protect_pipe(io.BytesIO(data), name="f", output=sent, code=SMALL, depth=4096)
    assert sent.getvalue() == (tmp_path / "f.oakum").read_bytes()
    if length:
        rewrite(tmp_path / "f", with_flips(data, min(8, length)))
        assert repair(tmp_path / "f").totals.bits_flipped == min(8, length)
        assert (tmp_path / "f.mended").read_bytes() == data


def test_a_pipe_that_gives_little_at_a_time(tmp_path: Path) -> None:
    data = content(400_000)

    class Dribble(io.BytesIO):
        def read(self, size: int | None = -1, /) -> bytes:
            return super().read(min(size or 0, 777))

    for name, stream in (("a", io.BytesIO(data)), ("b", Dribble(data))):
        protect_pipe(stream, name="f", output=tmp_path / name, code=SMALL, depth=4096)
    assert (tmp_path / "a").read_bytes() == (tmp_path / "b").read_bytes()


def test_pipe_sections_and_file_sections_hold_the_same_parity(tmp_path: Path) -> None:
    """Only records differ: a pipe knows neither its length nor a file's time."""
    from oakum.files import FileBytes
    from oakum.sidecar.reading import find_sections

    data = content(500_000)
    (tmp_path / "f").write_bytes(data)
    protect([tmp_path / "f"], code=SMALL, depth=4096)
    protect_pipe(io.BytesIO(data), name="f", output=tmp_path / "p", code=SMALL, depth=4096)
    with FileBytes(tmp_path / "f.oakum") as a, FileBytes(tmp_path / "p") as b:
        for one, other in zip(find_sections(a), find_sections(b), strict=True):
            assert one.geometry == other.geometry
            size = one.geometry.body
            assert one.body(0, size)[0].tobytes() == other.body(0, size)[0].tobytes()


def test_where_the_sidecar_lies_does_not_show(tree: Path, tmp_path: Path) -> None:
    first = protect([tree]).sidecar.read_bytes()
    shutil.copytree(tree, tmp_path / "elsewhere/set", symlinks=True)
    assert protect([tmp_path / "elsewhere/set"]).sidecar.read_bytes() == first


# -- results and members ---------------------------------------------------------------------------


def test_the_result(tree: Path, tmp_path: Path) -> None:
    before = snapshot(tree)
    result = protect([tree])
    assert snapshot(tree) == before
    assert result.sidecar == tmp_path / "set.oakum"
    assert result.sidecar_bytes == result.sidecar.stat().st_size
    assert (result.members, result.stream_bytes, result.windows, result.reads) == (6, 970_005, 1, 1)
    assert result.depth == -(-970_005 // 223 // 64) * 64
    assert result.guaranteed_burst == 32 * result.depth - 8192
    assert result.code.name == "shelf"
    assert sorted(os.listdir(tmp_path)) == ["set", "set.oakum"]


def test_reading_back(tree: Path) -> None:
    assert protect([tree], read_back=True).members == 6


def test_several_paths(tmp_path: Path) -> None:
    plant(tmp_path, {"a/x": b"1", "b/y": b"2", "b/z": b"3"})
    protect([tmp_path / "b", tmp_path / "a/x"], output=tmp_path / "two.oakum")
    assert verify(tmp_path / "two.oakum").outcome is Outcome.INTACT
    (tmp_path / "b/y").unlink()
    repair(tmp_path / "two.oakum")
    assert (tmp_path / "b/y").read_bytes() == b"2"


def test_special_files_are_left_out_and_named(tmp_path: Path) -> None:
    plant(tmp_path / "set", {"a": b"1"})
    os.mkfifo(tmp_path / "set/fifo")
    result = protect([tmp_path / "set"])
    assert result.members == 2
    assert "fifo is neither a file, a folder nor a link" in result.notes[0]


def test_paths_are_relative_to_the_sidecar(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    plant(tmp_path / "deep/set", {"a": b"1"})
    protect([tmp_path / "deep/set"], output=tmp_path / "x.oakum")
    assert [m.path for m in describe(tmp_path / "x.oakum").members] == ["deep/set", "deep/set/a"]
    monkeypatch.chdir(tmp_path / "deep/set")
    protect([Path()])
    assert [m.path for m in describe(tmp_path / "deep/set.oakum").members] == ["set", "set/a"]
    result = protect([tmp_path / "deep/set"], output=tmp_path / "away.oakum", overwrite=True)
    assert result.notes == ()
    (tmp_path / "other").mkdir()
    result = protect([tmp_path / "deep/set"], output=tmp_path / "other/x.oakum")
    assert "give --root when verifying" in result.notes[0]
    assert verify(tmp_path / "other/x.oakum", root=tmp_path / "deep").outcome is Outcome.INTACT


# -- bad input -------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("options", "status", "sentence"),
    [
        ({"code": "strong"}, 2, "no code is called 'strong'"),
        ({"code": "RS(255,0)"}, 2, "there is no RS"),
        ({"code": "RS(255,223)+EB(120,112)"}, 2, "there is no inner code"),
        ({"depth": 0}, 2, "a depth of 0 bytes cannot be used"),
        ({"depth": -4096}, 2, "a depth of -4096 bytes"),
        ({"depth": 1000}, 2, "give a multiple of 4096"),
        ({"output": "set/inside.oakum"}, 2, "would lie inside"),
        ({"output": "set/d/inside.oakum"}, 2, "would lie inside"),
        ({"output": "set"}, 2, "cannot be both|would lie inside"),
        ({"output": "missing/x.oakum"}, 30, "no such file or directory"),
        ({"memory": 1 << 20}, 2, "too little"),
    ],
)
def test_bad_options(
    tree: Path, tmp_path: Path, options: dict[str, object], status: int, sentence: str
) -> None:
    if "output" in options:
        options = {"output": tmp_path / str(options["output"])}
    before = snapshot(tmp_path)
    with pytest.raises(OakumError, match=sentence) as caught:
        protect([tree], **options)  # type: ignore[arg-type]
    assert caught.value.status == status
    assert "\n" not in str(caught.value)
    assert snapshot(tmp_path) == before


def test_an_existing_sidecar_is_kept_unless_told(tree: Path, tmp_path: Path) -> None:
    (tmp_path / "set.oakum").write_bytes(b"precious")
    with pytest.raises(UsageError, match="exists already.*--overwrite"):
        protect([tree])
    with pytest.raises(UsageError, match="exists already"):
        protect_pipe(io.BytesIO(b"1"), name="x", output=tmp_path / "set.oakum")
    assert (tmp_path / "set.oakum").read_bytes() == b"precious"
    protect([tree], overwrite=True)
    assert verify(tree).outcome is Outcome.INTACT
    assert sorted(os.listdir(tmp_path)) == ["set", "set.oakum"]


@pytest.mark.parametrize("paths", [["set", "set"], ["set", "set/a"], ["set/a", "set/../set/a"]])
def test_a_path_given_twice(tree: Path, tmp_path: Path, paths: list[str]) -> None:
    with pytest.raises(UsageError, match="given twice"):
        protect([tmp_path / p for p in paths], output=tmp_path / "x.oakum")
    assert os.listdir(tmp_path) == ["set"]


def test_several_paths_without_output(tree: Path) -> None:
    with pytest.raises(UsageError, match="need --output"):
        protect([tree / "a", tree / "z"])


def test_nothing_there(tmp_path: Path) -> None:
    with pytest.raises(CannotCheck, match="no such file or directory"):
        protect([tmp_path / "nothing"])
    with pytest.raises(UsageError, match="at least one"):
        protect([])
    assert os.listdir(tmp_path) == []


@pytest.mark.parametrize("name", ["", "/abs", "../up", "a/../b", "a//b", "x\0y", "n" * 300])
def test_a_pipe_needs_a_name_that_a_file_can_have(tmp_path: Path, name: str) -> None:
    with pytest.raises(UsageError, match="cannot be the name"):
        protect_pipe(io.BytesIO(b"1"), name=name, output=tmp_path / "x")
    assert os.listdir(tmp_path) == []


def test_a_pipe_of_too_deep_windows(tmp_path: Path) -> None:
    with pytest.raises(UsageError, match=r"need --memory \d+MiB"):
        protect_pipe(io.BytesIO(b"1"), name="x", output=tmp_path / "x", depth=1 << 24, memory=64 << 20)
    assert os.listdir(tmp_path) == []


def fails_with(code: int, after: int) -> Callable[..., int]:
    """`os.pwrite` as on a disk that fails at the write number `after`."""
    through, count = os.pwrite, 0

    def write(fd: int, data: memoryview, offset: int) -> int:
        nonlocal count
        count += 1
        if count > after:
            raise OSError(code, os.strerror(code))
        return through(fd, data, offset)

    return write


@pytest.mark.parametrize("after", [0, 3, 40])
def test_a_full_disk(tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, after: int) -> None:
    before = snapshot(tmp_path)
    monkeypatch.setattr(os, "pwrite", fails_with(errno.ENOSPC, after))
    with pytest.raises(CannotCheck, match=r"set\.oakum could not be written: no space left"):
        protect([tree])
    assert snapshot(tmp_path) == before


def test_a_full_disk_during_a_repair(tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    protect([tree])
    rewrite(tree / "a", with_flips(content(70_000), 2))
    shutil.rmtree(tree / "d")
    before = snapshot(tmp_path)
    monkeypatch.setattr(os, "pwrite", fails_with(errno.ENOSPC, 1))
    with pytest.raises(CannotCheck, match="no space left"):
        repair(tree)
    assert snapshot(tmp_path) == before


def test_too_little_room_is_said_before_the_work(
    tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    usage = shutil._ntuple_diskusage(1000, 900, 100)  # type: ignore[attr-defined]
    monkeypatch.setattr(shutil, "disk_usage", lambda _: usage)
    with pytest.raises(CannotCheck, match="has room for 100 bytes"):
        protect([tree])
    assert os.listdir(tmp_path) == ["set"]


def test_no_permission(tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    through = os.open

    def refuse(path: object, *rest: object, **more: object) -> int:
        if path == b"z":
            raise PermissionError(errno.EACCES, "Permission denied")
        return through(path, *rest, **more)  # type: ignore[arg-type]

    monkeypatch.setattr(os, "open", refuse)
    with pytest.raises(CannotCheck, match="set/z cannot be opened: permission denied"):
        protect([tree])
    assert os.listdir(tmp_path) == ["set"]


def test_a_file_that_does_not_read(tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    BadSectors({tree / "z": [(512_000, 512_512)]}).install(monkeypatch)
    with pytest.raises(CannotCheck, match="set/z could not be read"):
        protect([tree])
    assert os.listdir(tmp_path) == ["set"]


class During:
    """A `Progress` that does something when the first bytes have been read."""

    def __init__(self, act: Callable[[], object]) -> None:
        self._act: Callable[[], object] | None = act

    def phase(self, name: str, total: int | None) -> None:
        pass

    def advance(self, nbytes: int) -> None:
        act, self._act = self._act, None
        if act is not None:
            act()

    def note(self, text: str) -> None:
        pass


@pytest.mark.parametrize("memory", [512 << 20, TIGHT])
@pytest.mark.parametrize("how", ["grown", "shrunk", "gone"])
def test_a_source_that_changes_ends_the_run(tmp_path: Path, how: str, memory: int) -> None:
    folder = plant(tmp_path / "set", {"a": content(6_000_000), "z": content(90_000)})
    act = {
        "grown": lambda: (folder / "z").write_bytes(content(90_001)),
        "shrunk": lambda: os.truncate(folder / "z", 10),
        "gone": (folder / "z").unlink,
    }[how]
    with pytest.raises(CannotCheck, match="set/[az] (changed|could not be read|went away)"):
        protect([folder], memory=memory, progress=During(act))
    assert os.listdir(tmp_path) == ["set"]


class Changing:
    """Stands in for `os.preadv`: from the second time on, one byte of a file reads otherwise."""

    def __init__(self, file: Path, place: int, patch: pytest.MonkeyPatch) -> None:
        self.file, self.place, self.times = file.stat(), place, 0
        self.true = os.preadv
        patch.setattr(os, "preadv", self)

    def __call__(self, fd: int, buffers: list[memoryview], offset: int) -> int:
        got = self.true(fd, buffers, offset)
        if os.path.samestat(os.fstat(fd), self.file) and offset <= self.place < offset + got:
            self.times += 1
            if self.times > 1:
                buffers[0][self.place - offset] ^= 1
        return got


@pytest.mark.parametrize(
    "name, place", [("a", 0), ("a", 2_999_999), ("b", 0), ("b", 40_000), ("c", 2_999_999)]
)
def test_content_that_changes_between_two_reads(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, name: str, place: int
) -> None:
    """Size and time stay the same; only the digests of the two reads can tell, and which file it was."""
    folder = plant(
        tmp_path / "set", {"a": content(3_000_000), "b": content(100_000), "c": content(3_000_000)}
    )
    changing = Changing(folder / name, place, monkeypatch)
    with pytest.raises(CannotCheck, match=f"set/{name}.* changed while it was read"):
        protect([folder], memory=TIGHT)
    assert changing.times > 1
    assert os.listdir(tmp_path) == ["set"]


def test_content_that_changed_for_one_read_only(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Nobody can say which file it was any more."""
    folder = plant(tmp_path / "set", {name: content(1_500_000, i) for i, name in enumerate("abcde")})
    weigh, more = encoding.weighted, iter([0, 1])
    monkeypatch.setattr(
        encoding, "weighted", lambda digests, first: weigh(digests, first) + (next(more) if first == 0 else 0)
    )
    with pytest.raises(CannotCheck, match="set/a or set/b or set/c or one of 2 others changed"):
        protect([folder], memory=TIGHT)


def test_a_write_that_shows_in_the_time_only(tmp_path: Path) -> None:
    """The same bytes written again: nobody knows what was read in between."""
    folder = plant(tmp_path / "set", {"a": content(6_000_000), "z": content(90_000)})
    act = During(lambda: os.utime(folder / "z"))
    with pytest.raises(CannotCheck, match="set/z changed while it was read"):
        protect([folder], progress=act)
    assert os.listdir(tmp_path) == ["set"]


class Advances:
    """A `Progress` that keeps what it is told."""

    def __init__(self) -> None:
        self.total: int | None = None
        self.told: list[int] = []

    def phase(self, name: str, total: int | None) -> None:
        if name.startswith("reading"):
            self.total, self.told = total, []

    def advance(self, nbytes: int) -> None:
        self.told.append(nbytes)

    def note(self, text: str) -> None:
        pass


@pytest.mark.parametrize("memory", [512 << 20, TIGHT])
def test_a_slow_source_keeps_the_progress_honest(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, memory: int
) -> None:
    """Nothing is told as read that is not, and while nothing comes that is told too."""
    file = tmp_path / "f"
    file.write_bytes(content(6_000_000))
    waited: list[int] = []
    true = os.preadv

    def slow(fd: int, buffers: list[memoryview], offset: int) -> int:
        if not waited:
            waited.append(sum(progress.told))
            time.sleep(0.3)
        return true(fd, buffers, offset)

    monkeypatch.setattr(pools, "PATIENCE", 0.02)
    monkeypatch.setattr(os, "preadv", slow)
    progress = Advances()
    protect([file], memory=memory, jobs=1, progress=progress)
    assert waited == [0]
    assert 0 in progress.told
    assert sum(progress.told) == progress.total == 6_000_000 * (1 if memory > TIGHT else 2)
    waited.clear()
    verify(file, jobs=1, progress=progress)
    assert 0 in progress.told
    assert sum(progress.told) == progress.total
