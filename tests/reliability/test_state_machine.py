"""A set and its sidecar through a long life, held against a model that knows the right bytes.

Rules protect, flip bits, overwrite, cut, delete, rename, edit, hurt and swap the sidecar, verify, repair
beside, in place and back. The model keeps what was protected: a repair that says it worked has the right
bytes, one that says it did not has changed nothing, and verify never calls damage intact.
"""

from __future__ import annotations

import os
import shutil
import tempfile
from pathlib import Path

from hypothesis import settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, invariant, precondition, rule
from support import content, overwritten, rewrite, snapshot, with_flips

from oakum import CannotCheck, OakumError, UsageError, protect, repair, roll_back, verify
from oakum.results import Outcome

NAMES = st.sampled_from(["a", "deep/b", "deep/c"])
SIZES = {"a": 70_000, "deep/b": 900, "deep/c": 0}
CODES = st.sampled_from(["shelf", "plain", "slim"])


class Life(RuleBasedStateMachine):
    """The life of one folder."""

    def __init__(self) -> None:
        super().__init__()
        self.base = Path(tempfile.mkdtemp())
        self.folder = self.base / "set"
        (self.folder / "deep").mkdir(parents=True)
        for number, (name, size) in enumerate(SIZES.items()):
            (self.folder / name).write_bytes(content(size, number))
        self.seed = 0
        self.versions: list[tuple[bytes, dict[str, bytes]]] = []
        """Every sidecar that was written, with what it protects."""

        self.recorded: dict[str, bytes] = {}
        """What the sidecar that lies there protects; empty while there is none."""

        self.sidecar_right = b""
        self.journal: dict[str, bytes | str | None] | None = None
        """What a roll-back would bring back."""

    def teardown(self) -> None:
        shutil.rmtree(self.base)

    @property
    def sidecar(self) -> Path:
        return self.base / "set.oakum"

    def files(self) -> dict[str, bytes]:
        """What is there now."""
        return {n: d for n, d in snapshot(self.folder).items() if isinstance(d, bytes)}

    def everything(self) -> dict[str, bytes | str | None]:
        found = snapshot(self.base)
        found.pop("set.oakum.journal", None)
        return found

    def next_seed(self) -> int:
        self.seed += 1
        return self.seed

    # -- what people do ---------------------------------------------------------------------------------

    @rule(code=CODES, depth=st.sampled_from([None, 4096]))
    def protect(self, code: str, depth: int | None) -> None:
        protect([self.folder], code=code, depth=depth, overwrite=True)  # No repair here is ever interrupted.
        self.recorded, self.sidecar_right = self.files(), self.sidecar.read_bytes()
        self.versions.append((self.sidecar_right, self.recorded))
        self.journal = None

    @rule(name=NAMES)
    def edit(self, name: str) -> None:
        path = self.folder / name
        path.parent.mkdir(exist_ok=True)
        path.write_bytes(content(1000, self.next_seed()))
        os.utime(path, ns=(2 * 10**18 + self.seed, 2 * 10**18 + self.seed))

    @precondition(lambda self: self.versions)
    @rule(which=st.integers(0, 9))
    def swap_sidecars(self, which: int) -> None:
        data, recorded = self.versions[which % len(self.versions)]
        self.sidecar.write_bytes(data)
        self.recorded, self.sidecar_right = recorded, data
        self.journal = None

    # -- what time does -----------------------------------------------------------------------------------

    @rule(name=NAMES, flips=st.integers(1, 12))
    def flip(self, name: str, flips: int) -> None:
        path = self.folder / name
        if path.exists() and path.stat().st_size:
            data = path.read_bytes()
            rewrite(path, with_flips(data, min(flips, 8 * len(data)), self.next_seed()))

    @rule(name=NAMES, start=st.integers(0, 69_999), length=st.sampled_from([10, 700, 6_000, 40_000]))
    def overwrite(self, name: str, start: int, length: int) -> None:
        path = self.folder / name
        if path.exists() and path.stat().st_size:
            data = path.read_bytes()
            start %= len(data)
            rewrite(path, overwritten(data, start, length, self.next_seed()))

    @rule(name=NAMES, length=st.integers(0, 70_000))
    def cut(self, name: str, length: int) -> None:
        path = self.folder / name
        if path.exists():
            rewrite(path, path.read_bytes()[:length])

    @rule(name=NAMES)
    def delete(self, name: str) -> None:
        (self.folder / name).unlink(missing_ok=True)

    @rule(one=NAMES, other=NAMES)
    def rename(self, one: str, other: str) -> None:
        if (self.folder / one).exists():
            (self.folder / one).rename(self.folder / other)

    @precondition(lambda self: self.recorded)
    @rule(tenths=st.integers(0, 9), share=st.sampled_from([0.0005, 0.1, 0.3]))
    def hurt_the_sidecar(self, tenths: int, share: float) -> None:
        data = self.sidecar.read_bytes()
        length = int(len(data) * share)
        rewrite(self.sidecar, overwritten(data, len(data) * tenths // 10, length, self.next_seed()))

    # -- what oakum does ----------------------------------------------------------------------------------

    @precondition(lambda self: self.recorded)
    @rule()
    def verify(self) -> None:
        before = snapshot(self.base)
        try:
            result = verify(self.folder)
        except CannotCheck:
            return
        finally:
            assert snapshot(self.base) == before
        same = {n: d for n, d in self.files().items() if n in self.recorded} == self.recorded
        whole = self.sidecar.read_bytes() == self.sidecar_right
        assert (result.outcome is Outcome.INTACT) == (same and whole)

    @precondition(lambda self: self.recorded)
    @rule()
    def repair_elsewhere(self) -> None:
        before = snapshot(self.base)
        out = self.base / "out"
        try:
            result = repair(self.folder, output=out)
            if result.outcome in (Outcome.CORRECTABLE, Outcome.INTACT):
                found = {n[4:]: d for n, d in snapshot(out).items() if n.startswith("set/") and d is not None}
                assert found == self.recorded
                if result.sidecar.mended is not None:
                    assert (out / "set.oakum").read_bytes() == self.sidecar_right
        except CannotCheck:
            assert not out.exists()
        shutil.rmtree(out, ignore_errors=True)
        assert snapshot(self.base) == before

    @precondition(lambda self: self.recorded)
    @rule(even_newer=st.booleans())
    def repair_in_place(self, even_newer: bool) -> None:
        before = self.everything()
        others = {n: d for n, d in self.files().items() if n not in self.recorded}
        try:
            result = repair(self.folder, in_place=True, even_newer=even_newer)
        except (UsageError, CannotCheck):
            assert self.everything() == before
            return
        if result.outcome is Outcome.UNCORRECTABLE:
            assert self.everything() == before or result.sidecar.state is Outcome.UNCORRECTABLE
        if self.everything() != before:
            self.journal = before
            assert self.files() == {**self.recorded, **others}
            if result.outcome is not Outcome.UNCORRECTABLE:
                assert self.sidecar.read_bytes() == self.sidecar_right

    @rule()
    def roll_back(self) -> None:
        before = self.everything()
        try:
            roll_back(self.folder)
        except OakumError:
            assert self.everything() == before
            return
        assert self.journal is not None
        now = self.everything()
        assert {n: now.get(n) for n in self.journal} == self.journal
        self.journal = None

    @invariant()
    def nothing_is_left_behind(self) -> None:
        assert not list(self.base.rglob(".*"))


TestLife = Life.TestCase
TestLife.settings = settings(max_examples=200, stateful_step_count=12, deadline=None)
