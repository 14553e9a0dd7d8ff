"""Models of damage: what a medium does to bytes, as numbers for `plan` and as noise for `rehearse`.

A `Channel` holds independent flips, runs of bad bytes (bursts, lost sectors that come in clusters) and the
loss of one share in one piece. It says how much of each strikes a given number of bytes in a given time;
`draw` rolls the dice. Drawn damage is a function of the seed alone: bytes read twice are damaged alike, in
whatever pieces they are read.
"""

from __future__ import annotations

from bisect import bisect_left
from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import lru_cache
from math import expm1, isfinite

import numpy as np
from numpy.typing import NDArray

from oakum.errors import UsageError
from oakum.results import Assumption

Bytes = NDArray[np.uint8]
Range = tuple[int, int]

TB = 10**12
"""Bytes of a terabyte, as makers of media count."""

CHUNK = 1 << 16
"""Bytes whose flips are drawn together."""

_KEPT = 4096
_DATA, _SIDECAR = 0, 1


@dataclass(frozen=True)
class Runs:
    """Bad bytes in one piece. `lengths` is a distribution: (bytes, share of the runs).

    Their number is Poisson with `per_tb_year`, or exactly `count` where that is given. Readable runs hold
    random bytes; the others give read errors, so that their place is known. `cluster` of them on average
    come together (a geometric distribution), within `within` bytes.
    """

    lengths: tuple[tuple[int, float], ...]
    per_tb_year: float = 0.0
    count: int = 0
    readable: bool = True
    cluster: float = 1.0
    within: int = 0

    def __post_init__(self) -> None:
        if not self.lengths or any(length <= 0 or share <= 0 for length, share in self.lengths):
            raise UsageError("a run of damage needs a length of at least 1 byte and a share above 0")
        if not (isfinite(self.per_tb_year) and self.per_tb_year >= 0 and self.count >= 0):
            raise UsageError("a rate of bursts or sectors cannot be negative; give 0 for none")
        if not 1 <= self.cluster <= 1000:
            raise UsageError(f"a cluster of {self.cluster:g} sectors cannot be used; give from 1 to 1000")

    @property
    def shares(self) -> tuple[tuple[int, float], ...]:
        """The lengths with shares that add up to 1."""
        total = sum(share for _, share in self.lengths)
        return tuple((length, share / total) for length, share in self.lengths)

    def expected(self, nbytes: int, years: float) -> float:
        """How many runs strike `nbytes` in `years`, on average."""
        return float(self.count) if self.count else self.per_tb_year * years * nbytes / TB


@dataclass(frozen=True)
class Channel:
    """Everything that happens to data and sidecar until they are read.

    `flip_rate` is the chance of a bit to be flipped within one year, `years` the time until then, and
    `lost_share` the part of the data that is missing at the end, in one piece. With `spare_sidecar` the
    sidecar is kept where nothing of this happens. Raises UsageError for numbers that mean nothing.
    """

    flip_rate: float = 0.0
    runs: tuple[Runs, ...] = ()
    lost_share: float = 0.0
    years: float = 1.0
    spare_sidecar: bool = False

    def __post_init__(self) -> None:
        if not 0 <= self.flip_rate <= 0.5:
            raise UsageError(
                f"a flip rate of {self.flip_rate:g} cannot be; give a chance from 0 to 0.5 for each bit"
            )
        if not (isfinite(self.years) and self.years > 0):
            raise UsageError(f"{self.years:g} years is no period; give a number above 0")
        if not 0 <= self.lost_share <= 1:
            raise UsageError(f"a lost share of {self.lost_share:g} cannot be; give a part from 0 to 1")

    @property
    def harmless(self) -> bool:
        """Whether nothing at all happens."""
        struck = any(run.per_tb_year or run.count for run in self.runs)
        return not (self.flip_rate or struck or self.lost_share)

    @property
    def final_flip_rate(self) -> float:
        """The chance of a bit to differ after all the years: (1 - (1 - 2 p)^years) / 2."""
        if self.flip_rate == 0.5:
            return 0.5
        return -expm1(self.years * float(np.log1p(-2 * self.flip_rate))) / 2

    def with_final_flip_rate(self, rate: float) -> Channel:
        """The same medium, but for so many flips in the end; 0 <= rate < 0.5."""
        return replace(self, flip_rate=-expm1(float(np.log1p(-2 * rate)) / self.years) / 2)

    def after(self, years: float) -> Channel:
        """The same medium read after another time."""
        return replace(self, years=years)

    def lost_run(self, nbytes: int) -> Runs | None:
        """The share that goes missing, as a run."""
        length = round(self.lost_share * nbytes)
        return Runs(((length, 1.0),), count=1, readable=False) if length else None


# ---- drawing


@dataclass(frozen=True)
class Damage:
    """What happens to the bytes of one source. Ranges are (start, stop), in order of their start."""

    seed: tuple[int, ...]
    flip_rate: float = 0.0
    garbled: tuple[Range, ...] = ()
    missing: tuple[Range, ...] = ()

    def strike(self, offset: int, data: Bytes) -> list[Range]:
        """Damage `data`, which was read from `offset`, in place; returns what can no longer be read.

        Those ranges are relative to `data`, in order, and hold zeros.
        """
        for start in range(offset - offset % CHUNK, offset + len(data), CHUNK) if self.flip_rate else ():
            places, bits = _flips(self.seed, start // CHUNK, self.flip_rate)
            first, last = np.searchsorted(places, (offset - start, offset - start + len(data)))
            np.bitwise_xor.at(data, places[first:last] + (start - offset), bits[first:last])
        for start, stop in _touching(self.garbled, offset, len(data)):
            self._garble(offset, data, start, stop)
        faults = _touching(self.missing, offset, len(data))
        for start, stop in faults:
            data[start:stop] = 0
        return faults

    def _garble(self, offset: int, data: Bytes, start: int, stop: int) -> None:
        """Replace data[start:stop] by random bytes."""
        first = (offset + start) // CHUNK * CHUNK
        for chunk in range(first, offset + stop, CHUNK):
            a, b = max(offset + start, chunk), min(offset + stop, chunk + CHUNK)
            data[a - offset : b - offset] = _noise(self.seed, chunk // CHUNK)[a - chunk : b - chunk]


@lru_cache(_KEPT)
def _flips(seed: tuple[int, ...], chunk: int, rate: float) -> tuple[NDArray[np.int32], Bytes]:
    """Bytes that flips strike in one chunk, in order, and which bit; a byte may be struck more than once."""
    random = np.random.default_rng([*seed, chunk, 0])
    count = random.binomial(8 * CHUNK, rate)
    places = np.sort(random.choice(8 * CHUNK, count, replace=False, shuffle=False).astype(np.int32))
    return places >> 3, np.left_shift(1, places & 7).astype(np.uint8)


@lru_cache(64)
def _noise(seed: tuple[int, ...], chunk: int) -> Bytes:
    """Random bytes that stand in one chunk wherever it is garbled."""
    return np.random.default_rng([*seed, chunk, 1]).integers(0, 256, CHUNK, np.uint8)


def _touching(ranges: Sequence[Range], offset: int, length: int) -> list[Range]:
    """The parts of sorted disjoint ranges that lie in offset..offset+length-1, relative to `offset`."""
    found: list[Range] = []
    if not ranges:
        return found
    for start, stop in ranges[max(0, bisect_left(ranges, (offset, 0)) - 1) :]:
        if start >= offset + length:
            break
        a, b = max(start - offset, 0), min(stop - offset, length)
        if a < b:
            found.append((a, b))
    return found


def draw(channel: Channel, data_bytes: int, sidecar_bytes: int, seed: Sequence[int]) -> tuple[Damage, Damage]:
    """One history of the medium: what happens to the stream and to the sidecar.

    Runs fall anywhere on both, as on one medium (on the data alone with `spare_sidecar`); none crosses from
    one to the other. The lost share is one of the data.
    """
    random = np.random.default_rng([*seed, 99])
    total = data_bytes + (0 if channel.spare_sidecar else sidecar_bytes)
    garbled: list[Range] = []
    missing: list[Range] = []
    for runs in channel.runs:
        (garbled if runs.readable else missing).extend(_draw_runs(runs, channel.years, total, random))
    lost = channel.lost_run(data_bytes)
    if lost is not None:
        start = int(random.integers(0, data_bytes - lost.lengths[0][0] + 1))
        missing.append((start, start + lost.lengths[0][0]))
    rate = channel.final_flip_rate
    data = Damage((*seed, _DATA), rate, _within(garbled, 0, data_bytes), _within(missing, 0, data_bytes))
    if channel.spare_sidecar:
        return data, Damage((*seed, _SIDECAR))
    return data, Damage(
        (*seed, _SIDECAR), rate, _within(garbled, data_bytes, total), _within(missing, data_bytes, total)
    )


def _draw_runs(runs: Runs, years: float, total: int, random: np.random.Generator) -> list[Range]:
    """Where the runs of one kind fall on `total` bytes."""
    heads = runs.count or int(random.poisson(runs.expected(total, years) / runs.cluster))
    lengths = [length for length, _ in runs.shares]
    shares = [share for _, share in runs.shares]
    found = []
    for _ in range(heads):
        many = 1 if runs.count or runs.cluster == 1 else int(random.geometric(1 / runs.cluster))
        place = int(random.integers(0, max(total, 1)))
        for number in range(many):
            at = place + (int(random.integers(0, runs.within + 1)) if number else 0)
            length = int(random.choice(lengths, p=shares))
            if not runs.readable and at + length <= total:
                at -= at % length  # Sectors lie where sectors lie.
            found.append((min(at, total), min(at + length, total)))
    return found


def _within(ranges: Sequence[Range], start: int, stop: int) -> tuple[Range, ...]:
    """The parts that lie in start..stop-1, from there, in order and joined where they touch."""
    joined: list[Range] = []
    for a, b in sorted((max(a, start) - start, min(b, stop) - start) for a, b in ranges):
        if a >= b:
            continue
        if joined and a <= joined[-1][1]:
            joined[-1] = (joined[-1][0], max(b, joined[-1][1]))
        else:
            joined.append((a, b))
    return tuple(joined)


# ---- media

PUBLISHED, SECOND_HAND, MEMORY, ASSUMED = "published", "second-hand", "memory", "assumed"
"""Where a figure comes from: read in its source; quoted from it by others; recalled; our own guess."""


@dataclass(frozen=True)
class Medium:
    """A kind of medium: the damage that stands for it, and the figures behind that."""

    name: str
    title: str
    runs: tuple[Runs, ...]
    figures: tuple[Assumption, ...]
    flip_rate: float = 0.0


_SECTOR = 4096
_ONE_READ = Assumption("every bit is read once a year", "our assumption", ASSUMED)
_HOST = "as the host sees it, after the drive's own correction"

MEDIA = {
    medium.name: medium
    for medium in (
        Medium(
            "optical",
            "optical disc at its act-now limit",
            # 33,024 of 37,856 bytes of a product code word are lost together: sixteen sectors of 2,048.
            (Runs(((16 * 2048, 1.0),), 1.0, readable=False, cluster=4, within=64 * 16 * 2048),),
            (
                Assumption(
                    "a product code word of a DVD holds 33,024 bytes, which fall together",
                    "ECMA-267",
                    PUBLISHED,
                ),
                Assumption(
                    "act now at a DVD PI SUM8 of 280, a BD symbol error rate of 1e-3: rates on the disc, "
                    "before the drive's correction",
                    "JIS Z 6017",
                    SECOND_HAND,
                ),
                Assumption(
                    f"past it 1 group of 16 sectors per TB and year is lost, {_HOST}, in clusters of 4",
                    "no figure for this is known to us",
                    ASSUMED,
                ),
            ),
        ),
        Medium(
            "tape",
            "LTO-9 tape",
            (Runs(((1 << 20, 1.0),), 8 * TB * 1e-20, readable=False),),
            (
                Assumption(f"1 uncorrectable bit in 1e20 read, {_HOST}", "makers' data sheets", SECOND_HAND),
                Assumption(
                    "LTO-8 ten times worse; LTO-3 under 1 in 1e17", "makers' data sheets", SECOND_HAND
                ),
                Assumption("an error takes 1 MiB with it", "our assumption", ASSUMED),
                _ONE_READ,
            ),
        ),
        Medium(
            "disk",
            "nearline hard disk, kept powered down",
            (
                Runs(((_SECTOR, 1.0),), 8 * TB * 1e-15, readable=False, cluster=2, within=100 * _SECTOR),
                Runs(((1, 0.1), (512, 0.1), (64 << 10, 0.8)), 1e-3),
            ),
            (
                Assumption(f"1 sector in 1e15 bits read, {_HOST}", "makers' data sheets", PUBLISHED),
                Assumption(
                    "consumer disks 1 in 1e14, 15K SAS 1 in 1e16; a second bad sector lies mostly within 100",
                    "makers' data sheets; studies of latent sector errors",
                    SECOND_HAND,
                ),
                Assumption("clusters of 2 sectors on average", "our assumption", ASSUMED),
                Assumption(
                    "silently wrong runs: a tenth single bits, a tenth 512 bytes, most others 64 KiB",
                    "a study of disks, 2007",
                    SECOND_HAND,
                ),
                Assumption("0.001 such runs per TB and year", "our assumption", ASSUMED),
                _ONE_READ,
            ),
        ),
        Medium(
            "flash",
            "flash without power, within its retention time",
            (Runs(((_SECTOR, 1.0),), 8 * TB * 1e-15, readable=False),),
            (
                Assumption(
                    f"1 sector in 1e15 bits read (client), {_HOST}; enterprise 1e16", "JESD218", SECOND_HAND
                ),
                Assumption(
                    "held only for the retention at rated wear: 1 year unpowered at 30 C (client), 3 months "
                    "at 40 C (enterprise); later we know of no figure",
                    "JESD218",
                    SECOND_HAND,
                ),
                _ONE_READ,
            ),
        ),
    )
}


def medium_named(name: str) -> Medium:
    """The preset of that name. Raises UsageError for others."""
    try:
        return MEDIA[name.strip().lower()]
    except KeyError:
        raise UsageError(f"no medium is called {name!r}; take {', '.join(MEDIA)}") from None
