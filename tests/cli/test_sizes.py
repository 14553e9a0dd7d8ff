"""Sizes on the command line, by the convention of GNU coreutils (manual, "Block size"; memory)."""

import contextlib

import pytest
import typer
from hypothesis import given
from hypothesis import strategies as st

from oakum.cli.options import parse_size


@pytest.mark.parametrize(
    ("text", "nbytes"),
    [
        ("0", 0),
        ("4096", 4096),
        ("4096B", 4096),
        ("1K", 1024),
        ("1k", 1024),
        ("1kB", 1000),
        ("1MB", 10**6),
        ("1M", 2**20),
        ("512MiB", 2**29),
        ("512 MiB", 2**29),
        ("2GiB", 2**31),
        ("1T", 2**40),
        ("1TB", 10**12),
    ],
)
def test_sizes(text: str, nbytes: int) -> None:
    assert parse_size(text) == nbytes


@pytest.mark.parametrize(
    "text", ["", "M", "-1", "1.5M", "1Q", "1iB", "1 2", "0x10", "1_000", "\u0661", "99999999T"]
)
def test_what_is_no_size(text: str) -> None:
    with pytest.raises(typer.BadParameter, match=r"size|large"):
        parse_size(text)


@given(st.text(max_size=8))
def test_any_text_is_a_size_or_refused(text: str) -> None:
    with contextlib.suppress(typer.BadParameter):
        assert 0 <= parse_size(text) <= 1 << 62
