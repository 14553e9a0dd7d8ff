"""How often the right cause is named first, at three strengths each, and false alarms on random errors.

    python tests/benchmarks/causes.py [seeds [first seed]]

The thresholds were tuned with first seed 1; the figures that count come from another one.
"""

from __future__ import annotations

import sys
from collections import Counter
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))
from error_patterns import SCENARIOS, false_alarm, first_cause


def main(seeds: int, first: int) -> None:
    print(f"{'cause':22} {'weak':>8} {'middle':>8} {'strong':>8}   others named first")
    for name, (cause, damage) in SCENARIOS.items():
        shares, others = [], Counter[str]()
        for strength in range(3):
            found = Counter(first_cause(damage, strength, [first, seed]) for seed in range(seeds))
            shares.append(f"{found[cause] / seeds:8.1%}")
            others += Counter({str(c): n for c, n in found.items() if c is not cause})
        print(f"{name:22} {' '.join(shares)}   {dict(others) or ''}", flush=True)
    alarms = sum(false_alarm(np.random.default_rng([first, 1, seed])) for seed in range(10 * seeds))
    print(f"false alarms: {alarms} of {10 * seeds:,} clean or randomly damaged files")


if __name__ == "__main__":
    main(*[int(given) for given in [*sys.argv[1:], *["200", "7001"][len(sys.argv) - 1 :]]])
