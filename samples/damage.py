"""Does to a copy of the sample ledgers what forty years on a shelf might do, and tells what it did.

Decay does not ask the file system: the files keep their modification times.

    python samples/damage.py FOLDER

The seed is fixed: every run does the same. Never point it at files that you want to keep.
"""

import os
import random
import sys
from pathlib import Path

SEED = 1953


def main() -> None:
    """Damages the ledgers in the folder that the command line names."""
    if len(sys.argv) != 2:
        sys.exit("usage: python damage.py FOLDER")
    folder = Path(sys.argv[1])
    chance = random.Random(SEED)
    flip_bits(folder / "sheets" / "1911-03.pgm", 200, chance)
    for month in (1, 4, 8, 11):
        flip_bits(folder / "readings" / f"1911-{month:02d}.csv", 25, chance)
    overwrite(folder / "sheets" / "1911-09.pgm", offset=20_000, length=6_000, chance=chance)
    cut_short(folder / "readings" / "1911-12.csv", 5_000)
    lose(folder / "readings" / "1911-06.csv")


def flip_bits(path: Path, number: int, chance: random.Random) -> None:
    """Flips `number` single bits, all in different places."""
    content = bytearray(path.read_bytes())
    for bit in chance.sample(range(8 * len(content)), number):
        content[bit // 8] ^= 1 << bit % 8
    put(path, content)
    print(f"  {number} bits flipped here and there in {path.name}")


def overwrite(path: Path, offset: int, length: int, chance: random.Random) -> None:
    """Writes rubbish over a run of bytes."""
    content = bytearray(path.read_bytes())
    content[offset : offset + length] = chance.randbytes(length)
    put(path, content)
    print(f"  {length:,} bytes in a row overwritten in {path.name}")


def cut_short(path: Path, length: int) -> None:
    """Takes the last `length` bytes away."""
    content = path.read_bytes()
    put(path, content[:-length])
    print(f"  the last {length:,} bytes cut off {path.name}")


def put(path: Path, content: bytes) -> None:
    """Changes what is in the file and nothing else."""
    times = path.stat()
    path.write_bytes(content)
    os.utime(path, ns=(times.st_atime_ns, times.st_mtime_ns))


def lose(path: Path) -> None:
    """Removes the file altogether."""
    path.unlink()
    print(f"  {path.name} is gone")


if __name__ == "__main__":
    main()
