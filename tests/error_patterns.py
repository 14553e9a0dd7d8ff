"""Simulated audits: files and what became of them, put into a pattern below the level of files.

Each scenario takes random numbers and a strength of 0, 1 or 2 (2 the strongest) and returns the
file as it was and as it is.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable

import numpy as np

from oakum import conversions
from oakum.audits import Cause
from oakum.patterns import FileFacts, Pattern, PatternCollector

CELL = 4096
Array = np.ndarray
Damage = Callable[[np.random.Generator, int], tuple[Array, Array]]


def pattern_of(original: bytes, damaged: bytes, path: str = "a") -> Pattern:
    """What an audit of one file sees in which everything could be corrected."""
    right, received = np.frombuffer(original, np.uint8), np.frombuffer(damaged, np.uint8)
    length = min(len(right), len(received))
    collector = PatternCollector()
    for start in range(0, length, CELL):
        cell = slice(start, min(start + CELL, length))
        if not np.array_equal(right[cell], received[cell]):
            collector.add(path, len(right), 0, start, received[cell], right[cell])
    pattern = collector.finish(len(right))
    return with_lengths(pattern, path, original, damaged)


def with_lengths(pattern: Pattern, path: str, original: bytes, damaged: bytes) -> Pattern:
    """Adds what the audit finds out about files whose length has changed."""
    if len(original) == len(damaged):
        return pattern
    converted = conversions.undone([damaged], len(original), hashlib.sha256(original).digest())
    return pattern.with_files([FileFacts(path, len(original), len(damaged), converted)])


def binary(rng: np.random.Generator, size: int) -> Array:
    """Bytes as of a compressed image, or as of a table of small numbers, by turns."""
    if rng.random() < 0.5:
        return rng.integers(0, 256, size, np.uint8)
    return rng.integers(0, 40, size // 4 + 1, np.uint32).view(np.uint8)[:size].copy()


def text(rng: np.random.Generator, size: int) -> Array:
    """Words of letters in lines, some of the letters outside ASCII (in UTF-8)."""
    letters = [c.encode() for c in "eeeettaaooiinnsshhrrddlluuccmmwwffggyyppbbvvkké ü     "]
    parts = [letters[i] for i in rng.integers(0, len(letters), size).tolist()]
    for at in range(int(rng.integers(30, 70)), size, 61):
        parts[at] = b"\n"
    return np.frombuffer(b"".join(parts), np.uint8)[:size].copy()


def file_of(rng: np.random.Generator, size: int) -> Array:
    return text(rng, size) if rng.random() < 0.3 else binary(rng, size)


def flip(rng: np.random.Generator, data: Array, count: int, ones: float | None = None) -> None:
    """Flip `count` bits at random places, `ones` of them (a share) from 0 to 1."""
    bits = np.unpackbits(data, bitorder="little")
    if ones is None:
        chosen = rng.choice(len(bits), count, replace=False)
    else:
        up = round(count * ones)
        zeros, others = np.flatnonzero(bits == 0), np.flatnonzero(bits)
        chosen = np.concatenate(
            [rng.choice(zeros, up, replace=False), rng.choice(others, count - up, replace=False)]
        )
    bits[chosen] ^= 1
    data[:] = np.packbits(bits, bitorder="little")


SIZE = 1 << 18


def scattered(rng: np.random.Generator, strength: int) -> tuple[Array, Array]:
    data = file_of(rng, SIZE)
    out = data.copy()
    flip(rng, out, (4, 60, 4000)[strength])
    return data, out


def stuck(width: int) -> Damage:
    def damage(rng: np.random.Generator, strength: int) -> tuple[Array, Array]:
        data = rng.integers(0, 256, SIZE, np.uint8)
        out = data.copy()
        bit = int(rng.integers(width))
        words = out.reshape(-1, width // 8)
        share = (0.003, 0.05, 1.0)[strength]
        hit = rng.random(len(words)) < share
        words[hit, bit // 8] |= 1 << bit % 8
        flip(rng, out, (3, 10, 10)[strength])
        return data, out

    return damage


def aligned(sector: int) -> Damage:
    def damage(rng: np.random.Generator, strength: int) -> tuple[Array, Array]:
        data = file_of(rng, max(SIZE, 12 * sector))
        out = data.copy()
        units = len(data) // sector
        for unit in rng.choice(units - 1, (1, 3, 5)[strength], replace=False).tolist():
            out[unit * sector : (unit + 1) * sector] = rng.integers(0, 256, sector, np.uint8)
        flip(rng, out, 5)
        return data, out

    return damage


def filled(value: int, *, end: bool) -> Damage:
    def damage(rng: np.random.Generator, strength: int) -> tuple[Array, Array]:
        data = rng.integers(0, 256, SIZE, np.uint8) if rng.random() < 0.5 else text(rng, SIZE)
        out = data.copy()
        length = (300, 10_000, 100_000)[strength] + int(rng.integers(200))
        start = len(out) - length if end else int(rng.integers(1, len(out) - length - 1000))
        out[start : start + length] = value
        flip(rng, out[: max(1000, start - 1000)], 3)
        return data, out

    return damage


def one_way(up: bool) -> Damage:
    def damage(rng: np.random.Generator, strength: int) -> tuple[Array, Array]:
        data = rng.integers(0, 256, SIZE, np.uint8)
        out = data.copy()
        count, share = ((40, 1.0), (150, 0.85), (3000, 0.75))[strength]
        flip(rng, out, count, share if up else 1 - share)
        return data, out

    return damage


def periodic(rng: np.random.Generator, strength: int) -> tuple[Array, Array]:
    data = file_of(rng, SIZE)
    out = data.copy()
    distance = int(rng.integers(500, 9000))
    places = np.arange(int(rng.integers(distance)), len(out), distance)
    places = places[rng.random(len(places)) < (0.6, 0.8, 1.0)[strength]]
    out[places] ^= (1 << rng.integers(0, 8, len(places))).astype(np.uint8)
    flip(rng, out, (0, 3, 6)[strength])
    return data, out


def cut_short(rng: np.random.Generator, strength: int) -> tuple[Array, Array]:
    data = file_of(rng, SIZE)
    out = data[: len(data) - (1, 5000, 200_000)[strength] - int(rng.integers(100))].copy()
    flip(rng, out, 3)
    return data, out


def high_bit(rng: np.random.Generator, strength: int) -> tuple[Array, Array]:
    data = binary(rng, SIZE) if strength == 2 else text(rng, (6000, 100_000)[strength])
    if strength == 2:
        data[rng.integers(0, len(data), 1000)] |= 0x80
    return data, data & 0x7F


def line_ends(to_pairs: bool) -> Damage:
    def damage(rng: np.random.Generator, strength: int) -> tuple[Array, Array]:
        lines = text(rng, (500, 20_000, 200_000)[strength]).tobytes()
        pairs = lines.replace(b"\n", b"\r\n")
        before, after = (lines, pairs) if to_pairs else (pairs, lines)
        return np.frombuffer(before, np.uint8), np.frombuffer(after, np.uint8)

    return damage


def rewritten(rng: np.random.Generator, strength: int) -> tuple[Array, Array]:
    data = file_of(rng, (2000, 40_000, 400_000)[strength])
    return data, rng.integers(0, 256, len(data), np.uint8)


def past_offset(rng: np.random.Generator, strength: int) -> tuple[Array, Array]:
    data = rng.integers(0, 256, SIZE, np.uint8) if rng.random() < 0.7 else text(rng, SIZE)
    start = len(data) - int((0.02, 0.3, 0.7)[strength] * len(data)) - int(rng.integers(1000))
    out = data.copy()
    if rng.random() < 0.5:
        out[start:] = rng.integers(0, 256, len(out) - start, np.uint8)
    else:  # A byte or a few were lost there: what follows is shifted.
        lost = int(rng.integers(1, 40))
        out = np.concatenate([out[:start], out[start + lost :], rng.integers(0, 256, lost, np.uint8)])
    flip(rng, out[:start], 3)
    return data, out


def overwritten(rng: np.random.Generator, strength: int) -> tuple[Array, Array]:
    data = file_of(rng, SIZE)
    out = data.copy()
    length = (150, 5000, 60_000)[strength] + int(rng.integers(100))
    start = int(rng.integers(1000, len(out) - length - 1000))
    start += 100 * (start % 512 < 4)
    out[start : start + length] = rng.integers(0, 256, length, np.uint8)
    return data, out


SCENARIOS: dict[str, tuple[Cause, Damage]] = {
    "scattered": (Cause.SCATTERED, scattered),
    **{f"stuck bit of {width}": (Cause.STUCK_BIT, stuck(width)) for width in (8, 32, 64)},
    **{f"sectors of {size}": (Cause.ALIGNED, aligned(size)) for size in (512, 2048, 4096, 32768, 65536)},
    "zeros at the end": (Cause.FILLED_END, filled(0, end=True)),
    "0xFF at the end": (Cause.FILLED_END, filled(0xFF, end=True)),
    "zeros inside": (Cause.FILLED_INSIDE, filled(0, end=False)),
    "0xFF inside": (Cause.FILLED_INSIDE, filled(0xFF, end=False)),
    "flips up": (Cause.DIRECTION, one_way(up=True)),
    "flips down": (Cause.DIRECTION, one_way(up=False)),
    "period": (Cause.PERIOD, periodic),
    "cut short": (Cause.CUT_SHORT, cut_short),
    "high bit": (Cause.HIGH_BIT, high_bit),
    "LF to CR LF": (Cause.LINE_ENDS, line_ends(to_pairs=True)),
    "CR LF to LF": (Cause.LINE_ENDS, line_ends(to_pairs=False)),
    "rewritten": (Cause.REWRITTEN, rewritten),
    "past an offset": (Cause.PAST_OFFSET, past_offset),
    "overwritten": (Cause.RUNS, overwritten),
}


def first_cause(damage: Damage, strength: int, seed: list[int]) -> Cause | None:
    """The cause named first for one simulated audit."""
    from oakum.causes import find_causes

    before, after = damage(np.random.default_rng([*seed, strength]), strength)
    found = find_causes(pattern_of(before.tobytes(), after.tobytes()))
    return found[0].cause if found else None


def false_alarm(rng: np.random.Generator) -> bool:
    """Whether a clean or randomly damaged file is said to have anything but scattered flips."""
    from oakum.causes import find_causes

    data = file_of(rng, int(rng.integers(1000, SIZE)))
    out = data.copy()
    count = int(rng.choice([0, 1, 2, 5, 12, 40, 200, 1000]))
    flip(rng, out, min(count, len(data) // 20))
    found = {f.cause for f in find_causes(pattern_of(data.tobytes(), out.tobytes()))}
    return found != ({Cause.SCATTERED} if count else set())


__all__ = ["SCENARIOS", "false_alarm", "file_of", "first_cause", "flip", "pattern_of"]
