"""rehearse: what it says about damaged copies is what verify and repair do with such copies on the medium."""

from dataclasses import replace
from math import exp
from pathlib import Path

import numpy as np
import pytest
from scipy import stats
from support import content, flipped_bits, plant, rewrite, snapshot, with_flips

from oakum.channel import draw
from oakum.errors import CannotCheck, UsageError
from oakum.jobs.damage import Wishes
from oakum.jobs.protect import protect
from oakum.jobs.rehearse import rehearse
from oakum.jobs.repair import repair
from oakum.jobs.verify import verify
from oakum.results import Outcome

FLIPS = Wishes(flip_rate=2e-3)


@pytest.fixture
def target(tmp_path: Path) -> Path:
    """Two files and a folder, 300 kB, one of them protected as a whole."""
    folder = plant(tmp_path / "set", {"a": content(200_000, 1), "b/c": content(100_000, 2), "b/d": b""})
    protect([folder])
    return folder


def test_everything_comes_back_and_nothing_is_written(target: Path) -> None:
    before = snapshot(target.parent)
    result = rehearse(target, FLIPS, trials=3)
    assert result.survived == 3 and len(result.trials) == 3
    assert all(t.sidecar_survived and t.blocks_lost == 0 and t.blocks_damaged for t in result.trials)
    assert result.interval == pytest.approx((0.025 ** (1 / 3), 1.0))
    assert snapshot(target.parent) == before


def test_the_same_seed_repeats_the_run(target: Path) -> None:
    one = rehearse(target, FLIPS, trials=2, seed=5)
    assert one.trials == rehearse(target, FLIPS, trials=2, seed=5, jobs=1).trials
    assert one.trials != rehearse(target, FLIPS, trials=2, seed=6).trials


def damaged_copy(target: Path, wishes: Wishes, seed: tuple[int, ...]) -> int:
    """Do to the medium what trial `seed` does in memory; returns the flips in the files."""
    sidecar = target.with_name(target.name + ".oakum")
    channel, _ = wishes.channel()
    files = [target / "a", target / "b" / "c"]
    data = np.frombuffer(b"".join(f.read_bytes() for f in files), np.uint8).copy()
    original = data.tobytes()
    records = np.frombuffer(sidecar.read_bytes(), np.uint8).copy()
    on_data, on_sidecar = draw(channel, len(data), len(records), seed)
    assert not (on_data.missing or on_sidecar.missing)
    on_data.strike(0, data)
    on_sidecar.strike(0, records)
    place = 0
    for file in files:
        size = file.stat().st_size
        rewrite(file, data[place : place + size].tobytes())
        place += size
    rewrite(sidecar, records.tobytes())
    return flipped_bits(original, data.tobytes())


@pytest.mark.parametrize(
    "wishes",
    [
        FLIPS,
        Wishes(burst_length=((20_000, 1.0),)),
        Wishes(flip_rate=1e-4, bursts=5, burst_length=((900, 1.0),)),
    ],
    ids=["flips", "burst", "both"],
)
def test_a_trial_is_what_verify_and_repair_do_on_the_medium(target: Path, wishes: Wishes) -> None:
    (trial,) = rehearse(target, wishes, trials=1, seed=3).trials
    whole = snapshot(target)
    flips = damaged_copy(target, wishes, (3, 0))
    checked = verify(target)
    assert checked.outcome is Outcome.CORRECTABLE
    assert checked.totals.bits_flipped == trial.bits_corrected == flips
    assert checked.weakest == trial.margin
    assert len(checked.blocks) == trial.blocks_damaged
    repair(target, output=target.parent / "mended")
    assert snapshot(target.parent / "mended" / "set") == whole


def test_loss_on_the_medium_is_loss_in_the_rehearsal(target: Path) -> None:
    wishes = Wishes(flip_rate=0.03)
    (trial,) = rehearse(target, wishes, trials=1, seed=3).trials
    assert not trial.survived and trial.margin is None and trial.blocks_lost
    damaged_copy(target, wishes, (3, 0))
    checked = verify(target)
    assert checked.outcome is Outcome.UNCORRECTABLE
    assert checked.totals.blocks_uncorrectable == trial.blocks_lost


def test_unreadable_sectors_are_erasures(target: Path) -> None:
    result = rehearse(target, Wishes(sectors_per_tb=2e7, sector_size=512), trials=3)
    assert result.survived == 3
    assert sum(t.bytes_erased for t in result.trials) > 0
    assert all(t.bits_corrected == 0 for t in result.trials)


def test_a_lost_share_within_the_parity_comes_back(target: Path) -> None:
    result = rehearse(target, Wishes(lost_share=0.12), trials=2)
    assert result.survived == 2
    assert [t.bytes_erased for t in result.trials] == [36_000] * 2
    assert result.predicted is not None and exp(result.predicted.stream[1]) == 0
    beyond = rehearse(target, Wishes(lost_share=0.2), trials=2)
    assert beyond.survived == 0 and exp(beyond.predicted.stream[0]) == 1


def test_windows(tmp_path: Path) -> None:
    path = tmp_path / "x"
    path.write_bytes(content(223 * 4096 * 3))
    protect([path], depth=4096)
    result = rehearse(path, Wishes(flip_rate=1e-4, burst_length=((100_000, 1.0),)), trials=2)
    assert result.survived == 2 and result.blocks == 3


def test_a_short_last_window_holds_less(tmp_path: Path) -> None:
    """Its depth is less, and so is the burst that it takes: forecast and rehearsal know of it."""
    path = tmp_path / "x"
    path.write_bytes(content(3 * 223 * 4096 + 150_000))
    protect([path], depth=4096)
    result = rehearse(path, Wishes(burst_length=((100_000, 1.0),)), trials=30)
    assert 0 < result.survived < 30
    assert result.predicted is not None
    low, high = stats.binom.interval(0.999, 30, exp(result.predicted.column))
    assert low <= 30 - result.survived <= high


def test_a_code_without_words(tmp_path: Path) -> None:
    path = tmp_path / "x"
    path.write_bytes(content(200_000))
    protect([path], code="plain")
    result = rehearse(path, Wishes(flip_rate=1e-4), trials=2)
    assert result.survived == 2 and all(t.bits_corrected for t in result.trials)


def test_lost_sectors_as_predicted(tmp_path: Path) -> None:
    """A short code, sectors as long as a strip: survival is a binomial, within its 99.9 % range."""
    path = tmp_path / "x"
    path.write_bytes(content(55 * 1216))
    protect([path], code="RS(63,55)")
    wishes = Wishes(sector_size=1216, sectors_per_tb=1.4e8, spare_sidecar=True)
    result = rehearse(path, wishes, trials=60, seed=9)
    loss = exp(result.predicted.column)
    assert 0.3 < loss < 0.7
    low, high = stats.binom.interval(0.999, 60, loss)
    assert low <= 60 - result.survived <= high


def test_a_sidecar_beyond_reading_loses_everything(target: Path) -> None:
    result = rehearse(target, Wishes(flip_rate=0.4), trials=1)
    (trial,) = result.trials
    assert not trial.survived and not trial.sidecar_survived and trial.reason


def test_a_spared_sidecar_stays_whole(target: Path) -> None:
    wishes = replace(FLIPS, spare_sidecar=True)
    data = rehearse(target, wishes, trials=1).trials[0]
    both = rehearse(target, FLIPS, trials=1).trials[0]
    assert data.bits_corrected == both.bits_corrected
    assert data.margin >= both.margin


def test_the_limit_of_a_burst_is_what_the_parity_holds(target: Path) -> None:
    result = rehearse(target, Wishes(burst_length=((4096, 1.0),)), find_limit=True)
    limit = result.limit
    assert limit is not None and limit.survived is not None and limit.lost is not None
    depth = -(-300_000 // 223 // 64) * 64 + 64
    # Between the guarantee and one symbol more in every column; a burst may hang over the end of the data.
    assert 0.85 * 32 * (depth - 64) < limit.lost < 2 * 33 * depth
    assert limit.survived < limit.lost <= 1.02 * limit.survived + 2
    assert not result.trials and result.interval is None


def test_the_limit_of_flips_is_near_the_measured_threshold(tmp_path: Path) -> None:
    path = tmp_path / "x"
    path.write_bytes(content(55 * 1216))
    protect([path], code="RS(63,55)+EH(128,120)")
    result = rehearse(path, Wishes(), find_limit=True)
    limit = result.limit
    assert limit is not None and limit.survived is not None and limit.lost is not None
    # Measured: hardly any block is lost at 0.0078, nearly every one at 0.0115 (benchmarks/rehearsals.json).
    assert 0.007 < limit.survived < limit.lost < 0.0125


def test_a_target_that_is_damaged_already(target: Path) -> None:
    rewrite(target / "a", with_flips((target / "a").read_bytes(), 3))
    with pytest.raises(CannotCheck, match="damaged or changed already"):
        rehearse(target, FLIPS, trials=1)


def test_wishes_that_cannot_be(target: Path) -> None:
    with pytest.raises(UsageError, match="trials"):
        rehearse(target, FLIPS, trials=0)
    with pytest.raises(UsageError, match="nothing is said"):
        rehearse(target, Wishes())
    with pytest.raises(CannotCheck, match="sidecar"):
        rehearse(target / "a", FLIPS)


def test_an_empty_set_has_nothing_to_rehearse(tmp_path: Path) -> None:
    folder = plant(tmp_path / "none", {"empty": b""})
    protect([folder])
    with pytest.raises(CannotCheck, match="no bytes"):
        rehearse(folder, FLIPS)
