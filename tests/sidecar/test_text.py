"""The page of plain words: it fits, can be read, and says the right figures."""

from __future__ import annotations

import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from oakum.algebra.naming import NAMED, resolve_code
from oakum.geometry import Geometry, whole_depth, window_depth
from oakum.sidecar.bootstrap import MARKER, UNKNOWN_LENGTH, Bootstrap, CodeParameters
from oakum.sidecar.layout import TEXT_BYTES, Layout
from oakum.sidecar.text import page

CODES = [*NAMED, "RS(255,207)+EB(128,104)", "RS(2,1)"]


def made(code: str, start: int, length: int, table: int, depth: int) -> tuple[Bootstrap, Layout]:
    c = resolve_code(code)
    g = Geometry(c.outer.n, c.outer.k, c.inner.m, c.inner.p, length, depth)
    layout = Layout(g, table)
    record = Bootstrap(
        CodeParameters.of(c),
        layout.stretches,
        5,
        start,
        length,
        depth,
        depth,
        UNKNOWN_LENGTH,
        0,
        table,
        0,
        1,
        0,
    )
    return record, layout


@given(
    st.sampled_from(CODES),
    st.one_of(st.integers(0, 1 << 60), st.just(1 << 60)),
    st.one_of(st.integers(0, 10_000_000), st.integers(0, 1 << 59)),
    st.integers(0, 1 << 40),
)
def test_it_fits_whatever_the_figures(code: str, start: int, length: int, table: int) -> None:
    k = resolve_code(code).outer.k
    text = page(*made(code, start, length, table, whole_depth(length, k)))
    assert len(text) == TEXT_BYTES
    assert text.endswith(b"\n")
    assert "Nothing else is proof.\n" in text.decode("ascii")
    lines = text.rstrip().split(b"\n")
    assert len(lines) < 60
    assert not set(text) - set(b"\n") - set(range(32, 127))


@pytest.mark.parametrize("code", CODES)
def test_exact_figures(code: str) -> None:
    """Each figure is computed here from its definition and looked for in its sentence."""
    c = resolve_code(code)
    length, start = min(3_000_000, c.outer.k << 20), 7_777_777
    depth = window_depth(length, c.outer.k, 1 << 20)
    record, layout = made(code, start, length, 431, depth)
    text = " ".join(page(record, layout).decode("ascii").split())
    n, k, r = c.outer.n, c.outer.k, c.outer.n - c.outer.k
    cells = sum(-(-max(0, min(depth, length - i * depth)) // 4096) for i in range(k))
    for sentence in (
        "OAKUM SIDECAR, format version 1:",
        f"is for its bytes {start} up to {start + length} (window {record.window};",
        f"cut into {k} data strips of {depth} bytes",
        f"{r} parity strips as long follow",
        f"all {n} strips are one codeword of the Reed-Solomon code RS({n},{k}) over GF(256)",
        "field polynomial 0x11d",
        f"for j = 0 to {r - 1}, a = x, s = 1, f = 0; strip i has the locator a^(s*({n - 1}-i))",
        f"{layout.stretches} stretches, {layout.prefix + layout.piece} bytes apart",
        "the marker " + MARKER.hex(" ").upper(),
        f"the parity strips one after the other ({r * depth} bytes)",
        f"each stretch has {240 // layout.stretches} rows of every frame",
        "1 member table (431 bytes)",
    ):
        assert sentence in text, sentence
    if c.inner.p:
        m, p = c.inner.m, c.inner.p
        assert f"begin at byte i mod {m} and wrap round" in text
        columns = "".join(f"{v:0{2 * p}x}" for v in c.inner.check_columns[:m].ravel().tolist())
        assert columns in text.replace(" ", "")
        assert f"A word is {m} bytes" in text
        assert f"the XOR of these {2 * p}-digit numbers" in text
        assert f"the binary code [{8 * (m + p)},{8 * m},{c.inner.d}]" in text
        found = re.search(r"inner parity of the data cells in the order of the stream \((\d+) bytes\)", text)
        assert found is not None
        assert abs(int(found[1]) - cells * -(-4096 // m) * p) <= k * -(-4096 // m) * p
    else:
        assert "There is no inner code." in text
