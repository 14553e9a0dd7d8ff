"""How fast repair is, as a share of the speed of protect of the same file in the same run.

    python tests/benchmarks/bench_repair.py [--within] [--runs 3] [--size BYTES] [--folder DIR] [--profile]

One file of 256 MiB, code shelf, in /dev/shm where there is one. Each line damages a fresh copy of file and
sidecar, repairs it, compares it bit for bit and counts the flips. Protect and repair take turns, since only
ratios in one run mean anything on a shared machine; medians are given. They are run as commands, start-up and
all, or with `--within` as functions of this process, which has loaded its kernels by then. `--profile` prints
where the time of each line goes, within this process and with all work in one thread.

    python tests/benchmarks/bench_repair.py --everywhere 0.009 --size 209715200

does one line only: flips at that rate everywhere, in the data and in the sidecar.
"""

from __future__ import annotations

import argparse
import cProfile
import filecmp
import json
import os
import pstats
import shutil
import statistics
import subprocess
import tempfile
import time
from contextlib import nullcontext
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from bench_whole import ENVIRONMENT, OAKUM

import oakum
from oakum import pools

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


HEAD = "damage               protect    repair   ratio  CPU ratio    goal         flips  margin"


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
    """Seconds by the clock, and of CPU time in all threads and processes, which others do not disturb."""

    clock: float
    cpu: float

    @staticmethod
    def now() -> Cost:
        return Cost(time.perf_counter(), sum(os.times()[:4]))

    def __sub__(self, other: Cost) -> Cost:
        return Cost(self.clock - other.clock, self.cpu - other.cpu)


def at_once(_: object, lane: object, unit: pools.Unit) -> None:
    """Instead of giving a unit to a thread: does it in the calling one, where a profiler sees it."""
    unit.do()


class Bench:
    """A protected file in a folder, to be damaged and repaired again and again."""

    def __init__(self, folder: Path, size: int, *, within: bool) -> None:
        self.original, self.sidecar = folder / "original", folder / "original.oakum"
        self.work, self.damaged = folder / "work", folder / "work" / "x.img"
        self.within = within
        self.work.mkdir()
        make(self.original, size)
        self.protect()  # Compiles what has to be compiled.

    def protect(self) -> Cost:
        """What it takes to protect the file; its sidecar is kept."""
        shutil.copy(self.original, self.damaged)
        sidecar = self.work / "x.img.oakum"
        sidecar.unlink(missing_ok=True)
        start = Cost.now()
        if self.within:
            oakum.protect([self.damaged])
        else:
            command("protect", "--quiet", self.damaged)
        cost = Cost.now() - start
        shutil.copy(sidecar, self.sidecar)
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

    def repair(self) -> tuple[Cost, int, float]:
        """What it takes to repair, the flips that were counted, and the weakest block's margin."""
        start = Cost.now()
        if self.within:
            result = oakum.repair(self.damaged, output=self.work / "back")
            return Cost.now() - start, result.totals.bits_flipped, result.weakest
        text = command("repair", "--json", self.damaged, "--output", self.work / "back")
        cost, document = Cost.now() - start, json.loads(text)
        weakest = min((block["margin"] for block in document["blocks"]), default=1.0)
        return cost, document["totals"]["bits_flipped"], weakest

    def is_back(self, counted: int, flips: int) -> str:
        """What is wrong with the result: nothing if the file is back and the flips are counted exactly."""
        if not filecmp.cmp(self.original, self.work / "back", shallow=False):
            return "NOT THE SAME"
        return "" if counted == flips else f"COUNTED {counted:,} FLIPS OF {flips:,}"

    def clean(self) -> None:
        for path in self.work.iterdir():
            path.unlink()


def command(*arguments: str | Path) -> str:
    """What a command prints. Raises CalledProcessError when it fails."""
    ended = subprocess.run(
        [*OAKUM, *map(str, arguments)], env=ENVIRONMENT, check=True, stdout=subprocess.PIPE, text=True
    )
    return ended.stdout


def run(bench: Bench, line: Line, runs: int, *, sidecar: bool = False) -> float:
    """Print one line of the table; gives the speed of repair over that of protect."""
    took: list[tuple[Cost, Cost]] = []
    for _ in range(runs):
        bench.clean()
        protecting = bench.protect()
        flips = bench.damage(line, sidecar=sidecar)
        repairing, counted, weakest = bench.repair()
        took.append((protecting, repairing))
        wrong = bench.is_back(counted, flips)
    protect, repair, clock, cpu = map(
        statistics.median,
        zip(*((p.clock, r.clock, p.clock / r.clock, p.cpu / r.cpu) for p, r in took), strict=True),
    )
    print(
        f"{line.name:18}{protect:8.2f} s{repair:8.2f} s{clock:8.3f}{cpu:10.3f}"
        f"{line.goal:8.3f}{flips:14,}{weakest:8.2f}  {wrong}",
        flush=True,
    )
    return clock


def memory_folder() -> Path | None:
    """Where files are in memory, if anywhere."""
    memory = Path("/dev/shm")
    return memory if memory.is_dir() else None


def table(size: int, folder: Path | None, runs: int, *, within: bool) -> dict[str, float]:
    """Print all lines; gives the speed of repair over that of protect by name."""
    with tempfile.TemporaryDirectory(dir=folder) as place:
        bench = Bench(Path(place), size, within=within)
        print(HEAD)
        return {line.name: run(bench, line, runs) for line in LINES}


def main() -> None:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--folder", type=Path, default=memory_folder())
    parser.add_argument("--size", type=int, default=256 * MIB)
    parser.add_argument("--runs", type=int, default=3)
    parser.add_argument("--everywhere", type=float)
    parser.add_argument("--within", action="store_true")
    parser.add_argument("--profile", action="store_true")
    options = parser.parse_args()
    profiler = cProfile.Profile()
    if options.profile:
        pools.Pools._begin = at_once  # type: ignore[method-assign]
    with profiler if options.profile else nullcontext():
        if options.everywhere is None:
            within = options.within or options.profile
            table(options.size, options.folder, options.runs, within=within)
        else:
            with tempfile.TemporaryDirectory(dir=options.folder) as folder:
                line = Line(f"{options.everywhere:g} everywhere", options.everywhere, 0.0, 0.0)
                print(HEAD)
                run(Bench(Path(folder), options.size, within=True), line, 1, sidecar=True)
    if options.profile:
        pstats.Stats(profiler).sort_stats("tottime").print_stats(40)


if __name__ == "__main__":
    main()
