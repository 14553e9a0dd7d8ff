"""repair --in-place: the bytes come right where they are, and the journal brings back every one of them."""

from __future__ import annotations

import os
import shutil
from pathlib import Path
from typing import Any

import pytest
from support import BadSectors, content, overwritten, plant, rewrite, snapshot, with_flips

from oakum import CannotCheck, UsageError, protect, repair, roll_back, verify
from oakum.encoding import RESERVE
from oakum.files import Lock
from oakum.jobs import replay
from oakum.jobs.journal import Journal, journal_path
from oakum.progress import Silent
from oakum.results import MemberState, Outcome

FILES = {
    "a.tif": content(150_000, 1),
    "deep/down/b.txt": content(700, 2),
    "deep/empty": b"",
    "one": b"x",
    "z.tar": content(600_000, 3),
}


@pytest.fixture
def tree(tmp_path: Path) -> Path:
    """A protected folder `set`."""
    folder = plant(tmp_path / "set", FILES)
    (folder / "link").symlink_to("a.tif")
    (folder / "a.tif").chmod(0o640)
    os.utime(folder / "a.tif", ns=(10**18, 10**18 + 7))
    return folder


def everything(folder: Path) -> dict[str, tuple[object, ...]]:
    """Bytes, permission bits, times and inode numbers of everything below a folder."""
    stats = {name: (folder / name).lstat() for name in snapshot(folder)}
    return {
        name: (data, stats[name].st_mode, stats[name].st_ino, data is not None and stats[name].st_mtime_ns)
        for name, data in snapshot(folder).items()
    }


def damage(tree: Path) -> None:
    """Flips, a burst, a file cut short, one with bytes added, and a sidecar that is hurt."""
    rewrite(tree / "z.tar", overwritten(with_flips(FILES["z.tar"], 60), 200_000, 9_000))
    rewrite(tree / "a.tif", FILES["a.tif"][:-5_000])
    rewrite(tree / "one", b"xyz" * 700_000)
    sidecar = tree.with_name("set.oakum")
    rewrite(sidecar, overwritten(with_flips(sidecar.read_bytes(), 30), 50_000, 3_000)[:-500])


@pytest.mark.parametrize("depth", [None, 4096], ids=["whole", "windows"])
@pytest.mark.parametrize("code", ["shelf", "plain"])
def test_forwards_and_back(tree: Path, tmp_path: Path, code: str, depth: int | None) -> None:
    sidecar = protect([tree], code=code, depth=depth).sidecar
    good = {**everything(tree), "": sidecar.read_bytes()}
    damage(tree)
    bad = {**everything(tree), "": sidecar.read_bytes()}
    assert good.keys() == bad.keys() and good != bad
    before = verify(tree)
    result = repair(tree, in_place=True)
    assert result.outcome is Outcome.CORRECTABLE
    assert result.totals == before.totals
    assert {**everything(tree), "": sidecar.read_bytes()} == good
    assert sorted(os.listdir(tmp_path)) == ["set", "set.oakum", "set.oakum.journal"]
    assert any("--roll-back" in note for note in result.notes)
    assert result.sidecar.mended == sidecar
    assert verify(tree).outcome is Outcome.INTACT
    back = roll_back(tree)
    assert back.totals == before.totals
    assert {**everything(tree), "": sidecar.read_bytes()} == bad
    assert sorted(os.listdir(tmp_path)) == ["set", "set.oakum"]
    with pytest.raises(CannotCheck, match="nothing to roll back"):
        roll_back(tree)


def test_absent_members_come_and_go(tree: Path, tmp_path: Path) -> None:
    protect([tree])
    good = snapshot(tmp_path)
    shutil.rmtree(tree / "deep")
    (tree / "one").unlink()
    (tree / "link").unlink()
    bad = snapshot(tmp_path)
    repair(tree, in_place=True)
    (tmp_path / "set.oakum.journal").rename(tmp_path / "j")
    (tmp_path / "j").rename(tmp_path / "set.oakum.journal")
    now = snapshot(tmp_path)
    assert {name: now[name] for name in good} == good
    roll_back(tree)
    assert snapshot(tmp_path) == bad


def test_a_link_that_points_elsewhere(tree: Path) -> None:
    protect([tree])
    (tree / "link").unlink()
    (tree / "link").symlink_to("z.tar")
    repair(tree, in_place=True)
    assert os.readlink(tree / "link") == "a.tif"
    roll_back(tree)
    assert os.readlink(tree / "link") == "z.tar"


def test_an_intact_set_is_left_alone(tree: Path, tmp_path: Path) -> None:
    protect([tree])
    before = everything(tmp_path)
    assert repair(tree, in_place=True).outcome is Outcome.INTACT
    assert everything(tmp_path) == before


def test_past_capacity_nothing_is_written(tree: Path, tmp_path: Path) -> None:
    protect([tree])
    rewrite(tree / "z.tar", overwritten(FILES["z.tar"], 0, 400_000))
    rewrite(tree / "a.tif", with_flips(FILES["a.tif"], 3))
    before = everything(tmp_path)
    result = repair(tree, in_place=True)
    assert result.outcome is Outcome.UNCORRECTABLE
    assert "set/z.tar" in {m.path for m in result.members if m.state is MemberState.UNCORRECTABLE}
    assert everything(tmp_path) == before


def test_one_member_of_a_set_beyond_help(tree: Path) -> None:
    protect([tree])
    rewrite(tree / "z.tar", overwritten(FILES["z.tar"], 300_000, 300_000))
    rewrite(tree / "a.tif", with_flips(FILES["a.tif"], 1))  # The inner code is enough for it.
    repair(tree, in_place=True, members=["set/a.tif"])
    assert (tree / "a.tif").read_bytes() == FILES["a.tif"]
    assert (tree / "z.tar").read_bytes() != FILES["z.tar"]


def test_edited_members_are_refused(tree: Path, tmp_path: Path) -> None:
    protect([tree])
    recorded = (tree / "a.tif").stat().st_mtime_ns
    rewrite(tree / "z.tar", with_flips(FILES["z.tar"], 3))
    (tree / "a.tif").write_bytes(with_flips(FILES["a.tif"], 4))
    before = everything(tmp_path)
    with pytest.raises(UsageError, match=r"a\.tif is newer than recorded"):
        repair(tree, in_place=True)
    assert everything(tmp_path) == before
    repair(tree, in_place=True, even_newer=True)
    assert (tree / "a.tif").read_bytes() == FILES["a.tif"]
    assert (tree / "a.tif").stat().st_mtime_ns == recorded
    roll_back(tree)
    assert everything(tmp_path) == before


def test_what_was_changed_after_the_repair_is_not_rolled_back(tree: Path, tmp_path: Path) -> None:
    protect([tree])
    rewrite(tree / "z.tar", with_flips(FILES["z.tar"], 3))
    repair(tree, in_place=True)
    for change in (lambda: rewrite(tree / "z.tar", with_flips(FILES["z.tar"], 1)), (tree / "z.tar").unlink):
        change()
        before = everything(tmp_path)
        with pytest.raises(UsageError, match=r"z\.tar was changed after the repair"):
            roll_back(tree)
        assert everything(tmp_path) == before


def test_what_cannot_be_read_was_not_changed(
    tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    protect([tree])
    rewrite(tree / "z.tar", with_flips(FILES["z.tar"], 3))
    bad = everything(tmp_path)
    repair(tree, in_place=True)
    before, through = everything(tmp_path), os.pread

    def failing(fd: int, *args: int) -> bytes:
        if os.path.samefile(fd, tree / "z.tar"):
            raise OSError(5, "Input/output error")
        return through(fd, *args)

    with monkeypatch.context() as patch:
        patch.setattr(os, "pread", failing)
        with pytest.raises(CannotCheck, match="cannot be read: input/output error; nothing was changed"):
            roll_back(tree)
    assert everything(tmp_path) == before
    roll_back(tree)
    assert everything(tmp_path) == bad


def test_a_finished_repair_is_not_finished_again(tree: Path, tmp_path: Path) -> None:
    """Its journal stays for a roll-back, and makes way for that of the next repair."""
    protect([tree])
    for flips in (3, 1):
        rewrite(tree / "z.tar", with_flips(FILES["z.tar"], flips))
        before = everything(tmp_path)
        repair(tree, in_place=True)
        assert (tree / "z.tar").read_bytes() == FILES["z.tar"]
    roll_back(tree)
    assert everything(tmp_path) == {n: d for n, d in before.items() if n != "set.oakum.journal"}


def test_hard_links_stay(tree: Path) -> None:
    os.link(tree / "z.tar", tree / "y.tar")
    protect([tree])
    rewrite(tree / "z.tar", with_flips(FILES["z.tar"], 9))
    repair(tree, in_place=True)
    assert (tree / "y.tar").read_bytes() == FILES["z.tar"]
    assert (tree / "y.tar").samefile(tree / "z.tar")


def test_unreadable_sectors_are_written_over(
    tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """What could not be read cannot be brought back; the right bytes stay there."""
    protect([tree])
    rewrite(tree / "z.tar", with_flips(FILES["z.tar"], 9, within=(0, 50_000)))
    bad = BadSectors({tree / "z.tar": [(100_352, 110_592)]})
    with monkeypatch.context() as patch:
        bad.install(patch)
        result = repair(tree, in_place=True)
    assert result.totals.bytes_erased == 10_240
    assert (tree / "z.tar").read_bytes() == FILES["z.tar"]
    roll_back(tree)
    assert (tree / "z.tar").read_bytes() == with_flips(FILES["z.tar"], 9, within=(0, 50_000))


def test_unreadable_past_capacity(tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    protect([tree])
    before = everything(tmp_path)
    BadSectors({tree / "z.tar": [(0, 400_384)]}).install(monkeypatch)
    result = repair(tree, in_place=True)
    assert (result.outcome, result.totals.bytes_erased) == (Outcome.UNCORRECTABLE, 400_384)
    monkeypatch.undo()
    assert everything(tmp_path) == before


def test_a_large_member_in_little_memory(tmp_path: Path) -> None:
    """Read twice for the new sidecar; the damage lies before, over and behind the ends of steps of 1 MiB."""
    data = content(5_300_000)
    folder = plant(tmp_path / "set", {"large": data})
    whole = protect([folder]).sidecar.read_bytes()
    hurt = data
    for place in ((1 << 20) - 6_000, (2 << 20) - 1_500, (3 << 20) + 10):
        hurt = overwritten(hurt, place, 3_000)
    rewrite(folder / "large", hurt)
    rewrite(tmp_path / "set.oakum", with_flips(whole, 50))
    result = repair(folder, in_place=True, memory=RESERVE + 255 * 4096)
    assert (result.outcome, result.sidecar.mended) == (Outcome.CORRECTABLE, tmp_path / "set.oakum")
    assert ((folder / "large").read_bytes(), (tmp_path / "set.oakum").read_bytes()) == (data, whole)


def test_a_medium_that_gets_worse_while_it_is_repaired(
    tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """What is right when it is scanned cannot be read when the corrections are checked: all stays."""
    protect([tree])
    damage(tree)
    before = everything(tmp_path)

    class Failing(Silent):
        def phase(self, name: str, total: int | None) -> None:
            if name == "checking the corrections":
                BadSectors({tree / "z.tar": [(433_152, 433_664)]}).install(monkeypatch)

    assert repair(tree, in_place=True, progress=Failing()).outcome is Outcome.UNCORRECTABLE
    assert everything(tmp_path) == before


def test_a_member_that_cannot_be_read_for_the_new_sidecar(
    tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """It was right a moment ago: the members are put right, and the sidecar stays as it is."""
    protect([tree])
    damage(tree)
    rewrite(tree / "a.tif", FILES["a.tif"])
    hurt = (tmp_path / "set.oakum").read_bytes()

    class Failing(Silent):
        def phase(self, name: str, total: int | None) -> None:
            if name == "writing the sidecar anew":
                BadSectors({tree / "a.tif": [(4096, 8192)]}).install(monkeypatch)

    result = repair(tree, in_place=True, progress=Failing())
    assert result.sidecar.mended is None
    assert (tmp_path / "set.oakum").read_bytes() == hurt
    assert (tree / "z.tar").read_bytes() == FILES["z.tar"]


def test_no_room_is_said_before(tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    protect([tree])
    damage(tree)
    before = everything(tmp_path)
    monkeypatch.setattr("oakum.jobs.inplace.room_in", lambda folder: 10_000)
    with pytest.raises(CannotCheck, match="has room for 10,000 bytes"):
        repair(tree, in_place=True)
    assert everything(tmp_path) == before


@pytest.mark.parametrize("way", ["finish", "undo"])
def test_an_interrupted_repair(tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, way: str) -> None:
    """The journal stands, half of the bytes are written: the next run finishes, or undoes, the rest."""
    protect([tree])
    good = snapshot(tmp_path)
    damage(tree)
    (tree / "deep/down/b.txt").unlink()
    bad = snapshot(tmp_path)
    written = 0
    through = os.pwrite

    class Killed(BaseException):
        pass

    def dying(fd: int, data: memoryview, offset: int) -> int:
        nonlocal written
        if journal_path(tmp_path / "set.oakum").exists() and "oakum" not in os.readlink(
            f"/proc/self/fd/{fd}"
        ):
            written += 1
            if written > 4:
                through(fd, data[: len(data) // 2], offset)
                raise Killed
        return through(fd, data, offset)

    with monkeypatch.context() as patch:
        patch.setattr(os, "pwrite", dying)
        with pytest.raises(Killed):
            repair(tree, in_place=True)
    half = snapshot(tmp_path)
    assert half.pop("set.oakum.journal") is not None
    assert half != bad
    seen = verify(tree)
    assert any("interrupted" in note for note in seen.notes)
    if way == "finish":
        assert repair(tree, in_place=True).outcome is Outcome.INTACT
        now = snapshot(tmp_path)
        assert {name: now[name] for name in good} == good
    roll_back(tree)
    assert snapshot(tmp_path) == bad


def test_a_failure_puts_everything_back(tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    protect([tree])
    damage(tree)
    (tree / "deep/down/b.txt").unlink()
    before = snapshot(tmp_path)
    monkeypatch.setattr(replay, "first_wrong", lambda *_: tree / "a.tif")
    with pytest.raises(CannotCheck, match="everything was put back as it was"):
        repair(tree, in_place=True)
    assert snapshot(tmp_path) == before


def test_a_second_failure_keeps_the_journal(
    tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    protect([tree])
    good = snapshot(tmp_path)
    damage(tree)
    before = snapshot(tmp_path)
    with monkeypatch.context() as patch:
        patch.setattr(os, "ftruncate", lambda *_: (_ for _ in ()).throw(OSError(5, "Input/output error")))
        patch.setattr("oakum.files.os.ftruncate", os.ftruncate)
        with pytest.raises(CannotCheck, match=r"not everything could be put back either; keep .*journal"):
            repair(tree, in_place=True, members=["set/a.tif"])
    assert not Journal(tmp_path / "set.oakum").finished
    roll_back(tree)
    assert snapshot(tmp_path) == before
    assert repair(tree, in_place=True).outcome is Outcome.CORRECTABLE
    now = snapshot(tmp_path)
    assert {name: now[name] for name in good} == good


@pytest.mark.parametrize("what", ["set/z.tar", "set.oakum"])
def test_read_only_files_are_refused_before(tree: Path, tmp_path: Path, what: str) -> None:
    if os.geteuid() == 0:
        pytest.skip("nothing is read-only for the superuser")
    protect([tree])
    damage(tree)
    (tmp_path / what).chmod(0o444)
    before = everything(tmp_path)
    with pytest.raises(CannotCheck, match="cannot be written to: permission denied"):
        repair(tree, in_place=True)
    assert everything(tmp_path) == before


def test_a_journal_of_another_set(tree: Path, tmp_path: Path) -> None:
    protect([tree])
    rewrite(tree / "a.tif", with_flips(FILES["a.tif"], 3))
    repair(tree, in_place=True)
    (tree / "new").write_bytes(b"something else is protected now")
    protect([tree], overwrite=True)
    before = everything(tmp_path)
    with pytest.raises(CannotCheck, match="belongs to other content"):
        roll_back(tree)
    assert everything(tmp_path) == before


# -- what can stand in the way of replaying ----------------------------------------------------------


def interrupted(tree: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Damage, and a repair in place that ends with its journal on the medium and nothing changed yet."""
    damage(tree)
    (tree / "deep/down/b.txt").unlink()

    def stop(*_: object) -> None:
        raise KeyboardInterrupt

    with monkeypatch.context() as patch:
        patch.setattr("oakum.jobs.inplace.finish", stop)
        with pytest.raises(KeyboardInterrupt):
            repair(tree, in_place=True)


def test_files_that_are_not_what_the_journal_speaks_of(
    tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    protect([tree])
    interrupted(tree, monkeypatch)
    (tree / "a.tif").rename(tmp_path / "kept")
    for job in (lambda: repair(tree, in_place=True), lambda: roll_back(tree)):
        with pytest.raises(CannotCheck, match=r"a\.tif cannot be written to: no such file"):
            job()
    for stands_there in (b"short", b"long" * 50_000):
        (tree / "a.tif").write_bytes(stands_there)
        with pytest.raises(CannotCheck, match="is not what the repair in place left there"):
            repair(tree, in_place=True)
        assert (tree / "a.tif").read_bytes() == stands_there
    with pytest.raises(CannotCheck, match="the folder .*nowhere cannot be opened"):
        repair(tree, in_place=True, root=tmp_path / "nowhere")
    (tmp_path / "kept").replace(tree / "a.tif")
    before = snapshot(tmp_path)
    with monkeypatch.context() as patch:
        patch.setattr(
            replay, "carry_out", lambda *_, **__: (_ for _ in ()).throw(OSError(5, "Input/output error"))
        )
        with pytest.raises(CannotCheck, match="not everything could be put back: input/output error"):
            roll_back(tree)
    assert snapshot(tmp_path) == before
    shutil.rmtree(tree / "deep")  # Nothing was ever made in it.
    roll_back(tree)
    assert not (tmp_path / "set.oakum.journal").exists()


def test_a_sidecar_that_cannot_be_read_is_not_replaced(
    tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Its unreadable parts would come back as zeros."""
    sidecar = protect([tree]).sidecar
    damage(tree)
    repair(tree, in_place=True)
    before = snapshot(tmp_path)
    BadSectors({sidecar: [(8_192, 8_704)]}).install(monkeypatch)
    through = os.pread
    monkeypatch.setattr(os, "pread", through)
    with pytest.raises(CannotCheck, match="cannot be read in full"):
        roll_back(tree)
    monkeypatch.undo()
    now = snapshot(tmp_path)
    now.pop("set.oakum.journal")
    before.pop("set.oakum.journal")
    assert now["set.oakum"] == before["set.oakum"]
    roll_back(tree)


@pytest.mark.parametrize("name", ["open", "preadv", "pread"])
def test_a_sidecar_that_cannot_be_read_does_not_count_as_rolled_back(
    tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, name: str
) -> None:
    """With its journal what it was would be gone."""
    sidecar = protect([tree]).sidecar
    rewrite(sidecar, with_flips(sidecar.read_bytes(), 4))
    before = snapshot(tmp_path)
    repair(tree, in_place=True)
    through, carry_out = getattr(os, name), replay.carry_out

    def failing(place: int | Path, *args: object, **options: object) -> object:
        if os.path.samefile(place, sidecar):
            raise OSError(5, "Input/output error")
        return through(place, *args, **options)

    def on_a_bad_medium(*args: Any, **options: Any) -> None:
        with monkeypatch.context() as patch:
            patch.setattr(os, name, failing)
            carry_out(*args, **options)

    with monkeypatch.context() as patch:
        patch.setattr(replay, "carry_out", on_a_bad_medium)
        try:
            roll_back(tree)
        except CannotCheck:
            assert journal_path(sidecar).exists()
    if journal_path(sidecar).exists():
        roll_back(tree)
    assert snapshot(tmp_path) == before


def test_a_sidecar_that_reads_worse_after_its_repair(
    tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Every place that was put right became unreadable: they are those of which all is known."""
    sidecar = protect([tree]).sidecar
    rewrite(sidecar, with_flips(sidecar.read_bytes(), 4))
    before = snapshot(tmp_path)
    repair(tree, in_place=True)
    with Journal(sidecar, write=False) as journal:
        places = [(p.offset, p.offset + p.new) for p in journal.contents.patches[0]]
    BadSectors({sidecar: places}).install(monkeypatch)
    roll_back(tree)
    monkeypatch.undo()
    assert snapshot(tmp_path) == before


def test_an_unreadable_sidecar_that_was_not_replaced_yet(
    tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A repair in place of it was interrupted: it is undone though its bad sectors read no better."""
    sidecar = protect([tree]).sidecar
    whole = sidecar.read_bytes()
    before = snapshot(tmp_path)
    bad = BadSectors({sidecar: [(8_192, 8_704)]})
    for replaced in (False, True):
        with monkeypatch.context() as patch:
            bad.install(patch)
            patch.setattr("oakum.jobs.inplace.finish", lambda *_: (_ for _ in ()).throw(KeyboardInterrupt))
            with pytest.raises(KeyboardInterrupt):
                repair(tree, in_place=True)
            if not replaced:
                roll_back(tree)
        if replaced:
            assert repair(tree, in_place=True).outcome is Outcome.INTACT
            roll_back(tree)
        assert snapshot(tmp_path) == before
    assert sidecar.read_bytes() == whole


def test_a_folder_that_somebody_filled_stays(tree: Path) -> None:
    protect([tree])
    shutil.rmtree(tree / "deep/down")
    repair(tree, in_place=True)
    (tree / "deep/down/new").write_bytes(b"theirs")
    roll_back(tree)
    assert os.listdir(tree / "deep/down") == ["new"]


def test_what_stands_in_the_way_is_named(tree: Path, tmp_path: Path) -> None:
    protect([tree])
    (tree / "one").unlink()
    (tree / "one").mkdir()
    before = snapshot(tmp_path)
    with pytest.raises(UsageError, match="one is no file any more; move away what stands there"):
        repair(tree, in_place=True)
    (tree / "one").rmdir()
    (tree / "link").unlink()
    (tree / "link").write_bytes(b"mine")
    with pytest.raises(UsageError, match="link is no link any more"):
        repair(tree, in_place=True)
    assert snapshot(tmp_path).keys() == before.keys() - {"set/one"} | set()


def test_a_half_repaired_set_is_not_protected_anew(
    tree: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    protect([tree])
    interrupted(tree, monkeypatch)
    before = snapshot(tmp_path)
    with pytest.raises(UsageError, match="was interrupted; first finish it"):
        protect([tree], overwrite=True)
    assert snapshot(tmp_path) == before
    with Lock(tmp_path / "set.oakum"), pytest.raises(CannotCheck, match="another run is at work"):
        protect([tree], overwrite=True)
    roll_back(tree)
    protect([tree], overwrite=True)
    assert verify(tree).outcome is Outcome.INTACT
