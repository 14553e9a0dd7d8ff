"""Predicted against rehearsed loss: 3 codes, 2 channels, 10 points each between a loss of 1e-3 and 0.9.

    python tests/benchmarks/rehearsals.py measure       measures the curves that predict flips
    python tests/benchmarks/package_curves.py           hands them to the package, for plan
    python tests/benchmarks/rehearsals.py compare       rehearses; at most 3 of 60 may differ

Short codes and files of one block make it affordable: everything is the real thing, from the sidecar on the
medium to the last trial of the decoder, and what is compared with it is what plan says. Lost sectors are as
long as a strip and strike the data alone, so that their prediction is exact; flips strike data and sidecar,
and are predicted by measured curves (`rehearsals.json`), whose blocks come from other seeds. Rates and seeds
were set before anything was rehearsed. A point differs when the prediction is outside the exact 99 % interval
of what was rehearsed.

Both commands may be shared out by `--code`, and keep what is in `rehearsals.json` of the others.
"""

from __future__ import annotations

import argparse
import json
import sys
import tempfile
from collections.abc import Callable, Iterator
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from functools import cache, partial
from math import exp
from pathlib import Path
from typing import Any

import numpy as np
from simulation import Laboratory

from oakum.algebra.naming import resolve_code
from oakum.channel import TB
from oakum.decoding.block import decode_block
from oakum.forecast import Shape, forecast
from oakum.jobs.damage import Wishes
from oakum.jobs.protect import protect
from oakum.jobs.rehearse import rehearse
from oakum.probability import clopper_pearson

WIDTHS = {"RS(63,55)+EH(128,120)": 1216, "RS(63,51)+EH(128,120)": 1344, "RS(63,55)+EB(128,112)": 1216}
"""The codes, and the columns of the one block."""

RATES = {
    "RS(63,55)+EH(128,120)":
        (0.0066, 0.0070, 0.0074, 0.0083, 0.0088, 0.0093, 0.0098, 0.0101, 0.0104, 0.0107, 0.0111, 0.0116),
    "RS(63,51)+EH(128,120)":
        (0.0108, 0.0116, 0.0124, 0.0132, 0.0138, 0.0143, 0.0149, 0.0153, 0.0156, 0.0160, 0.0164, 0.0170),
    "RS(63,55)+EB(128,112)":
        (0.0124, 0.0132, 0.0136, 0.0141, 0.0146, 0.0152, 0.0155, 0.0158, 0.0162, 0.0165, 0.0168, 0.0177),
}  # fmt: skip
"""The flip rates that are measured, chosen from earlier measurements. All but the first and the last, which
hold the ends of the curve, are rehearsed."""

BLOCKS = (800, 3000, 2000, 1200, 800, 500, 400, 300, 250, 200, 150, 40)
"""Blocks measured at each: the loss predicted should be known better than it can be rehearsed."""

LOSSES = (0.0015, 0.004, 0.012, 0.03, 0.1, 0.2, 0.35, 0.5, 0.7, 0.88)
"""What the sectors are to lose."""

STORE = Path(__file__).with_name("rehearsals.json")
MEASURE_SEED, FLIP_SEED, SECTOR_SEED = 2027, 711, 712
LEVEL = 0.99


# -- the curves


@cache
def laboratory(name: str) -> Laboratory:
    return Laboratory(name, WIDTHS[name])


def block_is_lost(name: str, rate: float, number: int) -> bool:
    """Whether block `number` at this rate is lost."""
    rng = np.random.default_rng([MEASURE_SEED, round(rate * 1e7), number])
    block = laboratory(name).block(rng).flip_at_random(rate, rng)
    return not decode_block(block, laboratory(name).decoders).correctable


def measure(codes: list[str], processes: int, resume: bool) -> None:
    """Measure and store how many blocks are lost at each rate; with `resume` only where it is not known."""
    with ProcessPoolExecutor(processes) as pool:
        for name in codes:
            stored = json.loads(STORE.read_text()).get(name, {}) if resume else {}
            known = stored.get("points", []) if stored.get("seed") == MEASURE_SEED else []
            points = {(rate, blocks): lost for rate, blocks, lost in known}
            for rate, blocks in zip(RATES[name], BLOCKS, strict=True):
                if (rate, blocks) not in points:
                    lost = sum(pool.map(partial(block_is_lost, name, rate), range(blocks), chunksize=5))
                    points[rate, blocks] = lost
                print(name, rate, f"{points[rate, blocks]} of {blocks} blocks lost", flush=True)
                rows = [(*point, lost) for point, lost in sorted(points.items())]
                store(name, {"width": WIDTHS[name], "seed": MEASURE_SEED, "points": rows})


def store(name: str, new: dict[str, Any]) -> None:
    """Put what is known of one code into the store, beside what was there."""
    everything = json.loads(STORE.read_text())
    everything[name] = everything.get(name, {}) | new
    STORE.write_text(json.dumps(everything, indent=1) + "\n", encoding="ascii")


# -- the points


def invert(chance: Callable[[float], float], wanted: float, low: float, high: float) -> float:
    """Where a rising function takes the value `wanted`, or the end that is nearest."""
    for _ in range(60):
        middle = (low + high) / 2
        low, high = (middle, high) if chance(middle) < wanted else (low, middle)
    return (low + high) / 2


def flip_points(name: str, shape: Shape) -> Iterator[tuple[Wishes, float]]:
    """Flip rates, and what plan predicts there by the measured curve."""
    for rate in RATES[name][1:-1]:
        wishes = Wishes(flip_rate=rate)
        expected = forecast(shape, wishes.channel()[0]).expected
        assert expected is not None
        yield wishes, exp(expected)


def sector_points(name: str, shape: Shape) -> Iterator[tuple[Wishes, float]]:
    """Rates of lost sectors, and what they lose; all columns are lost alike, so that it is exact."""

    def wishes(rate: float) -> Wishes:
        return Wishes(sector_size=shape.depth, sectors_per_tb=rate, spare_sidecar=True)

    def loss(rate: float) -> float:
        return exp(forecast(shape, wishes(rate).channel()[0]).column)

    most = 3 * shape.code.outer.r * TB / shape.length
    for wanted in LOSSES:
        rate = invert(loss, wanted, 0.0, most)
        yield wishes(rate), loss(rate)


# -- predicted and rehearsed


@dataclass(frozen=True)
class Comparison:
    """One point: what was predicted, and what was lost in so many trials."""

    predicted: float
    lost: int
    trials: int

    @property
    def interval(self) -> tuple[float, float]:
        return clopper_pearson(self.lost, self.trials, LEVEL)

    @property
    def agrees(self) -> bool:
        return self.interval[0] <= self.predicted <= self.interval[1]


def compared(name: str, channel: str, trials: int) -> list[Comparison]:
    """Rehearse the ten points of a code and a channel."""
    code, place = resolve_code(name), list(WIDTHS).index(name)
    seed, points = (FLIP_SEED, flip_points) if channel == "flips" else (SECTOR_SEED, sector_points)
    found = []
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "data.bin"
        path.write_bytes(np.random.default_rng(place).bytes(code.outer.k * WIDTHS[name]))
        protect([path], code=name)
        shape = Shape.of(code, path.stat().st_size)
        for number, (wishes, predicted) in enumerate(points(name, shape)):
            result = rehearse(path, wishes, trials=trials, seed=1000 * seed + 100 * place + number, jobs=1)
            found.append(Comparison(predicted, trials - result.survived, trials))
    return found


def compare(codes: list[str], trials_of: dict[str, int], processes: int) -> int:
    """Print and store all points; returns how many predictions lie outside their interval."""
    outside = points = 0
    with ProcessPoolExecutor(processes) as pool:
        todo = [(name, channel, trials) for name in codes for channel, trials in trials_of.items()]
        for (name, channel, _), found in zip(todo, pool.map(compared, *zip(*todo, strict=True)), strict=True):
            store(name, {channel: [[c.predicted, c.lost, c.trials] for c in found]})
            for c in found:
                low, high = c.interval
                print(
                    f"{name} {channel:7} predicted {c.predicted:.4f}  lost {c.lost} of {c.trials} "
                    f"({low:.4f} to {high:.4f}){'' if c.agrees else '  outside'}",
                    flush=True,
                )
                points, outside = points + 1, outside + (not c.agrees)
    print(f"{outside} of {points} predictions outside the {LEVEL:.0%} interval")
    return outside


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawTextHelpFormatter)
    parser.add_argument("what", choices=["measure", "compare"])
    parser.add_argument("--flip-trials", type=int, default=60)
    parser.add_argument("--sector-trials", type=int, default=150)
    parser.add_argument("--channel", choices=["flips", "sectors"])
    parser.add_argument("--code", type=int, choices=range(len(WIDTHS)))
    parser.add_argument("--processes", type=int, default=2)
    parser.add_argument("--resume", action="store_true", help="measure only what was not, with this decoder")
    options = parser.parse_args()
    codes = list(WIDTHS) if options.code is None else [list(WIDTHS)[options.code]]
    if options.what == "measure":
        measure(codes, options.processes, options.resume)
        return
    trials = {"flips": options.flip_trials, "sectors": options.sector_trials}
    chosen = {channel: n for channel, n in trials.items() if options.channel in (None, channel)}
    sys.exit(compare(codes, chosen, options.processes) > 3)


if __name__ == "__main__":
    main()
