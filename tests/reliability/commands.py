"""The commands that the fault programme runs: what each starts from, and what must hold after it."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path

import pytest
from faults import CALLS, Faults
from support import content, overwritten, plant, rewrite, snapshot, with_flips

from oakum import protect, repair, roll_back, verify
from oakum.jobs.journal import Journal, journal_path
from oakum.results import Outcome

Snapshot = dict[str, bytes | str | None]

FILES = {"a": content(70_000, 1), "sub/b": content(300, 2), "sub/c": b"c"}
GOOD = {"set": None, "set/a": FILES["a"], "set/sub": None, "set/sub/b": FILES["sub/b"], "set/sub/c": b"c"}


class Case:
    """A command, what it starts from, and what must hold after it whether it failed or not."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        plant(folder / "set", FILES)

    def prepare(self) -> None:
        """Make the state that it starts from."""
        self.sidecar = protect([self.folder / "set"]).sidecar
        self.whole = self.sidecar.read_bytes()

    def damage(self) -> None:
        """Flips, an absent file, and a sidecar that is hurt too."""
        rewrite(self.folder / "set/a", overwritten(with_flips(FILES["a"], 5), 10_000, 500))
        (self.folder / "set/sub/c").unlink()
        rewrite(self.sidecar, with_flips(self.whole, 9))

    def run(self) -> bool:
        """Run the command; True when it succeeded."""
        raise NotImplementedError

    def check(self, before: Snapshot, succeeded: bool) -> None:
        """What must hold."""
        raise NotImplementedError


class Protect(Case):
    def prepare(self) -> None:
        pass

    def run(self) -> bool:
        self.sidecar = protect([self.folder / "set"], memory=64 << 20).sidecar
        return True

    def check(self, before: Snapshot, succeeded: bool) -> None:
        now = snapshot(self.folder)
        sidecar = now.pop("set.oakum", None)
        assert now == before
        assert not succeeded or sidecar is not None
        if sidecar is not None:
            assert verify(self.folder / "set").outcome is Outcome.INTACT


class ProtectAgain(Case):
    def prepare(self) -> None:
        super().prepare()
        (self.folder / "set/new").write_bytes(content(1000, 9))

    def run(self) -> bool:
        protect([self.folder / "set"], overwrite=True)
        return True

    def check(self, before: Snapshot, succeeded: bool) -> None:
        now = snapshot(self.folder)
        new = now["set.oakum"] != before["set.oakum"]
        assert new or not succeeded
        assert {**now, "set.oakum": b""} == {**before, "set.oakum": b""}
        assert verify(self.folder / "set").outcome is Outcome.INTACT
        members = [m.path for m in verify(self.folder / "set").members]
        assert ("set/new" in members) is new


class Verify(Case):
    def prepare(self) -> None:
        super().prepare()
        self.damage()

    def run(self) -> bool:
        result = verify(self.folder / "set")
        assert result.outcome is not Outcome.INTACT
        flips = result.totals.bits_flipped
        sure = result.outcome is Outcome.CORRECTABLE and result.totals.bytes_erased == 1
        assert flips == self.flips if sure else flips <= self.flips
        return True

    @property
    def flips(self) -> int:
        a, b = (int.from_bytes(x, "big") for x in (FILES["a"], (self.folder / "set/a").read_bytes()))
        return (a ^ b).bit_count()

    def check(self, before: Snapshot, succeeded: bool) -> None:
        assert snapshot(self.folder) == before


class Repair(Case):
    def prepare(self) -> None:
        super().prepare()
        self.damage()

    def run(self) -> bool:
        return repair(self.folder / "set").outcome is Outcome.CORRECTABLE

    def check(self, before: Snapshot, succeeded: bool) -> None:
        now = snapshot(self.folder)
        assert {name: now[name] for name in before} == before
        new = {name: data for name, data in now.items() if name not in before}
        right = {"set/a.mended": FILES["a"], "set/sub/c": b"c", "set.mended.oakum": self.whole}
        assert new.items() <= right.items(), "nothing but right files, and nothing temporary"
        if succeeded:
            assert {"set/a.mended", "set/sub/c"} <= new.keys()


class RepairElsewhere(Repair):
    def run(self) -> bool:
        return repair(self.folder / "set", output=self.folder / "out").outcome is Outcome.CORRECTABLE

    def check(self, before: Snapshot, succeeded: bool) -> None:
        now = snapshot(self.folder)
        assert {name: now[name] for name in before} == before
        new = {name: data for name, data in now.items() if name not in before}
        right = {f"out/{name}": data for name, data in GOOD.items()} | {
            "out": None,
            "out/set.oakum": self.whole,
        }
        assert new.items() <= right.items()
        if succeeded:
            assert right.keys() - {"out/set.oakum"} <= new.keys()


class InPlace(Repair):
    def run(self) -> bool:
        return repair(self.folder / "set", in_place=True).outcome is Outcome.CORRECTABLE

    def check(self, before: Snapshot, succeeded: bool) -> None:
        now = snapshot(self.folder)
        journal = now.pop("set.oakum.journal", None)
        good = {**GOOD, "set.oakum": self.whole}
        if succeeded:
            assert journal is not None
            assert {**now, "set.oakum": b""} == {**good, "set.oakum": b""}
            assert now["set.oakum"] in (self.whole, before["set.oakum"])
        elif journal is None:
            assert now == before
        else:
            assert now["set.oakum"] in (self.whole, before["set.oakum"])
        if journal is not None:
            known = self.known(before)
            roll_back(self.folder / "set")
            back = snapshot(self.folder)
            assert {**back, "set.oakum": b""} == {**known, "set.oakum": b""}
            # If the sidecar had not been replaced yet, not even what could not be read of it is new.
            assert back["set.oakum"] in (known["set.oakum"], before["set.oakum"])
            repair(self.folder / "set", in_place=True)
            journal_path(self.sidecar).unlink()
            assert snapshot(self.folder) == good

    def known(self, before: Snapshot) -> Snapshot:
        """What stood there, with the right bytes where it could not be read when they were put there."""
        known = dict(before)
        with Journal(self.sidecar, write=False) as journal:
            for entry, patches in zip(journal.contents.entries, journal.contents.patches, strict=True):
                name = os.fsdecode(entry.path)
                data = before.get(name)
                for patch in patches:
                    if patch.blind and isinstance(data, bytes):
                        new = journal.new_bytes(patch)
                        known[name] = data = data[: patch.offset] + new + data[patch.offset + patch.new :]
        return known


class RollBack(Repair):
    def prepare(self) -> None:
        super().prepare()
        self.bad = snapshot(self.folder)
        repair(self.folder / "set", in_place=True)

    def run(self) -> bool:
        roll_back(self.folder / "set")
        return True

    def check(self, before: Snapshot, succeeded: bool) -> None:
        now = snapshot(self.folder)
        if "set.oakum.journal" not in now:
            assert now == self.bad
            return
        assert not succeeded
        repair(self.folder / "set", in_place=True)
        now = snapshot(self.folder)
        now.pop("set.oakum.journal", None)
        assert now == {**GOOD, "set.oakum": self.whole}


CASES: list[type[Case]] = [Protect, ProtectAgain, Verify, Repair, RepairElsewhere, InPlace, RollBack]


def calls(case: type[Case], folder: Path, names: Sequence[str] = CALLS) -> int:
    """How many calls a run without faults makes."""
    this = case(folder)
    this.prepare()
    faults = Faults(folder, names=names)
    with pytest.MonkeyPatch.context() as patch:
        faults.install(patch)
        this.run()
    return faults.count
