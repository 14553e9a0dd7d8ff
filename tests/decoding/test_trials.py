"""Which words are dense, which solutions may be believed: against brute force and exact counts."""

from __future__ import annotations

from dataclasses import fields
from math import exp

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from oakum.algebra.outer import OuterCode
from oakum.decoding.trials import (
    DENSE_RUN,
    Reliability,
    chance_of_acceptance,
    dense_words,
    neighbouring_rows,
    unclean_runs,
)
from oakum.kernels.words import FLAGGED


def reliability(**given_fields: np.ndarray) -> Reliability:
    """What is known of some symbols; whatever is not given says nothing."""
    shape = given_fields["status"].shape
    plain = {
        "status": np.zeros(shape, np.uint8),
        "doubts": np.zeros(shape, np.uint8),
        "open": np.ones(shape, bool),
    }
    return Reliability(
        **{
            f.name: given_fields.get(f.name, plain.get(f.name, np.zeros(shape, bool)))
            for f in fields(Reliability)
        }
    )


# -- chances ---------------------------------------------------------------------------------------


@pytest.mark.parametrize(("n", "k"), [(3, 1), (4, 2)])
def test_chance_of_acceptance_is_the_exact_count(n: int, k: int) -> None:
    """Of all 256^n words, those at distance 1 from a codeword of RS(n, k), r = 2, counted one by one.

    The code is linear: it is enough to look at words whose data symbols are zero, each standing for 256^k.
    """
    outer = OuterCode(n, k)
    singles = 0
    # One wrong symbol: where the word minus its codeword has weight 1. Its syndrome, the parity that belongs
    # to no data, is that of one symbol; count the different ones.
    seen = set()
    for place in range(n):
        for value in range(1, 256):
            data, parity = np.zeros(k, np.uint8), np.zeros(2, np.uint8)
            if place < k:
                data[place] = value
            else:
                parity[place - k] = value
            seen.add((outer.encode(data) ^ parity).tobytes())
    singles = len(seen)
    assert singles == 255 * n  # Spheres of radius 1 do not meet, since D = 3.
    chance = exp(chance_of_acceptance(np.array([n]), np.array([1]), np.array([2]))[0])
    assert chance == pytest.approx(singles / 256**2, rel=1e-12)


@given(st.integers(1, 255), st.integers(1, 60), st.data())
def test_chance_of_acceptance_counts_words(places: int, checks: int, data: st.DataObject) -> None:
    """C(places, e) 255^e words at distance e, of 256^checks syndromes, in exact integers."""
    from math import comb, log

    errors = data.draw(st.integers(0, min(places, checks)))
    exact = log(comb(places, errors)) + errors * log(255) - checks * log(256)
    got = chance_of_acceptance(np.array([places]), np.array([errors]), np.array([checks]))[0]
    assert got == pytest.approx(exact, abs=1e-9)


def test_miscorrection_of_a_random_word() -> None:
    """About 1/t!: 2.08533645e-5 for t = 8, 2.60888880e-14 for t = 16 (McEliece and Swanson; computed)."""
    for t, published in ((8, 2.08533645e-5), (16, 2.60888880e-14)):
        errors = np.arange(t + 1)
        total = np.exp(chance_of_acceptance(np.full(t + 1, 255), errors, np.full(t + 1, 2 * t))).sum()
        assert total == pytest.approx(published, rel=1e-8)


# -- verdicts --------------------------------------------------------------------------------------


ROWS = st.lists(st.tuples(st.integers(0, 3), st.integers(1, 50)), min_size=1, max_size=8)


@given(st.lists(ROWS, min_size=1, max_size=3))
def test_unclean_runs_are_as_long_as_asked(rows: list[list[tuple[int, int]]]) -> None:
    width = max(sum(count for _, count in row) for row in rows)
    status = np.zeros((len(rows), width), np.uint8)
    expected = np.zeros((len(rows), width), bool)
    for i, row in enumerate(rows):
        place = 0
        for value, count in row:
            status[i, place : place + count] = value
            place += count
        run: list[int] = []
        for j in range(width + 1):
            if j < width and status[i, j]:
                run.append(j)
                continue
            if len(run) >= DENSE_RUN:
                expected[i, run] = True
            run = []
    assert np.array_equal(unclean_runs(status, DENSE_RUN), expected)


def test_scattered_flips_are_not_dense_and_bursts_are() -> None:
    """Words of 128 bits: at a flip rate of 0.02 one in 13 is clean, at 0.002 three of four."""
    rng = np.random.default_rng(4)
    for rate, burst in ((0.02, 250), (0.002, 40)):
        clean = (1 - rate) ** 128
        status = (rng.random((60, 293)) >= clean).astype(np.uint8)
        assert not dense_words(status).any()
        status[7, 30 : 30 + burst] = FLAGGED
        status[7, [29, 30 + burst]] = 0
        dense = dense_words(status)
        assert dense[7, 30 : 30 + burst].all()
        assert np.count_nonzero(dense) == burst
    whole = np.full((5, 293), FLAGGED, np.uint8)
    assert dense_words(whole).all()


@pytest.mark.parametrize(
    ("strips", "room", "chosen"),
    [
        ([], 5, []),
        ([3], 5, []),
        ([3, 4], 5, [3, 4]),
        ([3, 4], 1, []),
        ([1, 3, 4, 5, 9, 10], 5, [3, 4, 5, 9, 10]),
        ([1, 3, 4, 5, 9, 10], 4, [3, 4, 5]),
        ([0, 1, 7, 8, 9, 10], 3, [0, 1]),
    ],
)
def test_neighbouring_rows(strips: list[int], room: int, chosen: list[int]) -> None:
    mask = neighbouring_rows(np.array(strips, np.intp), room, 2)
    assert np.array(strips, np.intp)[mask].tolist() == chosen
