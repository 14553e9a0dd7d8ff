"""Numbers as people read them."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from oakum.report.units import counted, duration, exact_size, percent, size, speed, took


@pytest.mark.parametrize(
    ("nbytes", "shown"),
    [
        (0, "0 B"),
        (999, "999 B"),
        (1000, "1.00 kB"),
        (999_499, "999 kB"),
        (999_500, "1.00 MB"),
        (9_994, "9.99 kB"),
        (9_995, "10.0 kB"),
        (99_950, "100 kB"),
        (4_096_000_000, "4.10 GB"),
        (10**18, "1.00 EB"),
    ],
)
def test_size(nbytes: int, shown: str) -> None:
    assert size(nbytes) == shown


@given(st.integers(1, 10**20))
def test_size_is_right_to_three_digits(nbytes: int) -> None:
    number, unit = size(nbytes).split()
    factor = {"B": 1, "kB": 1e3, "MB": 1e6, "GB": 1e9, "TB": 1e12, "PB": 1e15, "EB": 1e18}[unit]
    assert float(number) * factor == pytest.approx(nbytes, rel=0.0051)


@given(st.floats(0, 1, exclude_min=True, exclude_max=True))
def test_percent_never_claims_all_or_nothing(fraction: float) -> None:
    assert percent(fraction) not in ("0 %", "100 %")
    assert percent(fraction, 1) not in ("0.0 %", "100.0 %")


def test_percent() -> None:
    assert percent(0.61) == "61 %"
    assert percent(0.2197, 1) == "22.0 %"
    assert percent(0.9999) == "99 %"
    assert percent(0.0001) == "under 1 %"
    assert percent(0) == "0 %"
    assert percent(1) == "100 %"


def test_duration_and_speed() -> None:
    shown = [duration(s) for s in (0.04, 9.9, 9.96, 59.4, 59.6, 3599.4, 3599.6, 8040)]
    assert shown == ["0.0 s", "9.9 s", "10 s", "59 s", "1 min 0 s", "59 min 59 s", "1 h 0 min", "2 h 14 min"]
    assert speed(10_000_000, 2) == "5.00 MB/s"
    assert speed(0, 2) == speed(5, 0) == ""
    assert took(640_000_000, 2) == "It took 2.0 s, 320 MB/s."
    assert took(1_000, 2) == "It took 2.0 s."


def test_counts() -> None:
    assert counted(1, "byte") == "1 byte"
    assert counted(1_024, "byte") == "1,024 bytes"
    assert counted(2, "member is", "members are") == "2 members are"
    assert exact_size(999) == "999 bytes"
    assert exact_size(4_096) == "4.10 kB (4,096 bytes)"
