"""What a command costs before it does any work: warm start-up against `import numpy`, and compiling.

    python tests/benchmarks/bench_start.py [--runs 15]

Whole processes that take turns, medians. Compiling is timed once, in an empty cache folder: everything that
`protect` and the repair of a damaged file need on this machine's tier.
"""

from __future__ import annotations

import argparse
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Mapping, Sequence
from pathlib import Path

import numpy as np
from bench_whole import ENVIRONMENT, OAKUM

SMALL = 1 << 20


def seconds(
    command: Sequence[str], environment: Mapping[str, str] | None = None, *, status: int = 0
) -> float:
    """Wall seconds of a process; raises RuntimeError when it does not end with `status`."""
    begin = time.perf_counter()
    ended = subprocess.run(command, env=environment, capture_output=True, text=True)
    took = time.perf_counter() - begin
    if ended.returncode:
        raise RuntimeError(f"{' '.join(command)} ended with {ended.returncode}: {ended.stderr}")
    return took


def start_up(runs: int) -> dict[str, float]:
    """Median wall seconds of `import numpy`, `--help` and `verify` of a small intact file."""
    with tempfile.TemporaryDirectory() as folder:
        file = Path(folder) / "small"
        file.write_bytes(np.random.default_rng(1).bytes(SMALL))
        seconds([*OAKUM, "protect", "--quiet", str(file)])
        commands = {
            "import numpy": [sys.executable, "-c", "import numpy"],
            "oakum --help": [*OAKUM, "--help"],
            "oakum verify, 1 MiB": [*OAKUM, "verify", "--quiet", str(file)],
        }
        found: dict[str, list[float]] = {name: [] for name in commands}
        for turn in range(runs + 1):  # the first warms the page cache and does not count
            for name, command in commands.items():
                took = seconds(command)
                if turn:
                    found[name].append(took)
    return {name: statistics.median(times) for name, times in found.items()}


def compiling() -> float:
    """Seconds that an empty cache adds to `protect` and `repair` of a damaged file."""
    with tempfile.TemporaryDirectory() as folder:
        file, total = Path(folder) / "small", []
        content = bytearray(np.random.default_rng(1).bytes(SMALL))
        damaged = bytearray(content)
        rng = np.random.default_rng(2)
        for place in rng.choice(8 * SMALL, SMALL // 100, replace=False):
            damaged[place >> 3] ^= 1 << (place & 7)
        environment = {**ENVIRONMENT, "XDG_CACHE_HOME": f"{folder}/cache"}
        for _ in range(2):  # cold, then warm
            file.write_bytes(content)
            begin = seconds([*OAKUM, "protect", "--quiet", "--overwrite", str(file)], environment)
            file.write_bytes(damaged)
            back = Path(folder) / "back"
            total.append(begin + seconds([*OAKUM, "repair", str(file), "--output", str(back)], environment))
            if back.read_bytes() != content:
                raise RuntimeError("the file did not come back")
            back.unlink()
    return total[0] - total[1]


def main() -> None:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--runs", type=int, default=15)
    found = start_up(parser.parse_args().runs)
    for name, took in found.items():
        print(f"{name:24}{took:8.3f} s{took / found['import numpy']:8.2f}")
    print(f"{'compiling, once':24}{compiling():8.3f} s")


if __name__ == "__main__":
    main()
