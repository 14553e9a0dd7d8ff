"""The chart of loss against flip rate as a scalable picture, with nothing but the standard library."""

from __future__ import annotations

from collections.abc import Sequence
from xml.sax.saxutils import escape

from oakum.report.chart import Scales, points
from oakum.results import Curve

_W, _H = 820, 440
_LEFT, _RIGHT, _TOP, _BOTTOM = 76, 230, 28, 56
_DASHES = ("", "9 4", "3 3", "12 4 3 4", "1 4", "6 6", "2 6", "14 3")
_STYLE = (
    "text{font:13px sans-serif;fill:#222}.axis,.grid,.mark{stroke:#222;fill:none}.grid{stroke-opacity:.12}"
    ".mark{stroke-dasharray:1 4}.curve{stroke:#1d6f8a;stroke-width:2;fill:none}"
    "@media(prefers-color-scheme:dark){text{fill:#eee}.axis,.grid,.mark{stroke:#eee}.curve{stroke:#7cc4dc}}"
)


def chart_svg(curves: Sequence[Curve], marked_rate: float, title: str) -> str:
    """An SVG document: curves in one hue, told apart by their dashes and the names at their ends."""
    scales = Scales.of(curves)
    parts = [
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {_W} {_H}" role="img">',
        f"<title>{escape(title)}</title><style>{_STYLE}</style>",
        *_axes(scales),
    ]
    if marked_rate > 0 and 0 <= scales.x(marked_rate) <= 1:
        x = _x(scales.x(marked_rate))
        parts.append(f'<path class="mark" d="M{x} {_TOP}V{_H - _BOTTOM}"/>')
        parts.append(f'<text x="{x}" y="{_TOP - 8}" text-anchor="middle">planned: {marked_rate:.2g}</text>')
    parts += _curves(curves, scales)
    return "\n".join([*parts, "</svg>", ""])


def _axes(scales: Scales) -> list[str]:
    floor = _H - _BOTTOM
    parts = []
    for y, text in scales.loss_ticks():
        parts.append(f'<path class="grid" d="M{_LEFT} {_y(y)}H{_W - _RIGHT}"/>')
        parts.append(f'<text x="{_LEFT - 8}" y="{_y(y) + 4}" text-anchor="end">{text}</text>')
    for x, text in scales.rate_ticks():
        parts.append(f'<path class="grid" d="M{_x(x)} {_TOP}V{floor}"/>')
        parts.append(f'<text x="{_x(x)}" y="{floor + 20}" text-anchor="middle">{text}</text>')
    middle = (_LEFT + _W - _RIGHT) / 2
    parts.append(f'<path class="axis" d="M{_LEFT} {_TOP}V{floor}H{_W - _RIGHT}"/>')
    parts.append(f'<text x="{middle}" y="{_H - 12}" text-anchor="middle">chance of a bit to differ</text>')
    parts.append(
        f'<text transform="translate(16 {(_TOP + floor) / 2}) rotate(-90)" text-anchor="middle">'
        "chance of loss, at most</text>"
    )
    return parts


def _curves(curves: Sequence[Curve], scales: Scales) -> list[str]:
    """The lines, and their names in a column at the right that is in the order of the curves."""
    parts = []
    for number, curve in enumerate(curves):
        dash = _DASHES[number % len(_DASHES)]
        line = [(_x(x), _y(min(y, 1.0))) for x, y in points(curve, scales)]
        style = f' stroke-dasharray="{dash}"' if dash else ""
        if line:
            path = "L".join(f"{x} {y}" for x, y in line)
            parts.append(f'<path class="curve"{style} d="M{path}"/>')
        y = _TOP + 14 + 34 * number
        parts.append(f'<path class="curve"{style} d="M{_W - _RIGHT + 12} {y}h34"/>')
        parts.append(f'<text x="{_W - _RIGHT + 12}" y="{y + 16}">{escape(curve.label)}</text>')
    return parts


def _x(share: float) -> float:
    return round(_LEFT + share * (_W - _LEFT - _RIGHT), 1)


def _y(share: float) -> float:
    return round(_H - _BOTTOM - share * (_H - _TOP - _BOTTOM), 1)
