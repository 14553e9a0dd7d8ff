"""How fast repair is, as a share of the speed of protect of the same file in the same run.

    python tests/benchmarks/bench_repair.py [--size BYTES] [--folder DIR] [--profile]

One file of 256 MiB, code shelf, in /dev/shm where there is one. Each line damages a fresh copy of file and
sidecar, repairs it, compares it bit for bit and counts the flips. Protect and repair take turns, since only
ratios in one run mean anything on a shared machine. `--profile` prints where the time of each line goes, with
all work in one thread.

    python tests/benchmarks/bench_repair.py --everywhere 0.009 --size 209715200

does one line only: flips at that rate everywhere, in the data and in the sidecar.
"""

from __future__ import annotations

import argparse
import cProfile
import filecmp
import pstats
import shutil
import tempfile
import time
from contextlib import nullcontext
from dataclasses import dataclass
from pathlib import Path

import numpy as np

import oakum
from oakum import pools
from oakum.results import CheckResult

MIB = 1 << 20
PIECE = 16 * MIB


@dataclass(frozen=True)
class Line:
    """One kind of damage and the share of protect's speed that repair should have."""

    name: str
    flip_rate: float
    burst: float
    goal: float


LINES = (
    Line("flips at 1e-5", 1e-5, 0.0, 1 / 2),
    Line("flips at 1e-3", 1e-3, 0.0, 1 / 4),
    Line("flips at 8e-3", 8e-3, 0.0, 1 / 50),
    Line("a burst of 10 %", 0.0, 0.1, 1 / 2),
)


def make(path: Path, size: int) -> None:
    """Random bytes, the same in every run."""
    rng = np.random.default_rng(256)
    with path.open("wb") as file:
        for start in range(0, size, PIECE):
            file.write(rng.bytes(min(PIECE, size - start)))


def flip(path: Path, rate: float, seed: int) -> int:
    """Flip each bit of a file with the chance `rate`; the number of flips."""
    rng, flips = np.random.default_rng(seed), 0
    with path.open("r+b") as file:
        while piece := file.read(PIECE):
            data = np.frombuffer(piece, np.uint8).copy()
            places = rng.choice(8 * len(data), rng.binomial(8 * len(data), rate), replace=False)
            np.bitwise_xor.at(data, places >> 3, (1 << (places & 7)).astype(np.uint8))
            flips += len(places)
            file.seek(-len(data), 1)
            file.write(data.tobytes())
    return flips


def overwrite(path: Path, share: float) -> None:
    """Replace a run of bytes, a third of the way into the file, by random ones."""
    size = path.stat().st_size
    with path.open("r+b") as file:
        file.seek(size // 3)
        file.write(np.random.default_rng(10).bytes(int(share * size)))


def population_count(a: Path, b: Path) -> int:
    """The bits in which two files of one length differ."""
    total = 0
    with a.open("rb") as left, b.open("rb") as right:
        while (x := left.read(PIECE)) and (y := right.read(PIECE)):
            total += int(np.bitwise_count(np.frombuffer(x, np.uint8) ^ np.frombuffer(y, np.uint8)).sum())
    return total


@dataclass(frozen=True)
class Cost:
    """Seconds by the clock, and of CPU time in all threads: the latter where others use the machine too."""

    clock: float
    cpu: float

    @staticmethod
    def now() -> Cost:
        return Cost(time.perf_counter(), time.process_time())

    def __sub__(self, other: Cost) -> Cost:
        return Cost(self.clock - other.clock, self.cpu - other.cpu)


def at_once(_: object, lane: object, unit: pools.Unit) -> None:
    """Instead of giving a unit to a thread: does it in the calling one, where a profiler sees it."""
    unit.do()


class Bench:
    """A protected file in a folder, to be damaged and repaired again and again."""

    def __init__(self, folder: Path, size: int) -> None:
        self.original, self.sidecar = folder / "original", folder / "original.oakum"
        self.work, self.damaged = folder / "work", folder / "work" / "x.img"
        self.work.mkdir()
        make(self.original, size)
        shutil.copy(self.original, self.damaged)

    def protect(self) -> Cost:
        """What it takes to protect the file; its sidecar is kept."""
        shutil.copy(self.original, self.damaged)
        start = Cost.now()
        result = oakum.protect([self.damaged], overwrite=True)
        cost = Cost.now() - start
        shutil.copy(result.sidecar, self.sidecar)
        return cost

    def damage(self, line: Line, *, sidecar: bool = False) -> int:
        """Damage a fresh copy; how many bits of the file are flipped then."""
        shutil.copy(self.original, self.damaged)
        shutil.copy(self.sidecar, self.work / "x.img.oakum")
        if line.flip_rate:
            flip(self.damaged, line.flip_rate, 1)
        if line.burst:
            overwrite(self.damaged, line.burst)
        if sidecar:
            flip(self.work / "x.img.oakum", line.flip_rate, 2)
        return population_count(self.damaged, self.original)

    def repair(self) -> tuple[Cost, CheckResult]:
        """What it takes to repair, and the record."""
        start = Cost.now()
        result = oakum.repair(self.damaged, output=self.work / "back")
        return Cost.now() - start, result

    def is_back(self, result: CheckResult, flips: int) -> str:
        """What is wrong with the result: nothing if the file is back and the flips are counted exactly."""
        if not filecmp.cmp(self.original, self.work / "back", shallow=False):
            return "NOT THE SAME"
        if result.totals.bits_flipped != flips:
            return f"COUNTED {result.totals.bits_flipped:,} FLIPS OF {flips:,}"
        return ""

    def clean(self) -> None:
        for path in self.work.iterdir():
            path.unlink()


def run(bench: Bench, line: Line, *, profile: bool, sidecar: bool = False) -> None:
    """One line of the table."""
    bench.clean()
    protecting = bench.protect()
    flips = bench.damage(line, sidecar=sidecar)
    profiler = cProfile.Profile()
    with profiler if profile else nullcontext():
        repairing, result = bench.repair()
    clock, cpu = protecting.clock / repairing.clock, protecting.cpu / repairing.cpu
    print(
        f"{line.name:18}{protecting.clock:8.2f} s{repairing.clock:8.2f} s{clock:8.3f}{cpu:10.3f}"
        f"{line.goal:8.3f}{flips:14,}{result.weakest:8.2f}  {bench.is_back(result, flips)}",
        flush=True,
    )
    if profile:
        pstats.Stats(profiler).sort_stats("tottime").print_stats(18)


def main() -> None:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    memory = Path("/dev/shm")
    parser.add_argument("--folder", type=Path, default=memory if memory.is_dir() else None)
    parser.add_argument("--size", type=int, default=256 * MIB)
    parser.add_argument("--everywhere", type=float)
    parser.add_argument("--profile", action="store_true")
    options = parser.parse_args()
    if options.profile:
        pools.Pools._begin = at_once  # type: ignore[method-assign]
    with tempfile.TemporaryDirectory(dir=options.folder) as folder:
        bench = Bench(Path(folder), options.size)
        bench.protect()  # Compiles what has to be compiled.
        print("damage               protect    repair   ratio  CPU ratio    goal         flips  margin")
        if options.everywhere is not None:
            line = Line(f"{options.everywhere:g} everywhere", options.everywhere, 0.0, 0.0)
            run(bench, line, profile=options.profile, sidecar=True)
            return
        for line in LINES:
            run(bench, line, profile=options.profile)


if __name__ == "__main__":
    main()
