"""Charts as SVG for pages, drawn by matplotlib (the optional part `oakum[report]`), in one hue.

Colours are put in as place-holders and become CSS variables, so that one picture suits light, dark and paper.
"""

from __future__ import annotations

import io
import math
import re
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from oakum.audits import Distribution, Point, Rate

if TYPE_CHECKING:
    from matplotlib.axes import Axes

INK, HUE, SOFT = "#010203", "#040506", "#070809"
_VARIABLES = {INK: "var(--ink)", HUE: "var(--hue)", SOFT: "var(--soft)"}
WIDTH = 5.2
"""Inches of 72 points, which a narrow telephone shows at about its own size."""

_SETTINGS: dict[str, Any] = {
    "svg.fonttype": "none", "font.size": 11, "text.color": INK, "axes.labelcolor": INK,
    "axes.edgecolor": INK, "xtick.color": INK, "ytick.color": INK, "axes.linewidth": 0.8,
    "axes.spines.top": False, "axes.spines.right": False, "axes.axisbelow": True,
}  # fmt: skip


class Chart:
    """One picture: `with Chart(...) as axes: draw`, then `svg`."""

    def __init__(self, name: str, description: str, height: float = 2.6) -> None:
        self._name, self._description, self._height = name, description, height
        self.svg = ""

    def __enter__(self) -> Axes:
        import matplotlib
        from matplotlib.figure import Figure

        self._context = matplotlib.rc_context(_SETTINGS | {"svg.hashsalt": self._name})
        self._context.__enter__()
        self._figure = Figure(figsize=(WIDTH, self._height), layout="constrained")
        return self._figure.add_subplot()

    def __exit__(self, *error: object) -> None:
        if error[0] is None:
            out = io.StringIO()
            self._figure.savefig(
                out, format="svg", transparent=True, metadata={"Date": None, "Creator": None}
            )
            self.svg = _inline(out.getvalue(), self._name, self._description)
        self._context.__exit__(None, None, None)


def _inline(svg: str, name: str, description: str) -> str:
    """The picture without its prologue, its colours as variables, its names its own on the page."""
    svg = svg[svg.index("<svg") :]
    svg = re.sub(r"<metadata>.*?</metadata>", "", svg, flags=re.DOTALL)
    svg = re.sub(r'(\bid="|url\(#|href="#)', rf"\g<1>{name}-", svg)
    for colour, variable in _VARIABLES.items():
        svg = svg.replace(colour, variable)
    svg = re.sub(
        r'<svg [^>]*?(viewBox="[^"]*")[^>]*>',
        rf'<svg \1 role="img" aria-label="{description}">',
        svg,
        count=1,
    )
    return svg.replace(' xlink:href="', ' href="')


def margins(name: str, damaged: Sequence[float], clean: int) -> str:
    """The share of blocks that keep at most so much of their margin."""
    chart = Chart(name, "Cumulative distribution of the margins of all blocks")
    with chart as axes:
        total = len(damaged) + clean
        steps = sorted(max(0.0, m) * 100 for m in damaged)
        x = [0.0, *steps, 100.0]
        y = [0.0, *((i + 1) * 100 / total for i in range(len(steps))), 100.0]
        axes.step(x, y, where="post", color=HUE, linewidth=1.6)
        axes.fill_between(x, y, step="post", color=HUE, alpha=0.15, linewidth=0)
        axes.set(xlim=(0, 100), ylim=(0, 100), xlabel="margin left, % of r", ylabel="% of blocks")
    return chart.svg


def along(name: str, counts: Sequence[int]) -> str:
    """Where flips lie along the stream: the darker, the more of them (by their logarithm)."""
    chart = Chart(name, "Where the flips lie along the protected stream", height=1.15)
    with chart as axes:
        most = max(counts)
        for i, count in enumerate(counts):
            if count:
                alpha = 0.25 + 0.75 * math.log1p(count) / math.log1p(most)
                axes.axvspan(
                    i * 100 / len(counts), (i + 1) * 100 / len(counts), color=HUE, alpha=alpha, linewidth=0
                )
        axes.set(xlim=(0, 100), xlabel="place in the stream, %", yticks=[])
        axes.spines[["top", "right"]].set_visible(True)
    return chart.svg


def burst_lengths(name: str, lengths: Sequence[int]) -> str:
    """How long the bursts are, in powers of two."""
    from matplotlib.ticker import MaxNLocator

    chart = Chart(name, "Lengths of the bursts")
    with chart as axes:
        powers = [n.bit_length() - 1 for n in lengths]
        bins = range(min(powers), max(powers) + 1)
        axes.bar(range(len(bins)), [powers.count(b) for b in bins], color=HUE, width=0.8)
        shown = range(0, len(bins), max(1, len(bins) // 6))
        axes.set_xticks(list(shown), [_bytes(1 << bins[i]) for i in shown])
        axes.set(xlabel="length in bytes, from", ylabel="bursts")
        axes.yaxis.set_major_locator(MaxNLocator(integer=True))
    return chart.svg


def _bytes(value: int) -> str:
    for power, prefix in ((30, "Gi"), (20, "Mi"), (10, "Ki")):
        if value >= 1 << power:
            return f"{value >> power} {prefix}"
    return str(value)


def positions(name: str, distribution: Distribution) -> str:
    """Flips by bit position in words of 64: up those from 0 to 1, down those from 1 to 0."""
    chart = Chart(name, "Flips by bit position")
    with chart as axes:
        up, down = distribution.positions
        axes.bar(range(64), up, color=HUE, width=0.8)
        axes.bar(range(64), [-n for n in down], color=HUE, alpha=0.55, width=0.8)
        axes.axhline(0, color=INK, linewidth=0.8)
        axes.set(xlim=(-1, 64), xlabel="bit of each 64", ylabel="1 to 0  |  0 to 1")
        axes.set_xticks(range(0, 65, 8))
        axes.yaxis.set_major_formatter(lambda value, _: f"{abs(value):g}")
    return chart.svg


def trend(name: str, points: Sequence[Point]) -> str:
    """The flip rate over the audits with exact intervals; an arrow down where only a limit is known."""
    chart = Chart(name, "Flip rate over the audits")
    with chart as axes:
        known = [(p.when, p.flips) for p in points if p.flips.exposure]
        for when, rate in known:
            x: Any = when
            axes.plot([x, x], [max(rate.low, _floor(known)), rate.high], color=HUE, linewidth=1.4)
            if rate.count:
                axes.plot([x], [rate.value], "o", color=HUE, markersize=5)
            else:
                axes.plot([x], [_floor(known)], "v", color=HUE, markersize=6)
        axes.set(yscale="log", ylabel="scattered flips a bit")
        axes.tick_params(axis="x", rotation=30)
    return chart.svg


def margin_trend(name: str, points: Sequence[Point]) -> str:
    """The lowest margin of each audit."""
    chart = Chart(name, "Lowest margin over the audits")
    with chart as axes:
        known = [(p.when, 100 * max(0.0, p.margin)) for p in points if p.margin is not None]
        times: list[Any] = [when for when, _ in known]
        axes.plot(times, [margin for _, margin in known], "o-", color=HUE, markersize=5, linewidth=1.2)
        axes.set(ylim=(0, 103), ylabel="lowest margin, % of r")
        axes.tick_params(axis="x", rotation=30)
    return chart.svg


def _floor(known: Sequence[tuple[Any, Rate]]) -> float:
    """Where the bottom of the picture is: below all that is known."""
    return min(r.low if r.low else r.high / 10 for _, r in known)
