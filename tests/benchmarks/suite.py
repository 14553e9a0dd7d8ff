"""Every benchmark in one run, as tables in Markdown: what README shows.

    python tests/benchmarks/suite.py [--sizes 1MiB 64MiB 1GiB 8GiB] [--runs 5] [--folder DIR]

About a quarter of an hour, a third of it for 8 GiB; DIR needs three times the greatest size. Files of random
bytes (nothing sparse) in the page cache; `openssl`, `cp`, `galois`, `reedsolo` and, where it is installed,
the storage library libisal take turns with ours. Only the ratios mean anything on another day.
"""

from __future__ import annotations

import argparse
import tempfile
from collections.abc import Iterable, Sequence
from pathlib import Path

import bench_columns
import bench_repair
import bench_start
import bench_stripmap
import bench_whole


def table(head: Sequence[str], rows: Iterable[Sequence[str]]) -> None:
    """Print a table in Markdown; all columns but the first hold numbers."""
    print(f"\n| {' | '.join(head)} |\n| --- |{' ---: |' * (len(head) - 1)}", flush=True)
    for row in rows:
        print(f"| {' | '.join(row)} |", flush=True)


def whole(sizes: Sequence[str], runs: int, folder: Path | None) -> None:
    """Commands against a checksum of the same file."""
    rows = []
    for text in sizes:
        with tempfile.TemporaryDirectory(dir=folder) as work:
            found = bench_whole.measure(Path(work), bench_whole.size_of(text), runs)
        (unit, _), *others = found.values()
        memory = max(peak for _, peak in found.values())
        rows.append(
            [text, f"{unit:.2f} s", *(f"{took / unit:.2f}" for took, _ in others), f"{memory:.0f} MiB"]
        )
    table(("size", *found, "peak memory"), rows)


def kernels() -> None:
    """The loops against libraries that do the same sums, one thread."""
    speeds = bench_stripmap.measure(bench_stripmap.strip_map_runs())
    unit, library = speeds["galois encode"], speeds.get("libisal, pieces of 64 bytes")
    table(
        ("RS(255,223) encoding", "over galois", "over libisal on 64 bytes"),
        [
            (name, f"{speed / unit:.4g}", f"{speed / library:.3g}" if library else "not here")
            for name, speed in speeds.items()
        ],
    )
    rates = bench_columns.megabytes_per_second(bench_columns.column_runs())
    unit = rates["galois, 16 wrong"]
    table(
        ("RS(255,223) decoding", "over galois"),
        [(name, f"{rate / unit:.4g}") for name, rate in rates.items()],
    )


def repairs() -> None:
    """Repair as a share of protect's speed."""
    rows = []
    with tempfile.TemporaryDirectory(dir=bench_repair.memory_folder()) as folder:
        bench = bench_repair.Bench(Path(folder), 256 * bench_repair.MIB)
        bench.protect()  # compiles what has to be compiled
        for line in bench_repair.LINES:
            ratio = bench_repair.median_ratio(bench, line)
            rows.append((line.name, f"{ratio:.3f}", f"{line.goal:.3g}"))
    table(("repair of 256 MiB", "speed over protect's", "goal"), rows)


def main() -> None:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--sizes", nargs="+", default=["1MiB", "64MiB", "1GiB", "8GiB"])
    parser.add_argument("--runs", type=int, default=5)
    parser.add_argument("--folder", type=Path)
    options = parser.parse_args()
    print(bench_whole.heading(options.runs))
    whole(options.sizes, options.runs, options.folder)
    kernels()
    repairs()
    found = bench_start.start_up(15)
    table(
        ("start", "seconds", "over import numpy"),
        [(name, f"{took:.3f}", f"{took / found['import numpy']:.2f}") for name, took in found.items()],
    )


if __name__ == "__main__":
    main()
