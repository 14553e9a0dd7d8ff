"""plan: how much parity, against what, for how long? The codes on the frontier of overhead against loss."""

from __future__ import annotations

import os
import shlex
import time
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np

from oakum.algebra.concatenated import ConcatenatedCode
from oakum.algebra.inner import InnerCode
from oakum.algebra.naming import name_of
from oakum.algebra.outer import OuterCode
from oakum.channel import Channel
from oakum.errors import CannotCheck, UsageError
from oakum.files import reason
from oakum.forecast import Shape, forecast
from oakum.geometry import MAX_LENGTH, check_depth
from oakum.jobs.common import summarise
from oakum.jobs.damage import Wishes
from oakum.members import collect
from oakum.probability import log_any
from oakum.results import Assumption, Candidate, Curve, PlanResult

TARGET = 1e-9
"""The chance of loss over the whole period that is good enough unless something else is said."""

CHECKS = range(8, 97, 8)
"""Check symbols of the outer codes that are tried."""

SHOWN_BELOW, SHOWN_ABOVE = 4, 3
"""Codes of the frontier shown beside the recommended one: with less and with more overhead."""

CURVES = 4
CURVE_POINTS = 25
HIGHEST_RATE = 0.03


def plan(
    path: Path | None,
    wishes: Wishes,
    *,
    size: int | None = None,
    overhead: float | None = None,
    target: float = TARGET,
    depth: int | None = None,
) -> PlanResult:
    """Choose a code for `size` bytes (or those of `path`) against the damage that `wishes` describe.

    `overhead` bounds the parity as a fraction of the data; `target` is the chance of loss to stay below.
    Raises UsageError for wishes that cannot be met or make no sense, CannotCheck for a path that cannot be
    read.
    """
    begin = time.monotonic()
    length = _size(path, size)
    if not 0 < target < 1:
        raise UsageError(f"a chance of loss of {target:g} is no target; give one between 0 and 1")
    channel, assumptions = wishes.channel()
    shapes = [
        Shape.of(code, length, check_depth(depth) if depth is not None else None) for code in _codes(overhead)
    ]
    candidates = [_candidate(shape, channel) for shape in shapes]
    reached = [c for c in candidates if c.period.at_most <= np.log(target)]
    chosen = reached[0] if reached else min(candidates, key=lambda c: (c.period.at_most, c.period.column))
    shown = _around(_frontier(candidates, chosen), chosen)
    by_notation = {shape.code.notation: shape for shape in shapes}
    return PlanResult(
        path, length, channel.years, target, overhead, _with_size(assumptions, length, path, depth), shown,
        chosen, bool(reached), _command(chosen, path, depth),
        _curves([by_notation[c.notation] for c in shown], shown.index(chosen), channel),
        channel.final_flip_rate,
        time.monotonic() - begin, _notes(channel, depth),
    )  # fmt: skip


def _size(path: Path | None, size: int | None) -> int:
    """Bytes to be protected."""
    if path is None and size is None:
        raise UsageError("plan needs a path or --size")
    if size is None:
        assert path is not None
        if not os.path.lexists(path):
            raise CannotCheck(f"{path} is not there; give --size to plan for what does not exist yet")
        try:
            size = sum(member.size for member in collect([path.absolute()], path.absolute().parent)[0])
        except OSError as error:
            raise CannotCheck(f"{path} cannot be read: {reason(error)}") from None
    if not 0 < size <= MAX_LENGTH:
        raise UsageError(f"{size} bytes cannot be planned for; give a size of at least 1 byte")
    return size


def _codes(overhead: float | None) -> list[ConcatenatedCode]:
    """The codes that are tried, by rising overhead, within the budget."""
    codes = []
    for inner in (InnerCode.none(), *InnerCode.known()):
        for checks in CHECKS:
            code = ConcatenatedCode("", OuterCode(255, 255 - checks), inner)
            codes.append(replace(code, name=name_of(code)))
    codes.sort(key=lambda code: code.overhead)
    if overhead is None:
        return codes
    if not overhead > 0:
        raise UsageError(
            f"an overhead of {100 * overhead:g} % leaves no room for parity; give one above 0, such as 25%"
        )
    within = [code for code in codes if code.overhead <= overhead]
    if not within:
        raise UsageError(
            f"an overhead of {100 * overhead:.3g} % is less than the weakest code takes; "
            f"give at least {100 * codes[0].overhead:.1f} %"
        )
    return within


def _candidate(shape: Shape, channel: Channel) -> Candidate:
    """A code's chances: after a year, after the whole period, and with a repair every year."""
    period = forecast(shape, channel)
    year = period if channel.years == 1 else forecast(shape, channel.after(1.0))
    renewed = log_any(year.at_most, channel.years)
    return Candidate(
        summarise(shape.code), shape.code.notation, shape.depth, shape.guaranteed_burst, year, period, renewed
    )


def _frontier(candidates: Sequence[Candidate], chosen: Candidate) -> list[Candidate]:
    """Those that no other beats in both overhead and loss, by rising overhead.

    Beside the chosen one only those that at least halve the loss, since parity should be worth its space.
    """
    best: list[Candidate] = []
    for candidate in candidates:
        before = best[-1].period.at_most if best else np.inf
        if candidate is chosen or candidate.period.at_most < before - np.log(2):
            best.append(candidate)
    return best


def _around(frontier: list[Candidate], chosen: Candidate) -> tuple[Candidate, ...]:
    """The few that are shown."""
    at = frontier.index(chosen)
    return tuple(frontier[max(0, at - SHOWN_BELOW) : at + SHOWN_ABOVE + 1])


def _curves(shapes: Sequence[Shape], chosen: int, channel: Channel) -> tuple[Curve, ...]:
    """Loss against the flip rate at the time of reading, all else as planned: the chosen code and others."""
    planned = channel.final_flip_rate
    lowest = max(min(planned / 10, 1e-4), 1e-5) if planned else 1e-5
    rates = np.geomspace(lowest, HIGHEST_RATE, CURVE_POINTS).tolist()
    start = max(0, min(chosen - 1, len(shapes) - CURVES))
    return tuple(
        Curve(
            shape.code.name,
            tuple(rates),
            tuple(forecast(shape, channel.with_final_flip_rate(rate)).stream[1] for rate in rates),
        )
        for shape in shapes[start : start + CURVES]
    )


def _command(chosen: Candidate, path: Path | None, depth: int | None) -> str:
    words = ["oakum", "protect", "--code", shlex.quote(chosen.code.name)]
    if depth is not None:
        words += ["--depth", str(depth)]
    return " ".join([*words, shlex.quote(str(path)) if path is not None else "PATH"])


def _with_size(
    assumptions: tuple[Assumption, ...], length: int, path: Path | None, depth: int | None
) -> tuple[Assumption, ...]:
    source = "the command line" if path is None else "counted"
    windows = "one window" if depth is None else f"windows with a depth of {depth:,} bytes"
    return (Assumption(f"{length:,} bytes in {windows}", source, "given"), *assumptions)


def _notes(channel: Channel, depth: int | None) -> tuple[str, ...]:
    notes = []
    if channel.flip_rate:
        notes.append(
            "columns that share words tend to be lost together, so that the chances for the whole are "
            "given as bounds; the choice goes by the upper one"
        )
        notes.append(
            "the chances are those of one pass of the decoder; feedback saves more, as far as the "
            "measured curves tell"
        )
    if channel.runs and depth is not None:
        notes.append("a burst that is longer than the depth takes more than one byte of a codeword")
    return tuple(notes)
