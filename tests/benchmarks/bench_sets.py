"""Sets of many small files against one Python process that walks, reads and hashes them.

    python tests/benchmarks/bench_sets.py [--files 100000] [--runs 3] [--folder DIR]

A tree of files with log-normal sizes (median 4 KiB, most of them from 2 to 8 KiB), a hundred to a folder and
a hundred folders to a folder, in the page cache. Each round runs the reference (`os.scandir`, `open`, `read`,
`hashlib`, nothing else), `oakum protect` and `oakum verify` one after the other, as whole processes. The
bytes that the sidecar keeps of a member are those of its entry in the member table.
"""

from __future__ import annotations

import argparse
import sys
import tempfile
from pathlib import Path

import numpy as np
from bench_whole import OAKUM, heading, take_turns

from oakum.files import FileBytes
from oakum.sidecar.layout import Track
from oakum.sidecar.reading import find_sections

SIGMA = 1.0
MEDIAN = 4096
IN_A_FOLDER = 100

REFERENCE = """
import hashlib, os, sys

def walk(folder):
    with os.scandir(folder) as entries:
        for entry in sorted(entries, key=lambda entry: entry.name):
            if entry.is_dir(follow_symlinks=False):
                walk(entry.path)
            else:
                with open(entry.path, "rb") as file:
                    digests[entry.path] = hashlib.sha256(file.read()).digest()

digests = {}
walk(sys.argv[1])
"""


def make_tree(root: Path, count: int) -> int:
    """Write `count` files below `root`; returns their bytes."""
    rng = np.random.default_rng(4)
    sizes = rng.lognormal(np.log(MEDIAN), SIGMA, count).astype(int)
    noise = rng.bytes(int(sizes.max()))
    for number, size in enumerate(sizes.tolist()):
        folder = (
            root / f"shelf-{number // IN_A_FOLDER**2:03}" / f"box-{number // IN_A_FOLDER % IN_A_FOLDER:02}"
        )
        if number % IN_A_FOLDER == 0:
            folder.mkdir(parents=True)
        content = number.to_bytes(8, "little") + noise
        (folder / f"plate-{number:06}.tif").write_bytes(content[:size])
    return int(sizes.sum())


def measure(folder: Path, count: int, runs: int) -> tuple[dict[str, tuple[float, float]], float]:
    """Median wall seconds and peak MiB of each command, and the bytes that are recorded of a member."""
    root = folder / "plates"
    root.mkdir()
    make_tree(root, count)
    sidecar = folder / "plates.oakum"
    commands = {
        "walk, read, SHA-256": [sys.executable, "-c", REFERENCE, str(root)],
        "protect": [*OAKUM, "protect", "--quiet", str(root)],
        "verify": [*OAKUM, "verify", "--quiet", str(root)],
    }

    def before(name: str) -> None:
        if name == "protect":
            sidecar.unlink(missing_ok=True)

    medians = take_turns(commands, runs, before)
    with FileBytes(sidecar) as source:
        recorded = sum(s.layout.content(Track.TABLE) for s in find_sections(source))
    return medians, recorded / count


def main() -> None:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--files", type=int, nargs="+", default=[100_000])
    parser.add_argument("--runs", type=int, default=3)
    parser.add_argument("--folder", type=Path, default=None)
    options = parser.parse_args()
    print(f"{heading(options.runs)}\n")
    print(f"{'files':>8}  {'command':<22}{'seconds':>9}{'over reference':>16}{'peak MiB':>10}")
    for count in options.files:
        with tempfile.TemporaryDirectory(dir=options.folder) as folder:
            found, recorded = measure(Path(folder), count, options.runs)
        unit = found["walk, read, SHA-256"][0]
        for name, (seconds, memory) in found.items():
            print(f"{count:>8}  {name:<22}{seconds:>9.2f}{seconds / unit:>16.2f}{memory:>10.0f}", flush=True)
        print(f"{recorded:.0f} bytes are recorded of a member")


if __name__ == "__main__":
    main()
