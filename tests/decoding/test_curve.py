"""What the decoder loses on the binary symmetric channel: one pass by formula, the full decoder as stored."""

from __future__ import annotations

import curve
import numpy as np
import pytest
from one_pass import (
    lost_as_received,
    lost_columns,
    lost_erasing,
    lost_in_one_pass,
    odds_of,
    spectrum,
    symbol_odds,
)
from simulation import Laboratory, decode

from oakum.algebra.inner import dual_weight_distribution, macwilliams
from oakum.algebra.naming import resolve_code
from oakum.algebra.outer import OuterCode
from oakum.kernels.words import FLAGGED

RATES = (1e-3, 2e-3, 3e-3, 5e-3, 1e-2)
LEAST_FAILURES = 50
NARROW = 512
"""Width of the blocks of the stored points that are measured again here."""


# -- the formulas ------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("name", "lost"),
    # No published table: summed over the binomial law of wrong symbols and, for the inner code, MacWilliams'
    # identity (1963) by a program that shares nothing with this one (computed; its Monte Carlo agreed).
    [
        ("RS(255,209)", (2.2e-18, 5.9e-12, 1.6e-8, 8.4e-5, 0.184)),
        ("RS(255,223)+[128,120,4]", (5.7e-34, 7.6e-19, 9.1e-12, 1.3e-5, 0.373)),
        ("RS(255,195)", (1.1e-26, 3.9e-18, 1.8e-13, 3.4e-8, 8.4e-3)),
    ],
)
def test_one_pass_by_formula(name: str, lost: tuple[float, ...]) -> None:
    code = resolve_code(name)
    assert [lost_columns(code, rate) for rate in RATES] == pytest.approx(lost, rel=0.04)


@pytest.mark.parametrize(
    ("k", "lost"),
    # As above: RS(255,k)+[128,112,6], with the 15 check bits of the extended BCH code itself.
    [(239, (7.8e-33, 7.9e-21, 6.8e-14, 2.2e-6, 0.296)), (223, (4.7e-68, 1.3e-45, 2.1e-32, 5.8e-17, 1.1e-3))],
)
def test_one_pass_by_formula_with_15_check_bits(k: int, lost: tuple[float, ...]) -> None:
    """[127,112,6], with check columns (1, x, x^3), x not 0 in GF(2^7).

    A6 = 325374 by enumeration of the dual and MacWilliams' identity (computed).
    """
    powers = [1]
    for _ in range(126):
        powers.append(powers[-1] << 1 ^ (0x89 if powers[-1] & 64 else 0))
    columns = np.array([1 << 14 | powers[i] << 7 | powers[3 * i % 127] for i in range(127)], np.uint32)
    weights = macwilliams(dual_weight_distribution(columns, 15))
    assert weights[6] == 325374
    words = spectrum(weights, 2)
    found = [lost_in_one_pass(OuterCode(255, k), odds_of(words, rate)) for rate in RATES]
    assert found == pytest.approx(lost, rel=0.04)


# -- one pass, measured ------------------------------------------------------------------------------------


def agrees(shares: list[float], expected: float) -> bool:
    """Whether the mean over blocks is within 3.5 of its standard errors, which are not too wide to tell."""
    error = float(np.std(shares, ddof=1)) / len(shares) ** 0.5
    assert error < expected / 8
    return abs(float(np.mean(shares)) - expected) <= 3.5 * error


@pytest.mark.parametrize(
    ("name", "rate"),
    [
        ("slim", 0.0045),
        ("shelf", 0.0085),
        ("stout", 0.0140),
        ("plain", 0.0060),
        ("RS(255,239)+EB(128,112)", 0.0085),
    ],
)
def test_one_pass_of_the_decoder_agrees_with_the_formula(name: str, rate: float) -> None:
    lab, rng = Laboratory(name), np.random.default_rng(21)
    decoders = lab.without(feedback=False, later_trials=False)
    blocks = [lab.block(rng).flip_at_random(rate, rng) for _ in range(16)]
    shares = [float(decode(block, decoders).lost.mean()) for block in blocks]
    assert agrees(shares, lost_as_received(lab.code.outer, symbol_odds(lab.code.inner, rate)))


@pytest.mark.parametrize(("name", "rate"), [("shelf", 0.0045), ("RS(255,223)+EB(128,112)", 0.0085)])
def test_erasing_flagged_words_agrees_with_the_formula(name: str, rate: float) -> None:
    lab, rng = Laboratory(name), np.random.default_rng(22)
    words, columns = lab.decoders.words, lab.decoders.columns
    shares = []
    for _ in range(16):
        block = lab.block(rng).flip_at_random(rate, rng)
        cells = block.received
        status = np.empty((len(cells), words.words(cells.shape[1])), np.uint8)
        words.correct(cells, block.received_parity, lab.staggers, status)
        erased = (words.spread(status, lab.staggers, cells.shape[1]) == FLAGGED).astype(np.uint8)
        magnitudes, errors = columns.decode(columns.syndromes(cells), erased)
        # With close to r erasures hardly a check is left, and the wrong ones are not found out.
        shares.append(float(((errors < 0) | (cells ^ magnitudes != block.cells).any(axis=0)).mean()))
    assert agrees(shares, lost_erasing(lab.code.outer, symbol_odds(lab.code.inner, rate)))


# -- the full decoder --------------------------------------------------------------------------------------


def reference_points() -> list[curve.Point]:
    return [p for p in curve.stored() if p.width == NARROW and sum(p.lost) >= LEAST_FAILURES]


def test_every_code_has_a_reference_point() -> None:
    assert {point.code for point in reference_points()} == set(curve.CODES)


@pytest.mark.parametrize("point", reference_points(), ids=lambda p: f"{p.code} {p.rate}")
def test_no_worse_and_no_better_than_stored(point: curve.Point, long: bool) -> None:
    """Fresh blocks at a stored point, within the Monte Carlo error of both.

    If the decoder has become better, measure the point again and store it.
    """
    if point.code == "RS(255,223)+EB(128,112)" and not long:
        pytest.skip("takes as long as all others together")
    blocks = 8
    now = curve.measure(point.code, point.rate, blocks, width=NARROW, seed=point.seed + 1)
    error = point.spread * (1 / blocks + 1 / len(point.lost)) ** 0.5
    assert abs(now.share - point.share) <= 3.5 * error


@pytest.mark.parametrize(
    ("code", "rate"),
    # What the decoder has to reach: 1e-3 of the columns lost no earlier than here.
    [("shelf", 0.0113), ("slim", 0.41 * 0.0165), ("stout", 0.41 * 0.0508)],
)
def test_reach(code: str, rate: float) -> None:
    """The stored curves at full width, and two fresh blocks, which all come back so far below the cliff."""
    points = [p for p in curve.stored() if p.code == code and p.width == curve.CELL]
    reached = curve.threshold(points)
    assert reached is not None and reached >= rate
    assert curve.measure(code, rate, 2, seed=31).lost == (0, 0)


def test_threshold_is_read_off_between_points() -> None:
    low = curve.Point("shelf", 0.010, 1000, 1, (1, 0, 0, 0, 0, 0, 0, 0, 0, 0), 0)
    high = curve.Point("shelf", 0.012, 1000, 1, (1000, 0, 0, 0, 0, 0, 0, 0, 0, 0), 0)
    assert (low.share, high.share) == (1e-4, 1e-1)
    assert curve.threshold([high, low]) == pytest.approx(0.010 + 0.002 / 3)
    assert curve.threshold([low]) is None
