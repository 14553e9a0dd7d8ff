"""Large proofs with real files: everything comes back bit for bit, and every flipped bit is counted.

    python tests/benchmarks/proof.py [--folder DIR] [--size BYTES] [tree] [file]

`tree` protects the machine's own Python library tree (8,000 files) as one set, overwrites 5 % of its bytes in
runs of 64 bytes to 1 MiB and deletes 40 files. `file` takes 1 GiB with 20,000 scattered flips and one
overwritten run of 100 MiB, for `shelf`, for `plain` and with windows. Seeds are fixed.
"""

from __future__ import annotations

import argparse
import filecmp
import os
import shutil
import sys
import sysconfig
import tempfile
import time
from pathlib import Path

import numpy as np

import oakum

MIB = 1 << 20
FILES = 8000


def flipped_bits(received: Path, right: Path) -> int:
    """Population count of one file XOR the other over their common length."""
    total = 0
    with received.open("rb") as a, right.open("rb") as b:
        while (x := a.read(16 * MIB)) and (y := b.read(16 * MIB)):
            size = min(len(x), len(y))
            total += int(
                np.bitwise_count(np.frombuffer(x, np.uint8, size) ^ np.frombuffer(y, np.uint8, size)).sum()
            )
    return total


def overwrite(path: Path, offset: int, data: bytes) -> None:
    with path.open("r+b") as file:
        file.seek(offset)
        file.write(data)


def flip(path: Path, count: int, rng: np.random.Generator) -> None:
    """Flip `count` different bits of a file."""
    bits = np.unique(rng.integers(0, 8 * path.stat().st_size, 2 * count))
    with path.open("r+b") as file:
        for bit in rng.permutation(bits)[:count].tolist():
            file.seek(bit // 8)
            value = file.read(1)[0]
            file.seek(bit // 8)
            file.write(bytes([value ^ 1 << bit % 8]))


def say(text: str) -> None:
    print(text, flush=True)


def proof_of_tree(folder: Path) -> bool:
    """8,000 small files, 5 % of their bytes overwritten in runs, 40 of them deleted."""
    source = Path(sysconfig.get_paths()["stdlib"])
    original, work = folder / "original", folder / "work"
    copied = _copy_files(source, original / "library", FILES)
    shutil.copytree(original, work, symlinks=True)
    begin = time.perf_counter()
    protected = oakum.protect([work / "library"])
    say(
        f"tree: {protected.members:,} members, {protected.stream_bytes:,} bytes, "
        f"protected in {time.perf_counter() - begin:.1f} s"
    )
    shutil.copy(protected.sidecar, original)
    _damage_tree(copied, work, protected.stream_bytes)
    begin = time.perf_counter()
    repaired = oakum.repair(work / "library", output=folder / "out")
    say(f"tree: repaired in {time.perf_counter() - begin:.1f} s: {repaired.outcome}, {repaired.totals}")
    wrong = [p for p in copied if not filecmp.cmp(original / p, folder / "out" / p, shallow=False)]
    say(f"tree: {len(copied):,} files compared, {len(wrong)} differ")
    return not wrong and repaired.outcome == "correctable"


def _copy_files(source: Path, target: Path, most: int) -> list[Path]:
    """Copy up to `most` files below `source`; their paths relative to the parent of `target`."""
    copied = []
    for path in sorted(source.rglob("*")):
        if path.is_file() and not path.is_symlink() and len(copied) < most:
            place = target / path.relative_to(source)
            place.parent.mkdir(parents=True, exist_ok=True)
            shutil.copyfile(path, place)
            copied.append(place.relative_to(target.parent))
    return copied


def _damage_tree(files: list[Path], work: Path, total: int) -> None:
    rng = np.random.default_rng(20)
    sizes = np.array([(work / p).stat().st_size for p in files])
    starts = np.cumsum(sizes) - sizes
    hit = 0
    while hit < total // 20:
        length = int(2 ** rng.uniform(6, 20))
        place = int(rng.integers(0, total - length))
        hit += length
        first, last = np.searchsorted(starts, [place, place + length - 1], side="right") - 1
        for i in range(first, last + 1):  # A run goes on in the next file, as on a medium.
            a, b = max(place, starts[i]) - starts[i], min(place + length, starts[i] + sizes[i]) - starts[i]
            if a < b:
                overwrite(work / files[i], int(a), rng.bytes(int(b - a)))
    for i in rng.permutation(len(files))[:40]:
        os.unlink(work / files[i])


def proof_of_file(folder: Path, size: int) -> bool:
    """One file with scattered flips and one overwritten run, with three ways of protecting it."""
    original = folder / "original"
    rng = np.random.default_rng(30)
    with original.open("wb") as file:
        for start in range(0, size, 64 * MIB):
            file.write(rng.bytes(min(64 * MIB, size - start)))
    good = True
    for name, options in {
        "shelf": {},
        "plain": {"code": "plain"},
        "windows of 4 MiB depth": {"depth": 4 * MIB},
    }.items():
        work = folder / "x.img"
        shutil.copy(original, work)
        oakum.protect([work], overwrite=True, **options)
        flip(work, 20_000 * size // (1 << 30), rng)
        overwrite(work, size // 3, rng.bytes(100 * MIB * size // (1 << 30)))
        flips = flipped_bits(work, original)
        begin = time.perf_counter()
        result = oakum.repair(work, output=folder / "x.back")
        seconds = time.perf_counter() - begin
        same = result.members[0].mended is not None and filecmp.cmp(
            original, folder / "x.back", shallow=False
        )
        say(
            f"file, {name}: {'bit for bit the same' if same else 'NOT THE SAME'} after {seconds:.1f} s; "
            f"bits_flipped {result.totals.bits_flipped:,}, population count {flips:,}; "
            f"weakest margin {result.weakest:.2f}"
        )
        good &= same and flips == result.totals.bits_flipped
        (folder / "x.back").unlink(missing_ok=True)
    return good


def main() -> int:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("what", nargs="*", choices=["tree", "file", []], default=[])
    parser.add_argument("--folder", type=Path, default=None)
    parser.add_argument("--size", type=int, default=1 << 30)
    options = parser.parse_args()
    good = True
    for what in options.what or ["tree", "file"]:
        with tempfile.TemporaryDirectory(dir=options.folder) as folder:
            good &= (
                proof_of_tree(Path(folder)) if what == "tree" else proof_of_file(Path(folder), options.size)
            )
    return 0 if good else 1


if __name__ == "__main__":
    sys.exit(main())
