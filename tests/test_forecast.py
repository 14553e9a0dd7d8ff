"""Forecasts against drawing the same damage, and against what the geometry guarantees."""

from dataclasses import replace
from itertools import pairwise
from math import comb, exp, inf, log

import numpy as np
import pytest
from scipy import stats

from oakum.algebra.naming import resolve_code
from oakum.algebra.outcomes import symbol_chances
from oakum.channel import TB, Channel, Runs, draw
from oakum.forecast import Shape, forecast
from oakum.geometry import CELL
from oakum.measured import MeasuredCurve, measured_curve
from oakum.probability import ColumnChances

SHELF, PLAIN = resolve_code("shelf"), resolve_code("plain")


def hits_of_columns(shape: Shape, channel: Channel, draws: int) -> np.ndarray:
    """How many strips of a few columns drawn runs take, int[draws, columns]; data strips alone."""
    k, depth = shape.code.outer.k, shape.depth
    columns = np.linspace(0, depth - 1, 9).astype(int)
    places = (columns[:, np.newaxis] + depth * np.arange(k)).reshape(-1)
    found = []
    for seed in range(draws):
        damage, _ = draw(channel, k * depth, 0, (seed, 17))
        hit = np.zeros(len(places), bool)
        for start, stop in (*damage.garbled, *damage.missing):
            hit |= (start <= places) & (places < stop)
        found.append(hit.reshape(len(columns), k).sum(axis=1))
    return np.array(found)


@pytest.mark.parametrize(
    "runs",
    [
        Runs(((1 << 16, 1.0),), per_tb_year=1.4e6),
        Runs(((1000, 0.5), (100_000, 0.5)), per_tb_year=1.8e6),
        Runs(((1 << 16, 1.0),), count=24),
        Runs(((400_000, 1.0),), count=5),
    ],
    ids=["fixed length", "two lengths", "a number of runs", "longer than a strip"],
)
def test_columns_lost_to_runs(runs: Runs) -> None:
    shape = Shape.of(resolve_code("RS(72,64)"), 64 * 262_144)
    channel = Channel(runs=(runs,), spare_sidecar=True)
    loss = forecast(shape, channel)
    hits = hits_of_columns(shape, channel, 600)
    beyond = hits > shape.code.outer.r
    # Columns of one draw hang together, so that the draws are the sample.
    error = 5 * (beyond.mean() / 600) ** 0.5
    allowed = 0.0 if runs.lengths[0][0] <= shape.depth else 0.15  # overlapping long runs are counted twice
    assert 0.003 < beyond.mean() < 0.99
    assert beyond.mean() - error <= exp(loss.column) <= (beyond.mean() + error) * (1 + allowed) + allowed
    anywhere = beyond.any(axis=1).mean()
    assert exp(loss.stream[0]) - 5 * (anywhere / 600) ** 0.5 <= anywhere <= exp(loss.stream[1])


@pytest.mark.parametrize("code", ["slim", "shelf", "stout", "plain"])
def test_the_guaranteed_burst_is_never_lost(code: str) -> None:
    shape = Shape.of(resolve_code(code), 10**9)
    one = Channel(runs=(Runs(((shape.guaranteed_burst, 1.0),), count=1),))
    assert forecast(shape, one).stream == (-inf, -inf)
    two_strips_more = Runs(((shape.guaranteed_burst + 2 * shape.depth, 1.0),), count=1)
    assert forecast(shape, Channel(runs=(two_strips_more,))).column > log(0.9)


def test_two_bursts_that_fit_together_are_never_lost() -> None:
    shape = Shape.of(SHELF, 10**9)
    half = (shape.code.outer.r // 2 - 1) * shape.depth
    assert forecast(shape, Channel(runs=(Runs(((half, 1.0),), count=2),))).stream[1] == -inf
    assert forecast(shape, Channel(runs=(Runs(((half, 1.0),), count=3),))).stream[1] > log(0.01)


def test_lost_shares() -> None:
    shape = Shape.of(SHELF, 10**9)
    assert forecast(shape, Channel(lost_share=0.14)).stream[1] == -inf
    assert forecast(shape, Channel(lost_share=0.16)).stream[0] == 0.0


def test_sectors_as_long_as_a_strip_are_a_binomial() -> None:
    shape = Shape.of(resolve_code("RS(63,55)+EH(128,120)"), 55 * 1216)
    sectors = Runs(((shape.depth, 1.0),), per_tb_year=1e8, readable=False)
    loss = forecast(shape, Channel(runs=(sectors,), spare_sidecar=True))
    lost = -np.expm1(-1e8 * shape.depth / TB)
    assert exp(loss.column) == pytest.approx(stats.binom.sf(8, 55, lost), rel=1e-9)


def test_flips_alone_without_an_inner_code_are_a_binomial() -> None:
    shape = Shape.of(PLAIN, 10**12)
    loss = forecast(shape, Channel(1e-4))
    one = stats.binom.sf(16, 255, -np.expm1(8 * np.log1p(-1e-4)))
    assert exp(loss.column) == pytest.approx(one, rel=1e-9)
    # Without words no column shares anything with another.
    assert exp(loss.stream[0]) == pytest.approx(one * shape.depth, rel=1e-4)
    assert exp(loss.stream[1]) == pytest.approx(one * shape.depth, rel=1e-4)


def test_columns_that_share_words_are_bounded() -> None:
    shape = Shape.of(SHELF, 10**12)
    loss = forecast(shape, Channel(3e-3))
    groups = CELL // 15
    assert exp(loss.block[0]) == pytest.approx(-np.expm1(groups * np.log1p(-exp(loss.column))), rel=1e-9)
    assert exp(loss.block[1]) == pytest.approx(CELL * exp(loss.column), rel=1e-9)
    assert loss.column < loss.block[0] < loss.block[1] < loss.stream[1] <= 0


def test_runs_on_top_of_flips_take_check_symbols_away() -> None:
    shape = Shape.of(SHELF, 255 * 10**6)
    flips = forecast(shape, Channel(3e-3))
    burst = Runs(((shape.depth // 2, 1.0),), count=1)
    both = forecast(shape, Channel(3e-3, (burst,)))
    columns = ColumnChances(255, symbol_chances(SHELF.inner, 3e-3))
    # One run of half a depth takes one symbol of half the columns, be they data or parity.
    expected = 0.5 * exp(columns.log_loss(32)) + 0.5 * exp(columns.log_loss(31))
    assert exp(both.column) == pytest.approx(expected, rel=1e-6)
    assert both.column > flips.column


def test_more_of_anything_is_never_better() -> None:
    shape = Shape.of(SHELF, 10**12)
    base = Channel(1e-3, (Runs(((1 << 20, 1.0),), 1e3),), 0.01, years=3)
    loss = forecast(shape, base)
    for worse in (
        replace(base, flip_rate=1.2e-3),
        replace(base, runs=(Runs(((1 << 20, 1.0),), 2e3),)),
        replace(base, runs=(Runs(((1 << 21, 1.0),), 1e3),)),
        replace(base, lost_share=0.05),
        replace(base, years=4),
    ):
        other = forecast(shape, worse)
        assert other.column > loss.column
        assert other.stream[1] >= loss.stream[1] and other.block[1] >= loss.block[1]


@pytest.mark.parametrize(
    ("name", "fewest"),
    [("shelf", 50), ("RS(255,239)+EB(128,112)", 35), ("RS(255,223)+EB(128,112)", 67)],
)
def test_chances_below_1e_300_keep_their_digits(name: str, fewest: int) -> None:
    """At a tiny rate the likeliest loss is all that counts: the chance goes with rate^(its flips).

    Those are the fewest flips that can defeat both ways of one pass (computed by shortest paths over patterns
    of flips in the words through one column, where flagged words are erased).
    """
    shape = Shape.of(resolve_code(name), 10**13)
    at = [forecast(shape, Channel(rate)).column for rate in (1e-24, 1e-25)]
    assert (at[0] - at[1]) / log(10) == pytest.approx(fewest, rel=1e-9)
    assert at[1] < -1800


def test_depth_bounds_what_a_burst_costs() -> None:
    burst = Channel(1e-6, (Runs(((20 << 20, 1.0),), 1e2),))
    whole = forecast(Shape.of(SHELF, 10**12), burst)
    windows = forecast(Shape.of(SHELF, 10**12, 1 << 20), burst)
    assert windows.stream[1] > whole.stream[1]
    full = Shape.of(SHELF, 9 * 223 << 20, 1 << 20)
    assert full.guaranteed_burst == 32 * (1 << 20) - 2 * CELL
    # A short last window holds less, wherever the burst may fall.
    assert Shape.of(SHELF, (9 * 223 << 20) + 10**7, 1 << 20).guaranteed_burst < full.guaranteed_burst


# ---- measured curves

CURVE = MeasuredCurve(4096, ((0.010, 200, 0), (0.011, 100, 1), (0.012, 100, 37), (0.013, 100, 99)))


def test_below_the_measured_rates_only_the_limit_holds() -> None:
    # None of 200: one-sided 95 % limit 1 - 0.05^(1/200) (Clopper and Pearson 1934), about 2.9957/n.
    limit = 1 - 0.05 ** (1 / 200)
    assert CURVE.at_most(0.010) == pytest.approx(limit)
    assert CURVE.at_most(0.002) == pytest.approx(limit)
    assert CURVE.at_most(0.0125) == pytest.approx(stats.beta.ppf(0.95, 100, 1))
    assert CURVE.at_most(0.014) == 1.0
    assert CURVE.estimate(0.014) is None and CURVE.estimate(0.009) is None


def test_between_measured_rates_the_estimate_rises() -> None:
    rates = np.linspace(0.0101, 0.0129, 20)
    found = [CURVE.estimate(rate) for rate in rates]
    assert all(a is not None and b is not None and a < b for a, b in pairwise(found))
    assert CURVE.estimate(0.012) == pytest.approx(37.5 / 101)


def test_neighbours_out_of_order_are_pooled() -> None:
    curve = MeasuredCurve(64, ((0.01, 100, 0), (0.02, 100, 30), (0.03, 100, 20), (0.04, 100, 90)))
    assert curve.estimate(0.025) == pytest.approx(50.5 / 201)


def test_binomial_coefficients_are_not_forgotten() -> None:
    # RS(63,55) without an inner code at a tiny rate: C(63, 5) (8 p)^5.
    loss = forecast(Shape.of(resolve_code("RS(63,55)"), 10**6), Channel(1e-12))
    assert loss.column == pytest.approx(log(comb(63, 5)) + 5 * log(8e-12), rel=1e-9)


@pytest.mark.parametrize("name", ["slim", "shelf", "stout"])
def test_the_named_codes_come_with_measured_curves(name: str) -> None:
    curve = measured_curve(resolve_code(name), CELL)
    assert curve is not None and curve.width == CELL
    rates = [rate for rate, _, _ in curve.points]
    assert rates == sorted(set(rates))
    assert all(0 <= lost <= blocks and blocks >= 20 for _, blocks, lost in curve.points)
    assert measured_curve(resolve_code(name), CELL + 1) is None


def test_measured_curves_only_ever_lower_the_bound() -> None:
    shape = Shape.of(SHELF, 100 * 223 * CELL)
    loss = forecast(shape, Channel(0.0115))
    assert loss.stream[1] == pytest.approx(0, abs=1e-6)  # one pass loses everything
    assert loss.measured is not None and loss.at_most == loss.measured
    # Between measured rates the chance itself is known too; nothing is extrapolated.
    known = forecast(shape, Channel(0.0121))
    assert known.expected is not None and known.measured is not None and known.expected < known.measured
    assert forecast(shape, Channel(1e-4)).expected is None
    # With bursts beside the flips nothing was measured.
    assert forecast(shape, Channel(0.0115, (Runs(((1000, 1.0),), 1.0),))).measured is None
    assert forecast(shape, Channel(1e-4)).at_most < -50
