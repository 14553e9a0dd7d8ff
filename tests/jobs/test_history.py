"""history: trends that were put in come out, dates follow, and little is said where little is known."""

from __future__ import annotations

import json
import math
from collections.abc import Sequence
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from oakum import CannotCheck
from oakum.audits import Advice, Trend
from oakum.cli.running import run
from oakum.geometry import whole_depth
from oakum.jobs.history import history
from oakum.ledger import Ledger

STREAM = 10**12
START = datetime(2020, 6, 1, tzinfo=UTC)
YEAR = timedelta(days=365.25)


def row(flips: int = 0, bursts: int = 0, margin: float | None = 1.0, coverage: float = 1.0) -> dict[str, Any]:
    """A target as an audit would have entered it."""
    read = int(STREAM * coverage)
    return {
        "checked": "", "path": "/m/set", "identity": "", "outcome": "correctable", "reason": "",
        "code": "shelf", "coverage": coverage, "bits_read": 8 * read,
        "bits_flipped_scattered": flips, "margin": margin,
        "flip_exposure": 8.0 * read, "bursts": bursts, "burst_exposure": float(read),
        "burst_lengths": json.dumps([65536] * bursts), "findings": "[]", "stream_bytes": STREAM,
        "depth": whole_depth(STREAM, 223), "windows": 1,
    }  # fmt: skip


def book(path: Path, rows: Sequence[dict[str, Any]], medium: str = "M", every: timedelta = YEAR) -> Path:
    """A ledger with an audit each `every`."""
    with Ledger(path, write=True) as ledger:
        for number, entry in enumerate(rows):
            audit = ledger.begin(START + number * every, medium, [Path("/m/set")], 1.0, None, ())
            with ledger._transaction():
                ledger._insert("targets", {"audit": audit, **entry})
            ledger.finish(audit)
    return path


def trend(path: Path, years: float, **options: Any) -> Trend:
    (found,) = history(path, "M", now=START + years * YEAR, **options)
    return found


def test_growth_comes_out_as_it_was_put_in(tmp_path: Path) -> None:
    rng = np.random.default_rng(7)
    rows = [row(int(rng.poisson(8 * STREAM * 1e-11 * 1.5**year))) for year in range(6)]
    found = trend(book(tmp_path / "l", rows), 5)
    assert found.flips is not None and found.bursts is None
    assert found.flips.low < 1.5 < found.flips.high
    assert found.flips.factor == pytest.approx(1.5, abs=0.2)
    assert found.flips.now == pytest.approx(1e-11 * 1.5**5, rel=0.2)
    assert found.advice is Advice.AUDIT_SOONER
    assert "grows by" in found.reason


def test_the_year_follows_from_the_growth(tmp_path: Path) -> None:
    """Tenfold a year from 1e-9: `shelf` loses columns from 0.005 (one pass) to 0.012 (measured)."""
    rows = [row(round(8 * STREAM * 1e-9 * 10**year)) for year in range(4)]
    path = book(tmp_path / "l", rows)
    found = trend(path, 3)
    assert found.chance_now < 1e-6
    assert found.refresh_by is not None and 2025 <= found.refresh_by <= 2027
    assert found.advice is Advice.AUDIT_SOONER and str(found.refresh_by) in found.reason
    later = trend(path, found.refresh_by - 2020 - 0.5)
    assert later.advice in (Advice.REFRESH_SOON, Advice.REFRESH_NOW)
    assert trend(path, found.refresh_by - 2020 + 1).advice is Advice.REFRESH_NOW
    stricter = trend(path, 3, threshold=1e-12)
    assert stricter.refresh_by is not None and stricter.refresh_by <= found.refresh_by


def test_steady_rates_are_no_reason_to_act(tmp_path: Path) -> None:
    rng = np.random.default_rng(8)
    found = trend(book(tmp_path / "l", [row(int(n)) for n in rng.poisson(80, 6)]), 5)
    assert (found.advice, found.refresh_by) == (Advice.KEEP, None)
    assert found.flips is not None and found.flips.low < 1 < found.flips.high


def test_steady_rates_rarely_raise_an_alarm(tmp_path: Path) -> None:
    rng = np.random.default_rng(9)
    for number in range(60):
        book(tmp_path / "l", [row(int(n)) for n in rng.poisson(50, 5)], f"M{number}")
    found = history(tmp_path / "l", now=START + 4 * YEAR)
    assert len(found) == 60
    assert sum(t.advice is not Advice.KEEP for t in found) <= 5  # 2.5 % of 60 is 1.5; more than 5 below 1 %


@pytest.mark.parametrize(
    ("margin", "advice"),
    [(1.0, Advice.KEEP), (0.7, Advice.AUDIT_SOONER), (0.4, Advice.REFRESH_SOON), (0.1, Advice.REFRESH_NOW),
     (-0.1, Advice.REFRESH_NOW)],
)  # fmt: skip
def test_the_margin_decides_too(tmp_path: Path, margin: float, advice: Advice) -> None:
    found = trend(book(tmp_path / "l", [row(margin=margin)] * 3), 2)
    assert found.advice is advice
    assert found.reason.endswith(".") and found.reason.count(".") == 1


def test_a_falling_margin_gives_the_year_in_which_it_ends(tmp_path: Path) -> None:
    found = trend(book(tmp_path / "l", [row(margin=m) for m in (1.0, 0.95, 0.9)]), 2)
    assert found.margin_a_year == pytest.approx(-0.05)
    assert found.refresh_by == 2040  # 0.9 is left in 2022, and 0.05 goes a year


def test_what_is_lost_must_be_acted_on_now(tmp_path: Path) -> None:
    lost = row(margin=None) | {"outcome": "uncorrectable"}
    found = trend(book(tmp_path / "l", [lost]), 0)
    assert found.advice is Advice.REFRESH_NOW and "beyond correction" in found.reason


@pytest.mark.parametrize("count", [1, 2])
def test_few_audits_fix_no_trend(tmp_path: Path, count: int) -> None:
    found = trend(book(tmp_path / "l", [row(5), row(5000)][:count]), 1)
    assert (found.flips, found.refresh_by, found.margin_a_year) == (None, None, None)
    assert any("before 3 audits" in text for text in found.conclusions)
    assert len(found.points) == count


def test_audits_within_a_month_fix_no_trend(tmp_path: Path) -> None:
    found = trend(book(tmp_path / "l", [row(5), row(50), row(500)], every=timedelta(days=1)), 0.1)
    assert (found.flips, found.refresh_by) == (None, None)
    assert any("within a month" in text for text in found.conclusions)


def test_nothing_found_is_a_limit_and_not_zero(tmp_path: Path) -> None:
    found = trend(book(tmp_path / "l", [row()] * 4), 3)
    # 2.995732 = -ln 0.05 over the exposure of all audits: the one-sided 95 % limit of a Poisson law with no
    # events (Garwood 1936; computed).
    limit = 2.995732 / (4 * 8 * STREAM)
    assert any(f"{limit:.2g}" in text for text in found.conclusions)
    assert found.chance_now > 0 or math.isclose(found.chance_now, 0, abs_tol=1e-15)
    assert found.advice is Advice.KEEP


def test_samples_count_for_what_they_read(tmp_path: Path) -> None:
    """A tenth of the content with a tenth of the flips is the same rate, and said to be a sample."""
    found = trend(book(tmp_path / "l", [row(800), row(80, coverage=0.1), row(800)]), 2)
    assert found.flips is not None and found.flips.factor == pytest.approx(1, abs=0.1)
    assert found.points[1].coverage == pytest.approx(0.1)
    assert any("samples" in text for text in found.conclusions)


def test_media_are_told_apart(tmp_path: Path) -> None:
    book(tmp_path / "l", [row(5)], "A")
    book(tmp_path / "l", [row(6)], "B")
    book(tmp_path / "l", [row(7)], "")
    assert [t.medium for t in history(tmp_path / "l")] == ["A", "B", "/m/set"]
    assert [t.medium for t in history(tmp_path / "l", "B")] == ["B"]


def test_nothing_to_tell(tmp_path: Path) -> None:
    book(tmp_path / "l", [row()])
    with pytest.raises(CannotCheck, match="no finished check of the medium N"):
        history(tmp_path / "l", "N")
    with pytest.raises(CannotCheck, match="there is no ledger"):
        history(tmp_path / "none")


def test_the_command(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = str(book(tmp_path / "l", [row(900), row(1100, 2), row(1500, 1, 0.9)]))
    assert run(["history", "--ledger", path]) == 0
    out = capsys.readouterr().out
    assert out.startswith("M: ") and "2021-" in out and "terabyte" in out
    assert run(["history", "--ledger", path, "--json"]) == 0
    (medium,) = json.loads(capsys.readouterr().out)["media"]
    assert [a["flip_rate"]["count"] for a in medium["audits"]] == [900, 1100, 1500]
    for form, start in (("csv", "begun,"), ("jsonl", '{"begun"'), ("premis", "<?xml")):
        assert run(["history", "--ledger", path, "--export", form]) == 0
        assert capsys.readouterr().out.startswith(start)
    assert run(["history", "--ledger", path, "--export", "csv", "--json"]) == 2
    assert run(["history", "--ledger", str(tmp_path / "none")]) == 30
