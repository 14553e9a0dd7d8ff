"""Drawn damage is what the model says, and the same however it is read."""

from math import inf, nan

import numpy as np
import pytest

from oakum.channel import CHUNK, MEDIA, TB, Channel, Damage, Runs, draw, medium_named
from oakum.errors import UsageError

LENGTH = 5 * CHUNK + 777


def struck(damage: Damage, length: int = LENGTH) -> np.ndarray:
    """Zeros of `length` bytes after the damage."""
    data = np.zeros(length, np.uint8)
    damage.strike(0, data)
    return data


@pytest.mark.parametrize("step", [1 << 20, CHUNK, 10_007, 274])
def test_reading_in_pieces_finds_the_same_damage(step: int) -> None:
    channel = Channel(1e-3, (Runs(((9000, 1.0),), count=4), Runs(((4096, 1.0),), count=3, readable=False)))
    damage, _ = draw(channel, LENGTH, 50_000, (7,))
    whole = np.full(LENGTH, 0x5A, np.uint8)
    faults = damage.strike(0, whole)
    pieces = np.full(LENGTH, 0x5A, np.uint8)
    found: set[int] = set()
    for start in range(0, LENGTH, step):
        piece = pieces[start : start + step]
        for a, b in damage.strike(start, piece):
            found |= set(range(start + a, start + b))
    assert np.array_equal(whole, pieces)
    assert found == {place for a, b in faults for place in range(a, b)}
    assert found and not whole[sorted(found)].any()


def test_the_same_seed_draws_the_same_and_another_something_else() -> None:
    channel = Channel(1e-3, (Runs(((500, 0.5), (5000, 0.5)), per_tb_year=2e7),))
    assert draw(channel, LENGTH, LENGTH, (1, 2)) == draw(channel, LENGTH, LENGTH, (1, 2))
    assert draw(channel, LENGTH, LENGTH, (1, 2)) != draw(channel, LENGTH, LENGTH, (1, 3))
    one, other = (draw(Channel(1e-2), LENGTH, 0, (seed,))[0] for seed in (1, 2))
    assert not np.array_equal(struck(one), struck(other))


def test_data_and_sidecar_are_flipped_independently() -> None:
    data, sidecar = draw(Channel(1e-2), LENGTH, LENGTH, (1,))
    assert not np.array_equal(struck(data), struck(sidecar))


@pytest.mark.parametrize("rate", [1e-5, 1e-3, 0.2, 0.5])
def test_the_flip_rate_is_the_share_of_bits_flipped(rate: float) -> None:
    bits = 8 * 40 * CHUNK
    count = int(np.bitwise_count(struck(Damage((3,), rate), 40 * CHUNK)).sum())
    assert count == pytest.approx(bits * rate, abs=5 * (bits * rate * (1 - rate)) ** 0.5)


def test_every_bit_of_a_byte_is_flipped_alike() -> None:
    data = struck(Damage((5,), 0.01), 40 * CHUNK)
    counts = [int(np.count_nonzero(data & (1 << bit))) for bit in range(8)]
    expected = 40 * CHUNK * 0.01
    assert counts == pytest.approx([expected] * 8, abs=5 * expected**0.5)


def test_garbled_bytes_are_random_bytes() -> None:
    data = np.zeros(LENGTH, np.uint8)
    Damage((1,), garbled=((1000, 201_000),)).strike(0, data)
    assert not data[:1000].any() and not data[201_000:].any()
    counts = np.bincount(data[1000:201_000], minlength=256)
    # Chi-square with 255 degrees of freedom: 1 in 10,000 is above 347 (scipy.stats.chi2.isf).
    assert ((counts - 781.25) ** 2 / 781.25).sum() < 347


def test_rates_of_runs_are_per_terabyte_and_year() -> None:
    runs = Runs(((100, 1.0),), per_tb_year=4e6)
    assert runs.expected(TB // 10**6, 2.5) == pytest.approx(10)
    drawn = [
        len(draw(Channel(runs=(runs,), years=2.5), TB // 10**6, 0, (seed,))[0].garbled) for seed in range(400)
    ]
    # A few of them touch and are joined.
    assert np.mean(drawn) == pytest.approx(10, abs=5 * (10 / 400) ** 0.5)


def test_runs_fall_on_data_and_sidecar_in_proportion() -> None:
    runs = Runs(((1, 1.0),), count=4000)
    data, sidecar = draw(Channel(runs=(runs,)), 10**9, 3 * 10**9, (1,))
    assert len(data.garbled) == pytest.approx(1000, abs=5 * (4000 * 0.25 * 0.75) ** 0.5)
    assert len(data.garbled) + len(sidecar.garbled) == pytest.approx(4000, abs=2)
    _, spared = draw(Channel(1e-3, (runs,), spare_sidecar=True), 10**9, 3 * 10**9, (1,))
    assert not spared.garbled and not struck(spared).any()


def test_sectors_come_in_clusters_and_lie_on_their_boundaries() -> None:
    runs = Runs(((4096, 1.0),), 1e6, readable=False, cluster=5, within=100 * 4096)
    damage, _ = draw(Channel(runs=(runs,)), 10**9, 0, (4,))
    starts = np.array([start for start, _ in damage.missing])
    assert not (starts % 4096).any()
    lost = sum(b - a for a, b in damage.missing) / 4096
    # 1,000 sectors in 200 clusters; their number varies with that of the clusters and their sizes.
    assert lost == pytest.approx(1000, abs=5 * (200 * (5**2 + 5 * 4)) ** 0.5)
    near = np.diff(starts) <= 100 * 4096
    assert near.mean() > 0.5


def test_a_lost_share_is_one_piece_of_the_data() -> None:
    data, sidecar = draw(Channel(lost_share=0.1), 10**6, 10**6, (2,))
    ((start, stop),) = data.missing
    assert stop - start == 10**5 and start >= 0 and stop <= 10**6
    assert not sidecar.missing


def test_flips_over_the_years_cancel_each_other() -> None:
    # Two flips of a bit leave it as it was: p2 = 2 p (1 - p) (common practice).
    assert Channel(0.1, years=2).final_flip_rate == pytest.approx(0.18)
    assert Channel(0.5, years=7).final_flip_rate == 0.5
    assert Channel(years=7).with_final_flip_rate(0.01).final_flip_rate == pytest.approx(0.01, rel=1e-12)
    assert Channel(1e-20, years=30).final_flip_rate == pytest.approx(3e-19, rel=1e-12)


@pytest.mark.parametrize("rate", [-1e-9, 0.51, nan])
def test_flip_rates_outside_0_to_half(rate: float) -> None:
    with pytest.raises(UsageError, match="flip rate"):
        Channel(rate)


@pytest.mark.parametrize("years", [0, -3, inf, nan])
def test_no_period(years: float) -> None:
    with pytest.raises(UsageError, match="no period"):
        Channel(1e-3, years=years)


def test_other_nonsense() -> None:
    with pytest.raises(UsageError, match="lost share"):
        Channel(lost_share=1.5)
    with pytest.raises(UsageError, match="length"):
        Runs(((0, 1.0),))
    with pytest.raises(UsageError, match="negative"):
        Runs(((1, 1.0),), per_tb_year=-1)
    with pytest.raises(UsageError, match="cluster"):
        Runs(((1, 1.0),), cluster=0.5)
    with pytest.raises(UsageError, match="optical, tape, disk, flash"):
        medium_named("clay")


def test_every_figure_of_a_medium_has_a_source_and_a_mark() -> None:
    for medium in MEDIA.values():
        assert medium.figures and not Channel(medium.flip_rate, medium.runs).harmless
        for figure in medium.figures:
            assert figure.mark in ("published", "second-hand", "memory", "assumed")
            assert figure.source


def test_presets_carry_the_published_figures() -> None:
    # As their makers' data sheets and the standard say (quoted by others, but for the nearline disk).
    # LTO-9: 1 bit in 1e20; nearline disk: 1 sector in 1e15 bits; JESD218 client: 1e-15.
    assert MEDIA["tape"].runs[0].expected(TB, 1) == pytest.approx(8e-8)
    assert MEDIA["disk"].runs[0].expected(TB, 1) == pytest.approx(8e-3)
    assert MEDIA["flash"].runs[0].expected(TB, 1) == pytest.approx(8e-3)
