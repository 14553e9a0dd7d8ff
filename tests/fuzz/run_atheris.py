"""Coverage-guided fuzzing of one target; needs the extra `fuzz` (atheris).

    python tests/fuzz/run_atheris.py bootstrap|reader|unreadable [libFuzzer options] [corpus folders]

Half of the mutations go through the target's mender. At the end, and every 10,000 inputs, it prints how many
inputs were tried, the slowest one and the peak of memory.
"""

import atexit
import random
import resource
import sys
import time
from pathlib import Path

import atheris

with atheris.instrument_imports(include=["oakum.sidecar", "oakum.geometry", "oakum.jobs.unreadable"]):
    from targets import LARGEST, TARGETS

SECONDS, MEBIBYTES = 1.0, 256
NAME = sys.argv.pop(1)
target, mend = TARGETS[NAME]
inputs, slowest = 0, 0.0


def one_input(data: bytes) -> None:
    """Try one input and hold it against the limits."""
    global inputs, slowest
    begin, before = time.process_time(), resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    target(data)
    took = time.process_time() - begin
    grown = (resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before) >> 10
    inputs += 1
    slowest = max(slowest, took)
    assert took < SECONDS, f"{took:.2f} s"
    assert grown < MEBIBYTES, f"{grown} MiB"
    if inputs % 10_000 == 0:
        tell()


def tell() -> None:
    """How it went so far."""
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss >> 10
    spent = f"{inputs:,} inputs in {time.process_time():,.0f} s of processor time"
    print(f"{NAME}: {spent}, slowest {slowest:.3f} s, peak {peak} MiB", file=sys.stderr, flush=True)


def mutate(data: bytes, most: int, seed: int) -> bytes:
    """Mutate, and mend every other time."""
    mutated = atheris.Mutate(data, min(most, LARGEST))
    return mend(mutated)[:most] if random.Random(seed).random() < 0.5 else mutated


def main() -> None:
    """Warm up what is compiled at first use, then fuzz."""
    for path in (Path(__file__).parent / "corpus" / NAME).iterdir():
        data = path.read_bytes()
        for at in (0, 4200, 9000):
            target(data[:at] + bytes(600) + data[at + 600 :])
    atexit.register(tell)
    atheris.Setup(sys.argv, one_input, custom_mutator=mutate)
    atheris.Fuzz()


if __name__ == "__main__":
    main()
