"""The measure of how far solutions are from what was received: against all codewords of a small code."""

from __future__ import annotations

import numpy as np
import pytest

from oakum.algebra.outer import OuterCode
from oakum.decoding.distances import Distances
from oakum.decoding.trials import Reliability
from oakum.kernels.words import FLAGGED

Bytes = np.ndarray


def known_of(status: Bytes, erased: Bytes, open_: Bytes) -> Reliability:
    """Columns of symbols with these statuses."""
    nothing = np.zeros(status.shape, np.uint8)
    return Reliability(erased, nothing.astype(bool), nothing, status, nothing, open_)


def test_distance_by_hand() -> None:
    status = np.array([[0], [1], [FLAGGED], [0], [0]], np.uint8)
    erased = np.array([[False], [False], [False], [True], [False]])
    open_ = np.array([[True], [True], [True], [True], [False]])
    distances = Distances.of(known_of(status, erased, open_), 4)
    column = np.array([0])
    none, all_open = np.zeros((5, 1), bool), open_
    # Reliabilities with d = 4: 1, 1/2, 0, 0; the last symbol is known and counts for nothing.
    assert distances.of_solutions(distances.altered(none, column), column).tolist() == [0 + 0.5 + 1 + 1]
    assert distances.of_solutions(distances.altered(all_open, column), column).tolist() == [2 + 1.5 + 1 + 1]


@pytest.mark.parametrize(("d", "t"), [(4, 1), (6, 2), (8, 3)])
def test_against_all_codewords(d: int, t: int) -> None:
    """RS(6, 1) has 256 codewords and D = 6; all are compared with words between two of them.

    At most one codeword is nearer than D (Forney 1966), and no rival of any is nearer than is claimed
    (Taipale and Pursley 1991; both from memory, and proved in a line by the triangle inequality).
    """
    outer = OuterCode(6, 1)
    codewords = np.array([[v, *outer.encode(np.array([v], np.uint8))] for v in range(256)], np.uint8)
    rng = np.random.default_rng(d)
    every, tight = np.arange(256), 0
    for _ in range(300):
        first, second = codewords[rng.integers(256, size=2)]
        received = np.where(rng.random(6) < 0.5, first, second)
        status = rng.choice(np.array([*range(t + 1), FLAGGED], np.uint8), 6)
        erased = rng.random(6) < 0.2
        tiled = (np.repeat(a[:, np.newaxis], 256, axis=1) for a in (status, erased, np.ones(6, bool)))
        distances = Distances.of(known_of(*tiled), d)
        altered = distances.altered((codewords != received).T, every)
        of_solutions = distances.of_solutions(altered, every)
        assert np.count_nonzero(of_solutions < outer.distance) <= 1
        claimed = distances.of_rivals(altered, every, outer.distance)
        bound = distances.rival_bound(altered.sum(axis=0), every, outer.distance)
        for one in (0, *np.argsort(of_solutions)[:3]):
            nearest = np.delete(of_solutions, one).min()
            assert nearest >= claimed[one] - 1e-9
            tight += nearest == pytest.approx(claimed[one])
        assert (bound <= claimed + 1e-9).all()
    assert tight > 0


def test_no_rival_where_too_few_symbols_are_open() -> None:
    status = np.zeros((6, 1), np.uint8)
    open_ = np.array([[True]] * 5 + [[False]])
    distances = Distances.of(known_of(status, np.zeros((6, 1), bool), open_), 4)
    column, nothing = np.array([0]), np.zeros((6, 1), bool)
    assert distances.of_rivals(distances.altered(nothing, column), column, 6).tolist() == [np.inf]
    assert distances.of_rivals(distances.altered(nothing, column), column, 5).tolist() == [10]
