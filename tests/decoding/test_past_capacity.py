"""Past capacity nothing wrong is accepted, and little is even pinned wrongly before a digest is asked.

The chance that a random word passes for a solution is below 1e-9 for what is believed at once, and below 1e-4
for what is provisional. `tests/benchmarks/curve.py past-capacity` does the same for millions of columns.
"""

from __future__ import annotations

import numpy as np
import pytest
from simulation import Laboratory, decode

HOPELESS = [
    ("slim", 0.015),
    ("shelf", 0.02),
    ("stout", 0.04),
    ("plain", 0.03),
    ("RS(255,239)+EB(128,112)", 0.03),
]
AT_THE_EDGE = [("slim", 0.0085), ("shelf", 0.0142), ("plain", 0.0058), ("RS(255,239)+EB(128,112)", 0.0135)]


@pytest.mark.parametrize("digested", [True, False])
@pytest.mark.parametrize(("name", "rate"), HOPELESS)
def test_far_past_capacity(name: str, rate: float, digested: bool) -> None:
    lab, rng = Laboratory(name), np.random.default_rng(41)
    for _ in range(3):
        block = lab.block(rng).flip_at_random(rate, rng)
        block.digested = digested
        found = decode(block, lab.decoders)
        assert found.lost.sum() > 0.9 * lab.geometry.depth
        assert not found.outcome.correctable and not found.outcome.finished.any()
        # Provisional kinds: 4096 columns, a dozen trials, 2e-5 each, and those are taken back.
        assert found.wrong.sum() == 0 and found.false_pins <= 5


@pytest.mark.parametrize("digested", [True, False])
@pytest.mark.parametrize(("name", "rate"), AT_THE_EDGE)
def test_at_the_edge(name: str, rate: float, digested: bool) -> None:
    lab, rng = Laboratory(name, 256), np.random.default_rng(42)
    lost = 0
    for _ in range(2):
        block = lab.block(rng).flip_at_random(rate, rng)
        block.digested = digested
        found = decode(block, lab.decoders)
        lost += int(found.lost.sum())
        outcome = found.outcome
        assert np.array_equal(outcome.right[outcome.finished], block.cells[outcome.strips][outcome.finished])
        assert found.wrong.sum() == 0 and found.false_pins <= 1
    assert lost > 0  # or this would not be the edge


def test_digests_are_asked_before_anything_is_accepted() -> None:
    """Columns that an adversary turned into others, all D symbols and the inner parity that goes with them.

    The decoder has nothing to correct; the digests disagree, and nothing of it is finished.
    """
    lab, rng = Laboratory("shelf", 64), np.random.default_rng(43)
    columns, g = lab.decoders.columns, lab.geometry
    block = lab.block(rng)
    strips = rng.permutation(g.n)[: g.r + 1]
    difference = np.zeros((g.n, 64), np.uint8)
    difference[strips[0]] = rng.integers(1, 256, 64)
    others = [int(s) for s in strips[1:]]
    difference[others], _ = columns.erasure_solver(others).solve(columns.syndromes(difference))
    assert not columns.syndromes(difference).any()
    # One flip in each cell, which the inner code mends: every column is a codeword then.
    block.received ^= difference
    lab.decoders.words.parity_rows(block.received, lab.staggers, block.received_parity)
    block.flip([(int(s), int(rng.integers(512))) for s in strips])
    found = decode(block, lab.decoders)
    assert not found.outcome.correctable
    wrong = found.outcome.right != block.cells[found.outcome.strips]
    assert wrong.any() and not (wrong & found.outcome.finished[:, np.newaxis]).any()
