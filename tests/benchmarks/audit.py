"""audit beside verify, on intact data and on a file with flips and a tenth of it overwritten.

python tests/benchmarks/audit.py [MiB]
"""

from __future__ import annotations

import resource
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from statistics import median

import numpy as np

from oakum import audit, protect, verify
from oakum.jobs.audit import AuditOptions


def timed(job: Callable[[], object]) -> float:
    begin = time.perf_counter()
    job()
    return time.perf_counter() - begin


def compare(file: Path, runs: int) -> None:
    options = AuditOptions(ledger=file.with_name("ledger"))
    times = [(timed(lambda: verify(file)), timed(lambda: audit([file], options))) for _ in range(runs)]
    ratio = median(v for v, _ in times) / median(a for _, a in times)
    print(f"  verify {median(v for v, _ in times):.2f} s, audit {median(a for _, a in times):.2f} s")
    print(f"  audit runs at {ratio:.2f} of verify's speed (median of {runs} interleaved runs)")


def main(mib: int) -> None:
    rng = np.random.default_rng(1)
    with tempfile.TemporaryDirectory() as folder:
        file = Path(folder, "x.bin")
        data = bytearray(rng.bytes(mib << 20))
        file.write_bytes(data)
        protect([file])
        verify(file)
        print("intact")
        compare(file, 5)
        for place in rng.integers(0, len(data), 20_000).tolist():
            data[place] ^= 1 << place % 8
        start = len(data) // 3
        data[start : start + len(data) // 10] = rng.bytes(len(data) // 10)
        file.write_bytes(data)
        print("20,000 flips and a tenth overwritten")
        compare(file, 1)
    print(f"peak memory {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss >> 10} MiB")


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 256)
