"""plan: the frontier, the choice and its bounds, and wishes that cannot be."""

import subprocess
import sys
from dataclasses import replace
from math import exp, log
from pathlib import Path

import pytest
from support import content, plant

from oakum.errors import CannotCheck, UsageError
from oakum.jobs.damage import Wishes
from oakum.jobs.plan import plan

TEN_TB = 10**13
FLIPS = Wishes(flip_rate=1e-4)


def test_the_frontier_trades_overhead_for_loss() -> None:
    result = plan(None, FLIPS, size=TEN_TB)
    assert len(result.frontier) > 3
    for cheaper, dearer in zip(result.frontier, result.frontier[1:], strict=False):
        assert cheaper.code.overhead < dearer.code.overhead
        assert cheaper.period.at_most > dearer.period.at_most


def test_the_choice_is_the_cheapest_that_reaches_the_target() -> None:
    result = plan(None, FLIPS, size=TEN_TB, target=1e-12)
    assert result.reached
    assert result.recommended.period.at_most <= log(1e-12)
    for candidate in result.frontier:
        if candidate.code.overhead < result.recommended.code.overhead:
            assert candidate.period.at_most > log(1e-12)
    dearer = plan(None, FLIPS, size=TEN_TB, target=1e-60)
    assert dearer.recommended.code.overhead > result.recommended.code.overhead


def test_a_budget_bounds_the_overhead() -> None:
    result = plan(None, Wishes(flip_rate=5e-3), size=TEN_TB, overhead=0.14)
    assert not result.reached
    assert all(c.code.overhead <= 0.14 for c in result.frontier)
    assert result.recommended == result.frontier[-1]


@pytest.mark.parametrize("overhead", [0.01, 0.0, -1.0])
def test_impossible_budgets(overhead: float) -> None:
    with pytest.raises(UsageError, match="overhead"):
        plan(None, FLIPS, size=TEN_TB, overhead=overhead)


def test_named_codes_go_by_their_names_and_the_command_can_be_run() -> None:
    result = plan(Path("/tmp"), replace(FLIPS, flip_rate=3e-4), size=TEN_TB, target=1e-40)
    assert "shelf" in [c.code.name for c in result.frontier]
    assert result.command.endswith(" /tmp")
    free = plan(None, Wishes(medium="tape"), size=TEN_TB)
    assert free.command == "oakum protect --code 'RS(255,247)' PATH"


def test_guarantees_stand_beside_the_chances() -> None:
    result = plan(None, replace(FLIPS, flip_rate=3e-4), size=TEN_TB, target=1e-40)
    shelf = next(c for c in result.frontier if c.code.name == "shelf")
    assert shelf.code.guaranteed_flips == 65
    assert shelf.guaranteed_burst == 32 * shelf.depth - 2 * 4096
    assert shelf.depth * 223 >= TEN_TB


def test_a_repair_every_year_is_better_than_none() -> None:
    result = plan(None, replace(FLIPS, years=30.0), size=TEN_TB)
    for candidate in result.frontier:
        assert candidate.year.at_most <= candidate.renewed <= candidate.period.at_most
    best = result.recommended
    assert exp(best.renewed) == pytest.approx(30 * exp(best.year.at_most), rel=1e-6)
    assert result.flip_rate == pytest.approx(30e-4, rel=0.01)


def test_one_year_is_the_period_itself() -> None:
    result = plan(None, FLIPS, size=TEN_TB)
    assert result.recommended.year == result.recommended.period


def test_a_lower_share_of_bursts_needs_less() -> None:
    many = plan(None, Wishes(bursts_per_tb=2e5), size=TEN_TB)
    few = plan(None, Wishes(bursts_per_tb=2e2), size=TEN_TB)
    assert few.recommended.code.overhead < many.recommended.code.overhead


def test_windows_cost_a_long_burst_more() -> None:
    burst = Wishes(burst_length=((40 << 20, 1.0),), bursts_per_tb=1.0)
    whole = plan(None, burst, size=TEN_TB)
    windows = plan(None, burst, size=TEN_TB, depth=1 << 20)
    assert whole.recommended.code.overhead < windows.recommended.code.overhead
    assert "--depth 1048576" in windows.command


def test_the_size_of_a_folder_is_counted(tmp_path: Path) -> None:
    plant(tmp_path / "plates", {"a": content(1000), "b/c": content(500)})
    assert plan(tmp_path / "plates", FLIPS).size == 1500


def test_paths_that_say_nothing(tmp_path: Path) -> None:
    with pytest.raises(CannotCheck, match="--size"):
        plan(tmp_path / "none", FLIPS)
    with pytest.raises(UsageError, match="a path or --size"):
        plan(None, FLIPS)
    (tmp_path / "empty").write_bytes(b"")
    with pytest.raises(UsageError, match="at least 1 byte"):
        plan(tmp_path / "empty", FLIPS)


@pytest.mark.parametrize(
    ("wishes", "sentence"),
    [
        (Wishes(), "nothing is said about the damage"),
        (Wishes(years=30.0), "a period needs a rate"),
        (Wishes(flip_rate=0.6), "0 to 0.5"),
        (Wishes(flip_rate=-1e-3), "0 to 0.5"),
        (Wishes(flip_rate=1e-3, years=-1.0), "no period"),
        (Wishes(medium="papyrus"), "no medium is called"),
        (Wishes(bursts=2, bursts_per_tb=1.0), "exclude each other"),
        (Wishes(sector_size=512), "need a rate"),
        (Wishes(bursts_per_tb=-1.0), "negative"),
        (Wishes(lost_share=2.0), "lost share"),
    ],
)
def test_wishes_that_cannot_be(wishes: Wishes, sentence: str) -> None:
    with pytest.raises(UsageError, match=sentence) as caught:
        plan(None, wishes, size=TEN_TB)
    assert "\n" not in str(caught.value) and not str(caught.value).endswith(".")


@pytest.mark.parametrize("target", [0.0, 1.0, -1.0])
def test_targets_that_are_none(target: float) -> None:
    with pytest.raises(UsageError, match="no target"):
        plan(None, FLIPS, size=TEN_TB, target=target)


def test_presets_can_be_overridden_figure_by_figure() -> None:
    preset, _ = Wishes(medium="disk").channel()
    channel, said = Wishes(medium="disk", sectors_per_tb=5.0, flip_rate=1e-9).channel()
    sectors = next(run for run in channel.runs if not run.readable)
    assert sectors.per_tb_year == 5.0 and sectors.cluster == 2 and channel.flip_rate == 1e-9
    assert [r for r in channel.runs if r.readable] == [r for r in preset.runs if r.readable]
    assert {"given", "published", "second-hand", "assumed"} == {figure.mark for figure in said}
    longer, _ = Wishes(medium="disk", burst_length=((9, 1.0),)).channel()
    assert next(run for run in longer.runs if run.readable).per_tb_year == 1e-3


def test_a_burst_length_alone_means_one_burst() -> None:
    channel, _ = Wishes(burst_length=((1 << 20, 1.0),)).channel()
    assert channel.runs[0].count == 1


def test_curves_are_of_the_codes_shown_and_rise() -> None:
    result = plan(None, FLIPS, size=TEN_TB)
    names = [c.code.name for c in result.frontier]
    assert all(curve.label in names for curve in result.curves)
    assert result.recommended.code.name in {curve.label for curve in result.curves}
    for curve in result.curves:
        assert list(curve.rates) == sorted(curve.rates)
        assert all(a <= b for a, b in zip(curve.losses, curve.losses[1:], strict=False))


def test_planning_imports_neither_scipy_nor_the_compiler() -> None:
    code = (
        "import sys; from oakum.jobs.plan import plan; from oakum.jobs.damage import Wishes;"
        "plan(None, Wishes(flip_rate=1e-4), size=10**9);"
        "print([m for m in ('scipy', 'numba', 'galois') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
