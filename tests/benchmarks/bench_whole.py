"""protect and verify against a checksum, as whole processes: medians of interleaved runs, ratios in one run.

    python tests/benchmarks/bench_whole.py [--sizes 64MiB 1GiB 4GiB] [--runs 5] [--folder DIR]

For every size a file of random bytes is made and read once, so that it is in the page cache. Then each round
runs `openssl dgst -sha256`, `cp`, `oakum protect`, `oakum verify` and `oakum verify --digests-only` one after
the other. Times are wall times of whole processes, start-up and fsync included; memory is the peak of the
process. Only ratios within one run mean anything.
"""

from __future__ import annotations

import argparse
import os
import platform
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path

import numpy as np

UNITS = {"KiB": 1 << 10, "MiB": 1 << 20, "GiB": 1 << 30}
OAKUM = [sys.executable, "-m", "oakum"]

ENVIRONMENT = {name: value for name, value in os.environ.items() if name != "PYTHONDONTWRITEBYTECODE"}
"""As on most machines: modules are compiled to bytecode once and not by every process."""


def size_of(text: str) -> int:
    """A size such as 64MiB in bytes."""
    return int(text[:-3]) * UNITS[text[-3:]]


LAUNCHER = """
import os, sys, time
silent = [(os.POSIX_SPAWN_OPEN, 1, os.devnull, os.O_WRONLY, 0)]
begin = time.perf_counter()
pid = os.posix_spawnp(sys.argv[1], sys.argv[1:], os.environ, file_actions=silent)
_, status, usage = os.wait4(pid, 0)
print(time.perf_counter() - begin, usage.ru_maxrss / 1024, os.waitstatus_to_exitcode(status))
"""
"""A small process that starts others: the peak of memory of a process includes that of its parent."""


def run(command: Sequence[str]) -> tuple[float, float]:
    """Wall seconds and peak memory in MiB of a process; raises RuntimeError when it fails."""
    os.sync()  # Nobody waits for what another one wrote.
    launched = [sys.executable, "-S", "-c", LAUNCHER, *command]
    told = subprocess.run(launched, env=ENVIRONMENT, stdout=subprocess.PIPE, text=True, check=True).stdout
    seconds, memory, status = told.split()
    if status != "0":
        raise RuntimeError(f"{' '.join(command)} ended with {status}")
    return float(seconds), float(memory)


def read(path: Path) -> None:
    """Bring a file into the page cache."""
    with path.open("rb") as file:
        while file.read(1 << 20):
            pass


def take_turns(
    commands: Mapping[str, Sequence[str]], runs: int, before: Callable[[str], None]
) -> dict[str, tuple[float, float]]:
    """Median wall seconds and greatest peak memory in MiB of each; `before` is told which comes next."""
    results: dict[str, list[tuple[float, float]]] = {name: [] for name in commands}
    for turn in range(runs + 1):  # The first round warms page cache and kernels and does not count.
        for name, command in commands.items():
            before(name)
            found = run(command)
            if turn:
                results[name].append(found)
    return {
        name: (statistics.median(t for t, _ in found), max(m for _, m in found))
        for name, found in results.items()
    }


def measure(folder: Path, size: int, runs: int) -> dict[str, tuple[float, float]]:
    """Median wall seconds and greatest peak memory of each command on a file of `size` bytes."""
    file, sidecar = folder / "file", folder / "file.oakum"
    rng = np.random.default_rng(1)
    with file.open("wb") as out:
        for start in range(0, size, 1 << 26):
            out.write(rng.bytes(min(1 << 26, size - start)))
    commands = {
        "openssl dgst -sha256": ["openssl", "dgst", "-sha256", str(file)],
        "cp": ["cp", str(file), str(folder / "copy")],
        "protect": [*OAKUM, "protect", "--quiet", str(file)],
        "verify": [*OAKUM, "verify", "--quiet", str(file)],
        "verify --digests-only": [*OAKUM, "verify", "--quiet", "--digests-only", str(file)],
    }

    def before(name: str) -> None:
        if name in ("cp", "protect"):  # Giving old blocks back takes time of its own.
            for old in (folder / "copy", sidecar):
                old.unlink(missing_ok=True)
        elif name.startswith("verify"):  # protect leaves nothing large in the page cache
            read(sidecar)

    found = take_turns(commands, runs, before)
    for path in folder.iterdir():
        path.unlink()
    return found


def cpu_name() -> str:
    """The CPU's name, where the system tells it."""
    try:
        lines = Path("/proc/cpuinfo").read_text().splitlines()
        return next(line.partition(":")[2].strip() for line in lines if line.startswith("model name"))
    except (OSError, StopIteration):
        return platform.machine()


def heading(runs: int) -> str:
    """Date and machine, which a figure means nothing without."""
    return f"{time.strftime('%Y-%m-%d')}, {cpu_name()}, {os.cpu_count()} cores, medians of {runs} runs"


def main() -> None:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--sizes", nargs="+", default=["1MiB", "64MiB", "1GiB", "4GiB"])
    parser.add_argument("--runs", type=int, default=5)
    parser.add_argument("--folder", type=Path, default=None)
    options = parser.parse_args()
    print(f"{heading(options.runs)}\n")
    print(f"{'size':>6}  {'command':<24}{'seconds':>9}{'over openssl':>14}{'peak MiB':>10}")
    for text in options.sizes:
        with tempfile.TemporaryDirectory(dir=options.folder) as folder:
            found = measure(Path(folder), size_of(text), options.runs)
        unit = found["openssl dgst -sha256"][0]
        for name, (seconds, memory) in found.items():
            print(f"{text:>6}  {name:<24}{seconds:>9.2f}{seconds / unit:>14.2f}{memory:>10.0f}", flush=True)


if __name__ == "__main__":
    main()
