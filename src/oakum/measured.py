"""The decoder's measured curves: how many blocks were lost at which flip rate, with feedback and all trials.

Nothing is extrapolated. Between two measured rates the chance is interpolated on a straight line in the
probit scale, on which the curves of iterative decoders near their threshold are nearly straight (scaling at
finite length: Amraoui, Montanari, Richardson and Urbanke, IEEE Trans. Inform. Theory 55, 2009). Below them,
all that a measurement says is that the loss is not above the exact upper limit at the next rate measured.
"""

from __future__ import annotations

import json
from dataclasses import dataclass
from functools import cache, cached_property
from statistics import NormalDist

from oakum.algebra.concatenated import ConcatenatedCode
from oakum.probability import clopper_pearson

LEVEL = 0.95


@dataclass(frozen=True)
class MeasuredCurve:
    """Points (flip rate, blocks decoded, blocks lost) by rising rate, for blocks of `width` columns."""

    width: int
    points: tuple[tuple[float, int, int], ...]

    def at_most(self, rate: float) -> float:
        """The upper end of the exact 90 % interval (95 % one-sided) at the next rate measured, or 1."""
        for measured, limit in self._upper:
            if rate <= measured:
                return limit
        return 1.0

    def estimate(self, rate: float) -> float | None:
        """The chance of losing a block; None outside the measured rates."""
        normal = NormalDist()
        for (a, low), (b, high) in zip(self._middle, self._middle[1:], strict=False):
            if a <= rate <= b:
                t = (rate - a) / (b - a)
                return normal.cdf((1 - t) * normal.inv_cdf(low) + t * normal.inv_cdf(high))
        return None

    @cached_property
    def _upper(self) -> list[tuple[float, float]]:
        limits = [clopper_pearson(lost, blocks, 2 * LEVEL - 1)[1] for _, blocks, lost in self.points]
        # More flips never lose less: a limit that holds at a higher rate holds here too.
        return [(p[0], min(limits[i:])) for i, p in enumerate(self.points)]

    @cached_property
    def _middle(self) -> list[tuple[float, float]]:
        """Estimates that rise with the rate: neighbours that do not are pooled.

        (Ayer et al., Ann. Math. Statist. 26, 1955); half a block is added to either side, which keeps 0 and
        all of them away from the ends of the scale.
        """
        pools: list[list[float]] = []
        for rate, blocks, lost in self.points:
            pools.append([rate, 1, lost, blocks])
            while len(pools) > 1 and pools[-2][2] * pools[-1][3] >= pools[-1][2] * pools[-2][3]:
                rate_sum, count, lost_sum, blocks_sum = pools.pop()
                pools[-1] = [
                    a + b for a, b in zip(pools[-1], (rate_sum, count, lost_sum, blocks_sum), strict=True)
                ]
        return [(rates / count, (lost + 0.5) / (blocks + 1)) for rates, count, lost, blocks in pools]


@cache
def _stored() -> dict[str, list[MeasuredCurve]]:
    from importlib.resources import files

    text = files("oakum").joinpath("data", "curves.json").read_text(encoding="utf-8")
    return {
        notation: sorted(
            (MeasuredCurve(c["width"], tuple(map(tuple, c["points"]))) for c in curves), key=lambda c: c.width
        )
        for notation, curves in json.loads(text).items()
    }


def measured_curve(code: ConcatenatedCode, width: int) -> MeasuredCurve | None:
    """The curve of a code for blocks of `width` columns, or of the next wider ones (which lose no less)."""
    wide = [curve for curve in _stored().get(code.notation, []) if curve.width >= width]
    return wide[0] if wide else None
