"""Measured curves of the real block decoder: what is lost at which flip rate.

    python tests/benchmarks/curve.py measure shelf 0.0115 0.0120 --blocks 60
    python tests/benchmarks/curve.py table
    python tests/benchmarks/curve.py past-capacity shelf 0.013 --blocks 200

`measure` adds points to curves.json, which a test takes as its reference; `table` prints what is stored,
beside the one-pass value by formula, plain Reed-Solomon of the same overhead and the Shannon limit.
`past-capacity` withholds all digests, so that nothing checks the decoder, and counts what it gets wrong.

Block number b of a point is made from the seed [point's seed, b]. The Monte Carlo error is one standard error
of the mean over blocks, since columns of a block are lost together.
"""

from __future__ import annotations

import argparse
import json
import time
from collections.abc import Iterable
from concurrent.futures import ProcessPoolExecutor
from dataclasses import asdict, dataclass, replace
from functools import cache, partial
from pathlib import Path

import numpy as np
from one_pass import lost_columns, rate_of_loss
from simulation import Damaged, Findings, Laboratory, decode

from oakum.algebra.bounds import shannon_limit
from oakum.algebra.concatenated import ConcatenatedCode
from oakum.algebra.inner import InnerCode
from oakum.algebra.naming import resolve_code
from oakum.algebra.outer import OuterCode
from oakum.geometry import CELL

STORE = Path(__file__).with_name("curves.json")
CODES = ("slim", "shelf", "stout", "plain", "RS(255,239)+EB(128,112)", "RS(255,223)+EB(128,112)")
SHARE = 1e-3
"""The share of columns lost that defines a code's threshold."""


@dataclass(frozen=True)
class Point:
    """What was measured of one code at one flip rate: columns lost in each block of `width` columns."""

    code: str
    rate: float
    width: int
    seed: int
    lost: tuple[int, ...]
    false_pins: int

    @property
    def share(self) -> float:
        """Share of the columns lost."""
        return sum(self.lost) / (self.width * len(self.lost))

    @property
    def spread(self) -> float:
        """Standard deviation, over blocks, of the share of columns lost."""
        return float(np.std(np.array(self.lost) / self.width, ddof=1))

    @property
    def error(self) -> float:
        """Standard error of `share`."""
        return self.spread / len(self.lost) ** 0.5

    @property
    def blocks_lost(self) -> int:
        return sum(lost > 0 for lost in self.lost)


# -- measuring ---------------------------------------------------------------------------------------------


@cache
def laboratory(code: str, width: int) -> Laboratory:
    return Laboratory(code, width)


def damaged_block(code: str, rate: float, width: int, seed: int, number: int) -> Damaged:
    """Block `number` of a point."""
    rng = np.random.default_rng([seed, number])
    return laboratory(code, width).block(rng).flip_at_random(rate, rng)


def lost_in_block(code: str, rate: float, width: int, seed: int, number: int) -> tuple[int, int]:
    """Columns lost, and columns pinned wrongly at some time, in one block with its digests."""
    block = damaged_block(code, rate, width, seed, number)
    found = decode(block, laboratory(code, width).decoders)
    accepted_wrongly(block, found)
    return int(found.lost.sum()), found.false_pins


def accepted_wrongly(block: Damaged, found: Findings) -> None:
    """Raise AssertionError if a cell was vouched for and is not as protected: the digests prevent it."""
    outcome = found.outcome
    truth = block.cells[outcome.strips]
    assert not (outcome.right != truth)[outcome.finished].any(), "a wrong cell was accepted"


def measure(
    code: str, rate: float, blocks: int, *, width: int = CELL, seed: int = 1, processes: int = 1
) -> Point:
    """Decode `blocks` random blocks."""
    work = partial(lost_in_block, code, rate, width, seed)
    if processes == 1:
        found = [work(number) for number in range(blocks)]
    else:
        with ProcessPoolExecutor(processes) as pool:
            found = list(pool.map(work, range(blocks)))
    return Point(code, rate, width, seed, tuple(lost for lost, _ in found), sum(pins for _, pins in found))


# -- the store ---------------------------------------------------------------------------------------------


def stored() -> list[Point]:
    """All points of curves.json."""
    if not STORE.exists():
        return []
    points = json.loads(STORE.read_text(encoding="utf-8"))["points"]
    return [Point(**{**point, "lost": tuple(point["lost"])}) for point in points]


def store(new: Point) -> None:
    """Add a point, in place of one of the same code, rate, width and seed."""
    kept = [p for p in stored() if replace(p, lost=(), false_pins=0) != replace(new, lost=(), false_pins=0)]
    kept.append(new)
    kept.sort(key=lambda p: (CODES.index(p.code), p.width, p.rate, p.seed))
    lines = ",\n".join(json.dumps(asdict(point)) for point in kept)
    STORE.write_text(f'{{"points": [\n{lines}\n]}}\n', encoding="utf-8")


def threshold(points: Iterable[Point]) -> float | None:
    """The flip rate at which SHARE of the columns is lost, between the points on either side of it.

    On a straight line in log share; a point where nothing was lost counts as half a column. None where the
    points do not enclose it.
    """
    ordered = sorted(points, key=lambda p: p.rate)
    logs = [np.log(max(p.share, 0.5 / (p.width * len(p.lost)))) for p in ordered]
    for (a, log_a), (b, log_b) in zip(
        zip(ordered, logs, strict=True), list(zip(ordered, logs, strict=True))[1:], strict=False
    ):
        if log_a <= np.log(SHARE) < log_b:
            return float(a.rate + (b.rate - a.rate) * (np.log(SHARE) - log_a) / (log_b - log_a))
    return None


# -- printing ----------------------------------------------------------------------------------------------


def plain_of_same_overhead(code: ConcatenatedCode) -> ConcatenatedCode:
    """Reed-Solomon of length 255 and the rate of `code`, alone."""
    return ConcatenatedCode("", OuterCode(255, round(255 * code.rate)), InnerCode.none())


def print_table() -> None:
    points = [p for p in stored() if p.width == CELL]
    for name in CODES:
        code, mine = resolve_code(name), [p for p in points if p.code == name]
        if not mine:
            continue
        alone, limit = plain_of_same_overhead(code), shannon_limit(code.rate)
        print(f"\n{name} = {code.notation}, overhead {100 * code.overhead:.0f} %")
        print(f"  flip rate  blocks   lost           columns lost   one pass  {alone.notation}")
        for p in mine:
            share = f"{p.share:.2e} +- {p.error:.1e}" if sum(p.lost) else f"< {3 / p.width / len(p.lost):.1e}"
            formulas = f"{lost_columns(code, p.rate):9.1e}  {lost_columns(alone, p.rate):11.1e}"
            print(f"  {p.rate:9.5f} {len(p.lost):7} {p.blocks_lost:5}  {share:>21}  {formulas}")
        here, one, plain = threshold(mine), rate_of_loss(code, SHARE), rate_of_loss(alone, SHARE)
        print(
            f"  {SHARE:g} of the columns lost: {alone.notation} at {plain:.4f}, one pass at {one:.4f}", end=""
        )
        if here:
            print(f", the decoder at {here:.4f}, {here / limit:.3f} of the Shannon limit {limit:.4f}")
        else:
            print(f"; Shannon limit {limit:.4f}")


# -- past capacity -----------------------------------------------------------------------------------------


def unchecked_block(code: str, rate: float, seed: int, number: int) -> tuple[int, int, int]:
    """Columns solved rightly, columns lost, and columns vouched for wrongly where no digest is to be had."""
    block = damaged_block(code, rate, CELL, seed, number)
    block.digested = False
    found = decode(block, laboratory(code, CELL).decoders)
    return int((~found.lost & ~found.wrong).sum()), int(found.lost.sum()), found.false_pins


def past_capacity(code: str, rate: float, blocks: int, seed: int, processes: int) -> None:
    """Print what happened with and without digests."""
    begin = time.perf_counter()
    with ProcessPoolExecutor(processes) as pool:
        found = np.array(list(pool.map(partial(unchecked_block, code, rate, seed), range(blocks))))
    right, lost, false = found.sum(axis=0).tolist()
    print(
        f"{code} at {rate}: {blocks * CELL:,} columns without digests: {right:,} right, {lost:,} lost,"
        f" {false:,} pinned wrongly ({time.perf_counter() - begin:.0f} s)",
        flush=True,
    )


def main() -> None:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("what", choices=["measure", "table", "past-capacity"])
    parser.add_argument("code", nargs="?", choices=CODES)
    parser.add_argument("rates", nargs="*", type=float)
    parser.add_argument("--blocks", type=int, default=24)
    parser.add_argument("--width", type=int, default=CELL)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--processes", type=int, default=1)
    options = parser.parse_args()
    for rate in options.rates:
        if options.what == "past-capacity":
            past_capacity(options.code, rate, options.blocks, options.seed, options.processes)
            continue
        begin = time.perf_counter()
        point = measure(
            options.code, rate, options.blocks, width=options.width, seed=options.seed,
            processes=options.processes,
        )  # fmt: skip
        store(point)
        each = (time.perf_counter() - begin) / options.blocks
        print(
            f"{point.code} {rate}: {point.share:.2e} +- {point.error:.1e} of the columns lost, in"
            f" {point.blocks_lost} of {options.blocks} blocks; {each:.2f} s a block",
            flush=True,
        )
    if options.what == "table":
        print_table()


if __name__ == "__main__":
    main()
