"""repair on real trees: damage of every kind inside capacity comes back and is counted exactly."""

from __future__ import annotations

import os
import shutil
from pathlib import Path

import pytest
from support import BadSectors, content, flipped_bits, overwritten, plant, rewrite, snapshot, with_flips

from oakum import CannotCheck, UsageError, protect, repair, verify
from oakum.geometry import CELL
from oakum.jobs import checking
from oakum.results import CheckResult, MemberState, Outcome

CODES = ("shelf", "slim", "stout", "plain")
BIG = 1_300_000

FILES = {
    "a.tif": content(150_000, 1),
    "deep/down/b.txt": content(700, 2),
    "deep/empty": b"",
    "deep/hollow/": b"",
    "one": b"x",
    "z.tar": content(BIG, 3),
}


@pytest.fixture
def tree(tmp_path: Path) -> Path:
    """A folder `set` with files of many sizes, an empty folder and two links."""
    folder = plant(tmp_path / "set", FILES)
    (folder / "link").symlink_to("a.tif")
    (folder / "nowhere").symlink_to("/not/there\n")
    os.utime(folder / "a.tif", ns=(10**18, 10**18 + 123_456_789))
    (folder / "a.tif").chmod(0o640)
    (folder / "deep/down").chmod(0o750)
    return folder


def back(folder: Path, tmp_path: Path, original: dict[str, bytes | str | None]) -> CheckResult:
    """Repair to a folder of its own, compare every byte there, and return the result."""
    result = repair(folder, output=tmp_path / "out")
    assert result.outcome is Outcome.CORRECTABLE
    assert snapshot(tmp_path / "out" / folder.name) == original
    return result


@pytest.mark.parametrize("depth", [None, 4096], ids=["whole", "windows"])
@pytest.mark.parametrize("code", CODES)
def test_flips_and_a_burst_come_back_and_are_counted(
    tree: Path, tmp_path: Path, code: str, depth: int | None
) -> None:
    original = snapshot(tree)
    protect([tree], code=code, depth=depth)
    damaged = overwritten(with_flips(FILES["z.tar"], 60), 200_000, 20_000)
    rewrite(tree / "z.tar", damaged)
    rewrite(tree / "one", b"y")
    rewrite(tree / "a.tif", with_flips(FILES["a.tif"], 7))
    bits = {
        "set/z.tar": flipped_bits(damaged, FILES["z.tar"]),
        "set/one": flipped_bits(b"y", b"x"),
        "set/a.tif": 7,
    }
    before = snapshot(tmp_path)
    seen = verify(tree)
    assert snapshot(tmp_path) == before
    result = back(tree, tmp_path, original)
    for found in (seen, result):
        assert found.outcome is Outcome.CORRECTABLE
        assert found.totals.bits_flipped == sum(bits.values())
        assert {m.path: m.bits_flipped for m in found.members if m.bits_flipped} == bits
        assert sum(b.bits_flipped for b in found.blocks) == sum(bits.values())
        assert found.totals.symbols_wrong == sum(b.symbols_wrong for b in found.blocks)
        assert found.totals.bits_flipped_burst + found.totals.bits_flipped_scattered == sum(bits.values())
        # A burst of random bytes leaves one byte in 256 right, which may shorten it at its ends.
        assert abs(found.totals.bits_flipped_burst - flipped_bits(
            damaged[200_000:220_000], FILES["z.tar"][200_000:220_000])) <= 8  # fmt: skip
        assert found.sidecar.state is Outcome.INTACT
        assert found.totals.blocks == found.totals.blocks_clean + len(found.blocks)


def test_a_file_cut_short_and_one_with_bytes_added(tree: Path, tmp_path: Path) -> None:
    original = snapshot(tree)
    protect([tree])
    rewrite(tree / "z.tar", FILES["z.tar"][:-70_001])
    rewrite(tree / "a.tif", FILES["a.tif"] + b"more")
    result = back(tree, tmp_path, original)
    assert result.totals.bytes_erased == 70_001
    assert result.totals.bits_flipped == 0
    states = {m.path: (m.state, m.detail) for m in result.members}
    assert states["set/z.tar"] == (MemberState.ALTERED, "is 70,001 bytes short")
    assert states["set/a.tif"] == (MemberState.ALTERED, "has 4 bytes added at its end")
    assert verify(tree).outcome is Outcome.CORRECTABLE


def test_only_added_bytes_are_damage_too(tree: Path, tmp_path: Path) -> None:
    protect([tree])
    rewrite(tree / "a.tif", FILES["a.tif"] + b"more")
    assert verify(tree).outcome is Outcome.CORRECTABLE
    assert repair(tree).outcome is Outcome.CORRECTABLE
    assert (tree / "a.mended.tif").read_bytes() == FILES["a.tif"]
    assert (tree / "a.tif").read_bytes() == FILES["a.tif"] + b"more"


def test_absent_members_get_bits_and_times_back(tree: Path) -> None:
    original = snapshot(tree)
    stats = {p.relative_to(tree): p.stat(follow_symlinks=False) for p in tree.rglob("*")}
    protect([tree])
    shutil.rmtree(tree / "deep")
    for name in ("a.tif", "one", "link", "nowhere"):
        (tree / name).unlink()
    seen = verify(tree)
    assert {m.state for m in seen.members} == {MemberState.ABSENT, MemberState.INTACT}
    assert seen.outcome is Outcome.CORRECTABLE
    result = repair(tree)
    assert result.outcome is Outcome.CORRECTABLE
    assert result.totals.bytes_erased == 150_000 + 700 + 1
    assert snapshot(tree) == original
    for path, before in stats.items():
        now = (tree / path).stat(follow_symlinks=False)
        assert now.st_mode == before.st_mode, path
        if not (tree / path).is_symlink():
            assert now.st_mtime_ns == before.st_mtime_ns, path
    assert verify(tree).outcome is Outcome.INTACT


def test_a_whole_small_folder_comes_back(tmp_path: Path) -> None:
    folder = plant(tmp_path / "set", {"a/b": content(1500), "c/": b"", "d": b""})
    original = snapshot(folder)
    protect([folder])
    shutil.rmtree(folder)
    assert repair(tmp_path / "set.oakum").outcome is Outcome.CORRECTABLE
    assert snapshot(folder) == original


def test_a_medium_that_is_not_there_is_not_a_loss(tree: Path, tmp_path: Path) -> None:
    protect([tree])
    shutil.rmtree(tree)
    for job in (verify, repair):
        with pytest.raises(CannotCheck, match="check that the medium is mounted"):
            job(tmp_path / "set.oakum")
    assert os.listdir(tmp_path) == ["set.oakum"]


def test_read_errors_are_erasures(tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    original = snapshot(tree)
    protect([tree])
    BadSectors({tree / "z.tar": [(4096, 4608), (900_000, 930_000)]}).install(monkeypatch)
    rewrite(tree / "z.tar", with_flips(FILES["z.tar"], 20, within=(500_000, 600_000)))
    result = back(tree, tmp_path, original)
    erased = 512 + 30_000 + (900_000 % 512) + (512 - 930_000 % 512) % 512
    assert result.totals.bytes_erased <= erased
    assert result.totals.bytes_erased >= 30_512
    assert result.totals.bits_flipped == 20


def test_a_list_of_unreadable_ranges(tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """What is listed is not even tried; ranges may overlap each other and the end of a file cut short."""
    original = snapshot(tree)
    protect([tree])
    listed = tmp_path / "bad.csv"
    listed.write_text("path,offset,length\n# seen by the drive\nset/z.tar,1000,500\nset/z.tar,1200,700\n"
                      "set/z.tar,1290000,20000\n\n")  # fmt: skip
    rewrite(tree / "z.tar", FILES["z.tar"][:1_295_000])
    BadSectors({tree / "z.tar": [(1000, 1900)]}).install(monkeypatch)
    tried: list[tuple[int, int]] = []
    through = os.preadv

    def spy(fd: int, buffers: list[memoryview], offset: int) -> int:
        if os.fstat(fd).st_size == 1_295_000:
            tried.append((offset, offset + len(buffers[0])))
        return through(fd, buffers, offset)

    monkeypatch.setattr(os, "preadv", spy)
    result = repair(tree, output=tmp_path / "out", unreadable=listed)
    assert snapshot(tmp_path / "out" / "set") == original
    assert result.totals.bytes_erased == 900 + 10_000
    assert result.totals.bits_read == 8 * (sum(map(len, FILES.values())) - 10_900)
    assert not [r for r in tried if r[0] < 1900 and r[1] > 1000]
    assert not [r for r in tried if r[1] > 1_290_000]


@pytest.mark.parametrize("line", ["set/a.tif,1", "set/a.tif,x,2", "set/a.tif,-1,2", "set/a.tif,1,0", ",1,2",
                                  "set/a.tif,1,99999999999999999999"])  # fmt: skip
def test_a_bad_list_is_refused_by_line(tree: Path, tmp_path: Path, line: str) -> None:
    protect([tree])
    listed = tmp_path / "bad.csv"
    listed.write_text(f"set/a.tif,5,5\n{line}\n")
    with pytest.raises(UsageError, match="line 2"):
        verify(tree, unreadable=listed)


def test_many_files_in_one_cell(tmp_path: Path) -> None:
    files = {f"{i:03}": content(i % 40, i) for i in range(600)}
    files["large"] = content(100_000, 7)
    folder = plant(tmp_path / "set", files)
    original = snapshot(folder)
    protect([folder])
    bits = 0
    for i in range(100, 200, 3):
        if len(files[f"{i:03}"]) > 3:
            damaged = with_flips(files[f"{i:03}"], 3)
            bits += 3
            rewrite(folder / f"{i:03}", damaged)
    for i in range(300, 340):
        (folder / f"{i:03}").unlink()
    result = back(folder, tmp_path, original)
    assert result.totals.bits_flipped == bits
    assert result.totals.bytes_erased == sum(len(files[f"{i:03}"]) for i in range(300, 340))


@pytest.mark.parametrize("size", [1, 63, 64, 65, 4095, 65_535, 65_536, 65_537])
@pytest.mark.parametrize("code", CODES)
def test_small_files(tmp_path: Path, code: str, size: int) -> None:
    file = tmp_path / "f"
    data = content(size)
    file.write_bytes(data)
    protect([file], code=code)
    assert verify(file).outcome is Outcome.INTACT
    flips = min(5, size)
    rewrite(file, with_flips(data, flips))
    seen = verify(file)
    assert (seen.outcome, seen.totals.bits_flipped) == (Outcome.CORRECTABLE, flips)
    result = repair(file, output=tmp_path / "mended")
    assert result.totals.bits_flipped == flips
    assert (tmp_path / "mended").read_bytes() == data


@pytest.mark.parametrize("depth", [None, 4096])
def test_an_empty_set_and_empty_files(tmp_path: Path, depth: int | None) -> None:
    folder = plant(tmp_path / "set", {"e": b"", "f": b""})
    (tmp_path / "bare").mkdir()
    for name in ("set", "bare"):
        protect([tmp_path / name], depth=depth)
        assert verify(tmp_path / name).outcome is Outcome.INTACT
    (folder / "e").unlink()
    (folder / "f").write_bytes(b"no longer empty")
    seen = verify(folder)
    assert {m.path: m.state for m in seen.members} == {
        "set": MemberState.INTACT, "set/e": MemberState.ABSENT, "set/f": MemberState.ALTERED}  # fmt: skip
    assert repair(folder, output=tmp_path / "out").outcome is Outcome.CORRECTABLE
    assert snapshot(tmp_path / "out" / "set") == {"e": b"", "f": b""}


# -- the sidecar itself ----------------------------------------------------------------------------


@pytest.mark.parametrize("depth", [None, 4096], ids=["whole", "windows"])
@pytest.mark.parametrize("code", ["shelf", "plain"])
def test_sidecar_and_data_damaged_together(tree: Path, tmp_path: Path, code: str, depth: int | None) -> None:
    original = snapshot(tree)
    sidecar = protect([tree], code=code, depth=depth).sidecar
    whole = sidecar.read_bytes()
    hurt = overwritten(with_flips(whole, 40), len(whole) // 2, 4000)
    sidecar.write_bytes(hurt)
    rewrite(tree / "z.tar", with_flips(FILES["z.tar"], 50))
    (tree / "deep/down/b.txt").unlink()
    seen = verify(tree)
    assert seen.totals.bits_flipped == 50
    assert seen.sidecar.state is Outcome.CORRECTABLE
    assert seen.sidecar.bits_flipped == flipped_bits(whole, hurt)
    result = repair(tree)
    assert result.outcome is Outcome.CORRECTABLE
    assert (tmp_path / "set.mended.oakum").read_bytes() == whole
    assert result.sidecar.mended == tmp_path / "set.mended.oakum"
    assert (tree / "z.mended.tar").read_bytes() == FILES["z.tar"]
    assert (tree / "deep/down/b.txt").read_bytes() == original["deep/down/b.txt"]


@pytest.mark.parametrize("length", [0, 1, 3000, 70_000, 1_300_000])
def test_every_byte_of_a_sidecar_is_watched(tmp_path: Path, length: int) -> None:
    """One flip anywhere, padding and gaps included, is seen, and the sidecar comes back byte for byte."""
    file = tmp_path / "f"
    file.write_bytes(content(length))
    sidecar = protect([file]).sidecar
    whole = sidecar.read_bytes()
    step = max(1, len(whole) // 60)
    for place in [*range(0, len(whole), step), len(whole) - 1]:
        hurt = bytearray(whole)
        hurt[place] ^= 1 << place % 8
        sidecar.write_bytes(hurt)
        seen = verify(file)
        assert (seen.sidecar.state, seen.sidecar.bits_flipped) == (Outcome.CORRECTABLE, 1), place
        assert seen.totals.bits_flipped == 0
        assert not any(m.state is not MemberState.INTACT for m in seen.members)
    assert repair(file).outcome is Outcome.CORRECTABLE
    assert (tmp_path / "f.mended.oakum").read_bytes() == whole
    assert sorted(os.listdir(tmp_path)) == ["f", "f.mended.oakum", "f.oakum"]


@pytest.mark.parametrize(
    ("how", "where"),
    [
        ("cut", "front"),
        ("cut", "end"),
        *((h, w) for h in ("zeroed", "overwritten") for w in ("front", "middle", "end")),
    ],
)
def test_a_third_of_the_sidecar_is_lost(tree: Path, tmp_path: Path, where: str, how: str) -> None:
    """The records survive and the members are right, so that it can be written anew as it was."""
    sidecar = protect([tree]).sidecar
    whole = sidecar.read_bytes()
    third = len(whole) // 3
    start = {"front": 0, "middle": third, "end": len(whole) - third}[where]
    if how == "cut":
        hurt = whole[third:] if where == "front" else whole[:-third]
    elif how == "zeroed":
        hurt = whole[:start] + bytes(third) + whole[start + third :]
    else:
        hurt = overwritten(whole, start, third)
    sidecar.write_bytes(hurt)
    seen = verify(tree)
    assert all(m.state is MemberState.INTACT for m in seen.members)
    assert seen.outcome is Outcome.CORRECTABLE
    assert repair(tree).sidecar.mended is not None
    assert (tmp_path / "set.mended.oakum").read_bytes() == whole


def test_bytes_inserted_before_the_sidecar(tree: Path, tmp_path: Path) -> None:
    sidecar = protect([tree]).sidecar
    whole = sidecar.read_bytes()
    sidecar.write_bytes(content(12_345) + whole)
    rewrite(tree / "z.tar", with_flips(FILES["z.tar"], 50))
    result = repair(tree)
    assert result.totals.bits_flipped == 50
    assert (tree / "z.mended.tar").read_bytes() == FILES["z.tar"]
    assert "12,345 bytes that are not its own" in result.sidecar.detail
    assert (tmp_path / "set.mended.oakum").read_bytes() == whole


@pytest.mark.parametrize("size", [4000, 1_300_000])
def test_bytes_added_to_the_sidecar_or_cut_off(tmp_path: Path, size: int) -> None:
    (tmp_path / "f").write_bytes(content(size))
    sidecar = protect([tmp_path / "f"]).sidecar
    whole = sidecar.read_bytes()
    for hurt, said in ((whole + b"more", "4 bytes that are not"), (whole[:-1000], "1,000 bytes of it")):
        sidecar.write_bytes(hurt)
        seen = verify(tmp_path / "f")
        assert (seen.outcome, seen.sidecar.state) == (Outcome.CORRECTABLE, Outcome.CORRECTABLE)
        assert seen.sidecar.detail.startswith(said)
        assert repair(tmp_path / "f").sidecar.mended == tmp_path / "f.mended.oakum"
        assert (tmp_path / "f.mended.oakum").read_bytes() == whole
        (tmp_path / "f.mended.oakum").unlink()


@pytest.mark.parametrize("size", [4000, 1_300_000])
def test_sidecar_bytes_that_do_not_read(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, size: int) -> None:
    """Parity strips, inner parity, records and text: one sector each time, which is said to be damage."""
    (tmp_path / "f").write_bytes(content(size))
    sidecar = protect([tmp_path / "f"]).sidecar
    length = sidecar.stat().st_size
    for start in [0, *range(4608, length - 512, length // 12 // 512 * 512)]:
        with monkeypatch.context() as patch:
            BadSectors({sidecar: [(start, start + 512)]}).install(patch)
            seen = verify(tmp_path / "f")
        assert seen.sidecar.state is Outcome.CORRECTABLE, start
        assert seen.sidecar.detail == "512 bytes of it could not be read", start
        assert seen.members[0].state is MemberState.INTACT


# -- past capacity ---------------------------------------------------------------------------------


def test_past_capacity_nothing_is_written(tree: Path, tmp_path: Path) -> None:
    protect([tree])
    rewrite(tree / "z.tar", overwritten(FILES["z.tar"], 100_000, 600_000))
    shutil.rmtree(tree / "deep")
    before = snapshot(tmp_path)
    seen = verify(tree)
    assert seen.outcome is Outcome.UNCORRECTABLE
    for output in (None, tmp_path / "new" / "out"):
        result = repair(tree, output=output)
        assert result.outcome is Outcome.UNCORRECTABLE
        assert snapshot(tmp_path) == before
        (lost,) = [m for m in result.members if m.path == "set/z.tar"]
        assert lost.state is MemberState.UNCORRECTABLE
        assert lost.bits_flipped is None
        assert lost.lost
    assert any(b.state is Outcome.UNCORRECTABLE and b.margin is None for b in result.blocks)


def test_accept_loss_writes_what_can_be_had(tree: Path, tmp_path: Path) -> None:
    protect([tree])
    rewrite(tree / "z.tar", overwritten(FILES["z.tar"], 100_000, 600_000))
    rewrite(tree / "a.tif", with_flips(FILES["a.tif"], 1))
    result = repair(tree, output=tmp_path / "out", accept_loss=True)
    assert result.outcome is Outcome.UNCORRECTABLE
    (lost,) = [m for m in result.members if m.path == "set/z.tar"]
    got = bytearray((tmp_path / "out/set/z.tar").read_bytes())
    assert len(got) == BIG
    for start, length in lost.lost:
        got[start : start + length] = FILES["z.tar"][start : start + length]
    assert bytes(got) == FILES["z.tar"]
    assert sum(length for _, length in lost.lost) < 700_000


def test_one_member_of_many(tree: Path, tmp_path: Path) -> None:
    protect([tree])
    rewrite(tree / "a.tif", with_flips(FILES["a.tif"], 9))
    rewrite(tree / "z.tar", with_flips(FILES["z.tar"], 9))
    assert repair(tree, members=["set/a.tif"]).outcome is Outcome.CORRECTABLE
    assert (tree / "a.mended.tif").read_bytes() == FILES["a.tif"]
    assert not (tree / "z.mended.tar").exists()
    repair(tree, members=["set/deep/"], output=tmp_path / "out")
    assert snapshot(tmp_path / "out/set/deep") == snapshot(tree / "deep")
    assert os.listdir(tmp_path / "out/set") == ["deep"]
    with pytest.raises(UsageError, match="no member set/nothing"):
        repair(tree, members=["set/nothing"])


def test_one_good_member_of_a_set_beyond_help(tree: Path, tmp_path: Path) -> None:
    """What is asked for is judged, not what is not."""
    protect([tree])
    rewrite(tree / "z.tar", overwritten(FILES["z.tar"], 300_000, 900_000))
    repair(tree, members=["set/deep/down/b.txt"], output=tmp_path / "out")
    assert (tmp_path / "out/set/deep/down/b.txt").read_bytes() == FILES["deep/down/b.txt"]


# -- names, kinds and places -----------------------------------------------------------------------


def test_output_may_name_the_file(tmp_path: Path) -> None:
    file = tmp_path / "x.tar"
    file.write_bytes(content(100_000))
    protect([file])
    rewrite(file, with_flips(content(100_000), 3))
    repair(file, output=tmp_path / "good.tar")
    assert (tmp_path / "good.tar").read_bytes() == content(100_000)
    with pytest.raises(UsageError, match=r"good\.tar exists already"):
        repair(file, output=tmp_path / "good.tar")
    (tmp_path / "folder").mkdir()
    repair(file, output=tmp_path / "folder")
    assert (tmp_path / "folder/x.tar").read_bytes() == content(100_000)


def test_an_existing_output_is_kept(tree: Path, tmp_path: Path) -> None:
    protect([tree])
    rewrite(tree / "a.tif", with_flips(FILES["a.tif"], 3))
    rewrite(tree / "z.tar", with_flips(FILES["z.tar"], 3))
    (tree / "z.mended.tar").write_bytes(b"mine")
    before = snapshot(tmp_path)
    with pytest.raises(UsageError, match=r"z\.mended\.tar exists already"):
        repair(tree)
    assert snapshot(tmp_path) == before


def test_something_else_stands_in_the_place_of_a_member(tree: Path, tmp_path: Path) -> None:
    """A folder where a file was, a file where a folder was, a link where a file was."""
    original = snapshot(tree)
    protect([tree])
    (tree / "a.tif").unlink()
    plant(tree, {"a.tif/inside": b"kept"})
    (tree / "one").unlink()
    (tree / "one").symlink_to("z.tar")
    (tree / "deep/hollow").rmdir()
    (tree / "deep/hollow").write_bytes(b"kept too")
    seen = verify(tree)
    assert seen.outcome is Outcome.CORRECTABLE
    before = snapshot(tree)
    result = repair(tree)
    assert result.outcome is Outcome.CORRECTABLE
    now = snapshot(tree)
    assert {name: now[name] for name in before} == before
    assert now["a.mended.tif"] == FILES["a.tif"]
    assert now["one.mended"] == b"x"
    back(tree, tmp_path, original)


def test_links_are_never_written_through(tree: Path, tmp_path: Path) -> None:
    """A folder that became a link is in the way: nothing outside is touched."""
    protect([tree])
    elsewhere = plant(tmp_path / "elsewhere", {"down/b.txt": b"not ours"})
    shutil.rmtree(tree / "deep")
    (tree / "deep").symlink_to(elsewhere)
    seen = verify(tree)
    assert {m.path: m.state for m in seen.members}["set/deep/down/b.txt"] is MemberState.ABSENT
    before = snapshot(elsewhere)
    with pytest.raises(CannotCheck):
        repair(tree)
    assert snapshot(elsewhere) == before
    assert sorted(p.name for p in tree.iterdir()) == ["a.tif", "deep", "link", "nowhere", "one", "z.tar"]
    assert repair(tree, output=tmp_path / "out").outcome is Outcome.CORRECTABLE
    assert (tmp_path / "out/set/deep/down/b.txt").read_bytes() == FILES["deep/down/b.txt"]


def test_names_that_are_not_utf8(tmp_path: Path) -> None:
    folder = os.fsencode(tmp_path / "set")
    os.mkdir(folder)
    name = folder + b"/caf\xe9\n.txt"
    Path(os.fsdecode(name)).write_bytes(content(5000))
    plant(tmp_path / "set", {"other": content(60_000)})
    protect([tmp_path / "set"])
    os.unlink(name)
    assert repair(tmp_path / "set.oakum").outcome is Outcome.CORRECTABLE
    assert Path(os.fsdecode(name)).read_bytes() == content(5000)


def test_hard_links_and_sparse_files(tmp_path: Path) -> None:
    folder = plant(tmp_path / "set", {"first": content(80_000)})
    os.link(folder / "first", folder / "second")
    with open(folder / "sparse", "wb") as file:
        file.seek(400_000)
        file.write(b"end")
    original = snapshot(folder)
    protect([folder])
    (folder / "second").unlink()
    rewrite(folder / "sparse", with_flips((folder / "sparse").read_bytes(), 30))
    assert repair(folder, output=tmp_path / "out").outcome is Outcome.CORRECTABLE
    assert snapshot(tmp_path / "out/set") == original
    assert (tmp_path / "out/set/first").stat().st_nlink == 1


def test_an_edited_member_is_named_as_such(tree: Path) -> None:
    protect([tree])
    (tree / "deep/down/b.txt").write_bytes(content(700, 99))
    (report,) = [m for m in verify(tree).members if m.path.endswith("b.txt")]
    assert report.edited
    assert "edited rather than decayed" in report.detail
    rewrite(tree / "a.tif", with_flips(FILES["a.tif"], 1))
    (report,) = [m for m in verify(tree).members if m.path.endswith("a.tif")]
    assert not report.edited


def test_root_says_where_the_members_are(tree: Path, tmp_path: Path) -> None:
    sidecar = protect([tree]).sidecar
    (tmp_path / "away").mkdir()
    moved = sidecar.rename(tmp_path / "away/set.oakum")
    rewrite(tree / "a.tif", with_flips(FILES["a.tif"], 4))
    assert verify(moved, root=tmp_path).totals.bits_flipped == 4
    assert verify(tree, sidecar=moved, root=tmp_path).totals.bits_flipped == 4
    repair(moved, root=tmp_path)
    assert (tree / "a.mended.tif").read_bytes() == FILES["a.tif"]


@pytest.mark.parametrize("jobs", [1, 4])
def test_the_number_of_threads_changes_nothing(tree: Path, tmp_path: Path, jobs: int) -> None:
    original = snapshot(tree)
    protect([tree], depth=4096, jobs=jobs)
    rewrite(tree / "z.tar", overwritten(FILES["z.tar"], 5000, 90_000))
    result = repair(tree, jobs=jobs, output=tmp_path / "out")
    assert snapshot(tmp_path / "out/set") == original
    assert [(b.window, b.block) for b in result.blocks] == sorted((b.window, b.block) for b in result.blocks)


@pytest.mark.parametrize("dense", [0, 20, 10**6], ids=["never", "by default", "always"])
def test_bytes_come_from_the_decoder_or_are_copied(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, dense: int
) -> None:
    """Five blocks in groups of one: many cells of one are damaged, one of two others, none of the rest."""
    monkeypatch.setattr(checking, "GROUP", 1)
    monkeypatch.setattr(checking, "DENSE", dense)
    first, second = content(2_000_000, 5), content(2_300_000, 6)
    folder = plant(tmp_path / "set", {"a": first, "b": second})
    depth = protect([folder]).depth
    assert depth == 4 * CELL + 2944
    damaged = bytearray(first + second)
    for strip in range(0, 200, 4):
        damaged[strip * depth + CELL + strip] ^= 1
    damaged[9 * depth + 3 * CELL] ^= 0x81
    damaged[99 * depth + 4 * CELL + 2943] ^= 2
    rewrite(folder / "a", bytes(damaged[: len(first)]))
    rewrite(folder / "b", bytes(damaged[len(first) :]))
    result = repair(folder, output=tmp_path / "out")
    assert (tmp_path / "out/set/a").read_bytes() == first
    assert (tmp_path / "out/set/b").read_bytes() == second
    assert result.totals.bits_flipped == 53
    assert result.totals.blocks_correctable == 3
