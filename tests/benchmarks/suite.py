"""Every benchmark in one run, as tables in Markdown: what README shows.

    python tests/benchmarks/suite.py [--sizes 1MiB 64MiB 1GiB 8GiB] [--runs 5] [--folder DIR]

About a quarter of an hour, half of it for 8 GiB; DIR needs three times the greatest size. Files of random
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
import bench_sets
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


def repairs(runs: int) -> None:
    """Repair as a share of protect's speed: as commands, and as functions of one process."""
    print()
    folder, size = bench_repair.memory_folder(), 256 * bench_repair.MIB
    found = [bench_repair.table(size, folder, runs, within=within) for within in (False, True)]
    table(
        ("repair of 256 MiB, speed over protect's", "commands", "within a process"),
        [(name, *(f"{ratios[name]:.3f}" for ratios in found)) for name in found[0]],
    )


def sets(folder: Path | None) -> None:
    """100,000 small files against one process that walks, reads and hashes them."""
    with tempfile.TemporaryDirectory(dir=folder) as work:
        found, recorded = bench_sets.measure(Path(work), 100_000, 3)
    (unit, _), *others = found.values()
    table(
        ("100,000 small files", "over walking, reading and SHA-256", "peak memory"),
        [
            (name, f"{took / unit:.2f}", f"{peak:.0f} MiB")
            for name, (took, peak) in zip(list(found)[1:], others, strict=True)
        ],
    )
    print(f"\n{recorded:.0f} bytes are recorded of a member.")


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
    repairs(3)
    sets(options.folder)
    found = bench_start.start_up(15)
    table(
        ("start", "seconds", "over import numpy"),
        [(name, f"{took:.3f}", f"{took / found['import numpy']:.2f}") for name, took in found.items()],
    )


if __name__ == "__main__":
    main()
