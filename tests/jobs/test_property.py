"""Random sets, codes, depths and damage: inside capacity all comes back; past it no wrong byte goes out."""

from __future__ import annotations

import os
import shutil
import tempfile
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from support import content, flipped_bits, plant, rewrite, snapshot, with_flips

from oakum import CannotCheck, protect, repair, verify
from oakum.algebra.naming import resolve_code
from oakum.geometry import CELL, plan_windows
from oakum.results import MemberState, Outcome

CODES = ("shelf", "slim", "stout", "plain", "RS(60,40)+EH(128,120)", "RS(24,16)+EB(128,104)", "RS(20,15)")

SIZES = st.one_of(st.integers(0, 200), st.integers(0, 9000), st.integers(0, 220_000))


@dataclass(frozen=True)
class Case:
    """A set to protect and where to hurt it."""

    code: str
    depth: int | None
    sizes: list[int]
    seed: int

    @property
    def files(self) -> dict[str, bytes]:
        return {f"{i}.bin": content(size, i) for i, size in enumerate(self.sizes)}

    def strips(self) -> list[tuple[int, int]]:
        """(start, stop) in the stream of every strip of every window."""
        k = resolve_code(self.code).outer.k
        return [
            (w.start + i * w.depth, min(w.start + (i + 1) * w.depth, w.start + w.length))
            for w in plan_windows(sum(self.sizes), k, self.depth)
            for i in range(k)
            if w.depth and i * w.depth < w.length
        ]


CASES = st.builds(
    Case,
    st.sampled_from(CODES),
    st.sampled_from([None, 4096]),
    st.lists(SIZES, min_size=1, max_size=6).filter(any),
    st.integers(0, 1 << 30),
)


def hurt(case: Case, stream: bytes, strips_hit: int) -> bytes:
    """Damage that stays in `strips_hit` strips of each window: runs of noise, flips and single bytes."""
    rng = np.random.default_rng(case.seed)
    k = resolve_code(case.code).outer.k
    out = np.frombuffer(stream, np.uint8).copy()
    strips = case.strips()
    for window in range(0, len(strips), k):
        for pick in rng.permutation(len(strips[window : window + k]))[:strips_hit]:
            start, stop = strips[window + pick]
            a = int(rng.integers(start, stop))
            b = int(rng.integers(a + 1, stop + 1))
            if rng.integers(2):
                out[a:b] ^= rng.integers(0, 256, b - a, np.uint8)
            else:
                out[a] ^= np.uint8(1 << rng.integers(8))
    return out.tobytes()


def spread(case: Case, stream: bytes, folder: Path) -> None:
    """Write a damaged stream over the members."""
    place = 0
    for name, data in case.files.items():
        rewrite(folder / name, stream[place : place + len(data)])
        place += len(data)


@settings(max_examples=60)
@given(CASES)
def test_inside_capacity_everything_comes_back_and_is_counted(case: Case) -> None:
    with tempfile.TemporaryDirectory() as place:
        folder = plant(Path(place) / "set", case.files)
        original = snapshot(folder)
        protect([folder], code=case.code, depth=case.depth)
        stream = b"".join(case.files.values())
        damaged = hurt(case, stream, resolve_code(case.code).outer.r // 2)
        spread(case, damaged, folder)
        seen = verify(folder)
        assert seen.totals.bits_flipped == flipped_bits(stream, damaged)
        result = repair(folder, output=Path(place) / "out")
        assert result.outcome is (Outcome.INTACT if damaged == stream else Outcome.CORRECTABLE)
        assert snapshot(Path(place) / "out/set") == original
        assert result.totals.bits_flipped == flipped_bits(stream, damaged)
        for member in result.members[1:]:
            data, now = original[os.path.basename(member.path)], (Path(place) / member.path).read_bytes()
            assert isinstance(data, bytes)
            assert member.bits_flipped == flipped_bits(data, now)


@settings(max_examples=40)
@given(CASES, st.integers(0, 200))
def test_sidecar_and_data_together(case: Case, flips: int) -> None:
    """Strips of data and of parity share r; records have a code of their own. Both come back as they were."""
    with tempfile.TemporaryDirectory() as place:
        folder = plant(Path(place) / "set", case.files)
        original = snapshot(folder)
        sidecar = protect([folder], code=case.code, depth=case.depth).sidecar
        stream, whole = b"".join(case.files.values()), sidecar.read_bytes()
        damaged = hurt(case, stream, resolve_code(case.code).outer.r // 4)
        # Flips within a cell of one parity strip at the most, and in the records.
        at = 4096 + case.seed % (len(whole) - 4096)
        broken = with_flips(whole, min(flips, 200), case.seed, (at, min(len(whole), at + 64)))
        spread(case, damaged, folder)
        sidecar.write_bytes(broken)
        seen = verify(folder)
        assert seen.sidecar.bits_flipped == flipped_bits(whole, broken)
        assert seen.totals.bits_flipped == flipped_bits(stream, damaged)
        result = repair(folder, output=Path(place) / "out")
        assert snapshot(Path(place) / "out/set") == original
        if broken != whole:
            assert result.sidecar.mended is not None
            assert result.sidecar.mended.read_bytes() == whole


@settings(max_examples=25)
@given(CASES, st.floats(0.0, 1.0))
def test_absent_members_within_the_guaranteed_burst(case: Case, share: float) -> None:
    """What is absent is erased, and a contiguous loss of r strips less two cells always comes back."""
    code = resolve_code(case.code)
    with tempfile.TemporaryDirectory() as place:
        folder = plant(Path(place) / "set", case.files)
        original = snapshot(folder)
        sidecar = protect([folder], code=case.code, depth=case.depth).sidecar
        # One contiguous loss, as long as the window that stands the least can bear.
        depths = [w.depth for w in plan_windows(sum(case.sizes), code.outer.k, case.depth)]
        room = share * (code.outer.r * min(depths) - 2 * CELL)
        gone = 0
        for i, size in enumerate(case.sizes):
            if gone + size > room:
                break
            (folder / f"{i}.bin").unlink()
            gone += size
        try:
            result = repair(sidecar)
        except CannotCheck as error:  # All files are absent, and more of them than can be restored.
            assert "medium is mounted" in str(error)
            return
        assert snapshot(folder) == original
        assert result.totals.bytes_erased == gone


@settings(max_examples=40)
@given(CASES, st.sampled_from([0.5, 1.0]))
def test_past_capacity_no_wrong_byte_goes_out(case: Case, share: float) -> None:
    """Every file that repair gives a final name is right, and what it calls intact is intact."""
    with tempfile.TemporaryDirectory() as place:
        folder = plant(Path(place) / "set", case.files)
        original = snapshot(folder)
        sidecar = protect([folder], code=case.code, depth=case.depth).sidecar
        stream = b"".join(case.files.values())
        k = resolve_code(case.code).outer.k
        damaged = hurt(case, stream, int(share * k) + 1)
        spread(case, damaged, folder)
        before = snapshot(Path(place))
        result = repair(folder)
        if result.outcome is Outcome.UNCORRECTABLE:
            assert snapshot(Path(place)) == before
        for member in result.members[1:]:
            name = os.path.basename(member.path)
            if member.state is MemberState.INTACT:
                assert snapshot(folder)[name] == original[name]
            if member.mended is not None:
                assert member.mended.read_bytes() == original[name]
        whole = sidecar.read_bytes()
        if result.sidecar.mended is not None:
            assert result.sidecar.mended.read_bytes() == whole
        shutil.rmtree(folder)
