"""From a pattern of errors to its likely causes: findings with evidence, never a verdict.

Each detector looks at what the ones before it have not accounted for: first what concerns a file as a whole
(its length, its line ends), then dense runs, then single flips. Statistical ones compare a count with what
random flips would give and speak up only where that has a chance below 10^-`LEAST_WEIGHT`, corrected for the
number of places looked at; `weight` is always that exponent.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from oakum.advice import ADVICE
from oakum.audits import Cause, CauseFinding, Likelihood
from oakum.patterns import POSITIONS, MemberPattern, Pattern
from oakum.statistics import binomial_tail

Mask = NDArray[np.bool_]
Integers = NDArray[np.int64]

LEAST_WEIGHT = 5.0
TAIL = 64
"""Bytes by which a run may miss the end of its file: what was there may happen to be right."""

SECTORS = (512, 2048, 4096, 32768, 65536)
WORDS = (8, 32, 64)
SLACK = 3
"""Bytes by which a run may miss a boundary, for the same reason."""

MOST_WRONG = 0.85
"""The share of wrong bytes from which on a file is another one: of text against text some agree by chance."""

GENERIC = (Cause.RUNS, Cause.SCATTERED)
"""Causes that say little; they are named after those that say more."""


@dataclass
class _Rest:
    """The pattern with what has not been accounted for yet."""

    pattern: Pattern
    runs: Mask = field(init=False)
    single: Mask = field(init=False)

    def __post_init__(self) -> None:
        self.runs = np.ones(len(self.pattern.runs), bool)
        self.single = np.ones(len(self.pattern.owner), bool)

    def take(self, runs: Mask | None = None, single: Mask | None = None) -> int:
        """Account for some runs and bytes; returns how many wrong bytes these are."""
        count = 0
        if runs is not None:
            count += int(self.pattern.runs.wrong[runs & self.runs].sum())
            self.runs &= ~runs
        if single is not None:
            count += int((single & self.single).sum())
            self.single &= ~single
        return count

    def take_member(self, number: int) -> int:
        """Account for all of one member."""
        return self.take(self.pattern.runs.owner == number, self.pattern.owner == number)


def find_causes(pattern: Pattern) -> tuple[CauseFinding, ...]:
    """Findings, the one to look at first first; none where nothing is wrong."""
    rest = _Rest(pattern)
    findings = [finding for detector in DETECTORS for finding in detector(rest)]
    return tuple(sorted(findings, key=lambda f: (f.cause in GENERIC, -f.wrong_bytes)))


def _finding(
    cause: Cause, weight: float, evidence: str, wrong: int, members: tuple[str, ...] = ()
) -> CauseFinding:
    return CauseFinding(cause, likelihood_of(weight), evidence, ADVICE[cause], wrong, members)


def likelihood_of(weight: float) -> Likelihood:
    """In words, from the exponent of the chance that random errors look like this."""
    if weight >= 12:
        return Likelihood.ALMOST_CERTAIN
    if weight >= 7:
        return Likelihood.VERY_LIKELY
    return Likelihood.LIKELY if weight >= 4 else Likelihood.POSSIBLE


def _weight(chance: float) -> float:
    return 300.0 if chance <= 1e-300 else max(0.0, -math.log10(chance))


def _merged(
    rest: _Rest, cause: Cause, found: list[tuple[int, str, int]], weight: float, sentence: str
) -> Iterator[CauseFinding]:
    """One finding for all members that show the same; `found` is (member, evidence, wrong bytes)."""
    if not found:
        return
    names = tuple(rest.pattern.members[number].path for number, _, _ in found)
    evidence = found[0][1]
    if len(found) > 1:
        evidence = f"{len(found):,} files {sentence}; the first: {evidence}"
    yield _finding(cause, weight, evidence, sum(wrong for _, _, wrong in found), names)


# -- a file as a whole ---------------------------------------------------------------------------------


def _line_ends(rest: _Rest) -> Iterator[CauseFinding]:
    found = []
    for number, member in enumerate(rest.pattern.members):
        if member.converted:
            found.append((number, member.converted, max(1, rest.take_member(number))))
    certain = any("SHA-256" in m.converted for m in rest.pattern.members)
    yield from _merged(rest, Cause.LINE_ENDS, found, 20.0 if certain else 5.0, "had their line ends changed")


def _cut_short(rest: _Rest) -> Iterator[CauseFinding]:
    found = []
    for number, member in enumerate(rest.pattern.members):
        if member.found is None or member.found >= member.size or member.converted:
            continue
        unit = next((s for s in reversed(SECTORS) if member.found and member.found % s == 0), 0)
        where = f", a multiple of {unit:,}" if unit else ""
        evidence = f"the file ends at byte {member.found:,} of {member.size:,}{where}"
        found.append((number, evidence, member.size - member.found))
    yield from _merged(rest, Cause.CUT_SHORT, found, 20.0, "are shorter than recorded")


def _rewritten(rest: _Rest) -> Iterator[CauseFinding]:
    found, weight = [], 20.0
    runs, count = rest.pattern.runs, len(rest.pattern.members)
    wrong = np.bincount(rest.pattern.owner[rest.single], minlength=count)
    np.add.at(wrong, runs.owner[rest.runs], runs.wrong[rest.runs])
    for number in np.flatnonzero(wrong).tolist():
        member = rest.pattern.members[number]
        if wrong[number] < MOST_WRONG * min(member.size, member.found or member.size):
            continue
        evidence = _rewriting(rest, number, member)
        if not evidence:
            continue
        if rest.pattern.runs.unknown[rest.pattern.runs.owner == number].any():
            weight = (
                3.0  # Flips beyond what can be corrected look the same where the right bytes are unknown.
            )
        found.append((number, evidence, rest.take_member(number)))
    yield from _merged(rest, Cause.REWRITTEN, found, weight, "differ from their first byte to their last")


def _rewriting(rest: _Rest, number: int, member: MemberPattern) -> str:
    runs = rest.pattern.runs
    mine = (runs.owner == number) & rest.runs
    length = min(member.size, member.size if member.found is None else member.found)
    unknown = int(runs.unknown[mine].sum())
    wrong = int(runs.wrong[mine].sum()) + int(((rest.pattern.owner == number) & rest.single).sum())
    filled = int(runs.zeros[mine].sum()) + int(runs.ones[mine].sum())
    if length < TAIL or wrong < MOST_WRONG * length or filled > 0.5 * wrong:
        return ""
    if not unknown and int(runs.bits[mine].sum()) < 1.5 * wrong:
        return ""  # Another byte differs in about four bits; one or so a byte is a bit that fails.
    entropy, random = _entropy(member.histogram)
    share = f"{100 * (wrong / length):.0f} % of its bytes differ, from the first to the last"
    if entropy > random - 0.05:
        return (
            f"{share}, and what is there now looks random ({entropy:.2f} bits a byte), as encrypted data do"
        )
    return f"{share}; what is there now is other content ({entropy:.2f} bits a byte)"


def _entropy(histogram: Integers) -> tuple[float, float]:
    """Bits a byte, and what as many random bytes would show on average (Miller and Madow's correction)."""
    total = max(1, int(histogram.sum()))
    shares = histogram[histogram > 0] / total
    return float(-(shares * np.log2(shares)).sum()), 8 - 255 / (2 * total * math.log(2))


# -- runs ----------------------------------------------------------------------------------------------


def _filled(rest: _Rest) -> Iterator[CauseFinding]:
    runs = rest.pattern.runs
    ends: list[tuple[int, str, int]] = []
    inside: list[tuple[int, str, int]] = []
    for value, counts in ((0x00, runs.zeros), (0xFF, runs.ones)):
        filled = rest.runs & (counts >= 0.98 * runs.wrong)
        for number in np.unique(runs.owner[filled]).tolist():
            mine = filled & (runs.owner == number)
            at_end = _reaching_end(rest, number, mine)
            for chosen, found in ((at_end, ends), (mine & ~at_end, inside)):
                if chosen.any():
                    start, stop = int(runs.start[chosen].min()), int(runs.stop[chosen].max())
                    evidence = f"bytes {start:,} to {stop - 1:,} are 0x{value:02X} where they differ"
                    found.append((number, evidence, rest.take(chosen)))
    yield from _merged(rest, Cause.FILLED_END, ends, 12.0, "end so")
    yield from _merged(rest, Cause.FILLED_INSIDE, inside, 12.0, "have such stretches")


def _reaching_end(rest: _Rest, number: int, mine: Mask) -> Mask:
    """Those of the runs `mine` of a member that make up its last stretch, up to its end."""
    runs, member = rest.pattern.runs, rest.pattern.members[number]
    edge = min(member.size, member.size if member.found is None else member.found)
    chosen = np.zeros(len(runs), bool)
    for index in np.flatnonzero(mine)[::-1].tolist():
        if edge - int(runs.stop[index]) > TAIL:
            break
        chosen[index] = True
        edge = int(runs.start[index])
    return chosen


def _past_offset(rest: _Rest) -> Iterator[CauseFinding]:
    runs, found = rest.pattern.runs, []
    for number in np.unique(runs.owner[rest.runs]).tolist():
        mine = rest.runs & (runs.owner == number)
        last = _reaching_end(rest, number, mine)
        length = int((runs.stop - runs.start)[last].sum())
        wrong, bits = int(runs.wrong[last].sum()), int(runs.bits[last].sum())
        known = not runs.unknown[last].any()
        start = int(runs.start[last].min()) if last.any() else 0
        dense = wrong >= 0.6 * length and (not known or bits >= 1.5 * wrong)
        if length < 256 or not start or not dense or wrong < 0.9 * int(runs.wrong[mine].sum()):
            continue
        member = rest.pattern.members[number]
        change = 0 if member.found is None else member.found - member.size
        shift = (
            f"; the file is {abs(change):,} bytes {'longer' if change > 0 else 'shorter'}" if change else ""
        )
        evidence = (
            f"from byte {start:,} on, {100 * (wrong / length):.0f} % of the {length:,} bytes are wrong{shift}"
        )
        found.append((number, evidence, rest.take(last)))
    yield from _merged(rest, Cause.PAST_OFFSET, found, 8.0, "are wrong from some byte on")


def _unreadable(rest: _Rest) -> Iterator[CauseFinding]:
    found = []
    for number, member in enumerate(rest.pattern.members):
        end = member.size if member.found is None else min(member.size, member.found)
        ranges = (
            [(a, min(b, end)) for a, b in member.unreadable if a < end] if member.found is not None else []
        )
        if ranges:
            nbytes = sum(b - a for a, b in ranges)
            evidence = f"{nbytes:,} bytes at {len(ranges):,} places, the first at byte {ranges[0][0]:,}"
            found.append((number, evidence, nbytes))
    yield from _merged(rest, Cause.UNREADABLE, found, 20.0, "have such places")


def _unsteady(rest: _Rest) -> Iterator[CauseFinding]:
    count = rest.pattern.unsteady
    if count:
        evidence = f"{count:,} cells of 4,096 bytes gave other bytes when they were read again"
        yield _finding(Cause.UNSTEADY, 20.0, evidence, 4096 * count)


def _runs(count: int, kind: str = "") -> str:
    return f"{count:,} {kind}run{'' if count == 1 else 's'}"


def _aligned(rest: _Rest) -> Iterator[CauseFinding]:
    runs = rest.pattern.runs
    tested = rest.runs & (runs.unknown == 0)  # What is unknown is counted by cells, which are aligned anyway.
    if not tested.any():
        return
    sizes = np.array([m.size for m in rest.pattern.members], np.int64)[runs.owner]
    best, unit, chosen = 0.0, 0, tested
    for sector in SECTORS:
        begins = runs.start % sector < SLACK
        ends = (-runs.stop % sector < SLACK) | (sizes - runs.stop < SLACK)
        fits = tested & begins & ends
        chance = binomial_tail(int(fits.sum()), int(tested.sum()), (SLACK / sector) ** 2)
        weight = _weight(chance * len(SECTORS))
        if weight > best:
            best, unit, chosen = weight, sector, fits
    if best < 3:
        return
    evidence = (
        f"{int(chosen.sum()):,} of {_runs(int(tested.sum()))} with both ends at multiples of {unit:,} bytes, "
        f"the first at byte {int(runs.start[chosen][0]) // unit * unit:,}"
    )
    names = tuple(rest.pattern.members[i].path for i in np.unique(runs.owner[chosen]).tolist())
    yield _finding(Cause.ALIGNED, best, evidence, rest.take(chosen), names)


def _overwritten(rest: _Rest) -> Iterator[CauseFinding]:
    """What is left of runs, as far as scattered flips do not make such runs by chance."""
    runs = rest.pattern.runs
    if not rest.runs.any():
        return
    total = max(1, rest.pattern.bytes_read)
    background = min(0.5, max(1.0, float(rest.single.sum()) + rest.pattern.omitted) / total)
    length = np.maximum(1, runs.stop - runs.start)
    share = np.minimum(1 - 1e-9, runs.wrong / length)
    # Chernoff: so dense a run has a chance below exp(-length * D(share || background)) at each place.
    divergence = share * np.log(share / background) + (1 - share) * np.log((1 - share) / (1 - background))
    weight = (length * divergence - math.log(total)) / math.log(10)
    chosen = rest.runs & (weight > LEAST_WEIGHT)
    if not chosen.any():
        return
    longest = int(length[chosen].max())
    evidence = f"{_runs(int(chosen.sum()), 'dense ')} of up to {longest:,} bytes, at no common boundary"
    names = tuple(rest.pattern.members[i].path for i in np.unique(runs.owner[chosen]).tolist())
    yield _finding(Cause.RUNS, float(weight[chosen].max()), evidence, rest.take(chosen), names)


# -- single bits ---------------------------------------------------------------------------------------


def _high_bit(rest: _Rest) -> Iterator[CauseFinding]:
    pattern, runs = rest.pattern, rest.pattern.runs
    fits = (pattern.flips == 0x80) & (pattern.received < 0x80)
    wrong = int(rest.single.sum()) + int(runs.wrong[rest.runs].sum())
    high = int((fits & rest.single).sum()) + int(runs.high[rest.runs].sum())
    owners = np.union1d(runs.owner[rest.runs], pattern.owner[rest.single])
    left = sum(int(pattern.members[i].histogram[0x80:].sum()) for i in owners.tolist())
    if high < 8 or high < 0.99 * wrong or left > 0.02 * high:
        return
    evidence = f"all {wrong:,} wrong bytes lack their high bit; of the bytes beside them {left:,} have one"
    names = tuple(pattern.members[i].path for i in owners.tolist())
    yield _finding(Cause.HIGH_BIT, high * math.log10(16), evidence, rest.take(rest.runs, rest.single), names)


def _stuck_bit(rest: _Rest) -> Iterator[CauseFinding]:
    singles = _positions(rest)
    for with_runs in (True, False):
        counts = singles + (rest.pattern.runs.positions[rest.runs].sum(axis=0) if with_runs else 0)
        best = _failing_position(counts)
        if best is not None:
            yield _stuck_finding(rest, counts, *best)
            return


def _positions(rest: _Rest) -> Integers:
    """int64[64]: flips of the single bytes left, by position."""
    pattern = rest.pattern
    counts = np.zeros((8, 8), np.int64)
    for bit in range(8):
        hit = rest.single & (pattern.flips >> bit & 1).astype(bool)
        counts[:, bit] = np.bincount(pattern.offset[hit] % 8, minlength=8)
    return counts.reshape(POSITIONS)


def _failing_position(counts: Integers) -> tuple[int, int, float] | None:
    """The widest word of which one bit accounts for most flips: (width, bit, weight)."""
    total, best = int(counts.sum()), None
    held = 0
    for width in WORDS:
        by_bit = counts.reshape(-1, width).sum(axis=0)
        bit = int(by_bit.argmax())
        top = int(by_bit[bit])
        weight = _weight(binomial_tail(top, total, 1 / width) * width * len(WORDS))
        if top > 0.5 * total and top >= 0.9 * held and weight > LEAST_WEIGHT:
            best, held = (width, bit, weight), max(held, top)
    return best


def _stuck_finding(rest: _Rest, counts: Integers, width: int, bit: int, weight: float) -> CauseFinding:
    pattern, runs = rest.pattern, rest.pattern.runs
    by_bit = counts.reshape(-1, width).sum(axis=0)
    fits = (pattern.offset % (width // 8) == bit // 8) & (pattern.flips == 1 << bit % 8)
    of_runs = (
        runs.positions.reshape(len(runs), POSITIONS // width, width).sum(axis=1)[:, bit] > 0.5 * runs.bits
    )
    up = int((fits & rest.single & (pattern.received & 1 << bit % 8 != 0)).sum())
    both = int((fits & rest.single).sum())
    way = ""
    if both >= 8 and up in (0, both):
        way = ", always from 0 to 1" if up else ", always from 1 to 0"
    evidence = (
        f"{int(by_bit[bit]):,} of {int(counts.sum()):,} flips are in bit {bit} of each {width} bits{way}; "
        f"by chance one in {width} would be"
    )
    return _finding(Cause.STUCK_BIT, weight, evidence, rest.take(of_runs, fits))


def _direction(rest: _Rest) -> Iterator[CauseFinding]:
    pattern = rest.pattern
    flips, received = pattern.flips[rest.single], pattern.received[rest.single]
    total, up = int(np.bitwise_count(flips).sum()), int(np.bitwise_count(flips & received).sum())
    ones, bits = sum(m.ones for m in pattern.members), sum(m.bits for m in pattern.members)
    if total < 12 or not bits:
        return
    zeros = min(1 - 1e-6, max(1e-6, 1 - ones / bits))
    upwards = up > zeros * total
    share, expected = (up / total, zeros) if upwards else (1 - up / total, 1 - zeros)
    count = up if upwards else total - up
    weight = _weight(2 * binomial_tail(count, total, expected))
    if weight < LEAST_WEIGHT or share - expected < 0.1:
        return
    way = "from 0 to 1" if upwards else "from 1 to 0"
    evidence = f"{count:,} of {total:,} scattered flips are {way}; chance would give {100 * expected:.0f} %"
    yield _finding(Cause.DIRECTION, weight, evidence, rest.take(single=rest.single))


def _period(rest: _Rest) -> Iterator[CauseFinding]:
    owner, place, of_single, of_run = _events(rest)
    if len(place) < 8:
        return
    best: tuple[float, int, Mask] | None = None
    candidates = _distances(owner, place)
    for distance in candidates:
        residue = place % distance
        values, counts = np.unique(residue, return_counts=True)
        phase = int(values[counts.argmax()])
        near = (residue - phase + 1) % distance < 3
        hits = int(near.sum())
        chance = binomial_tail(hits, len(place), 3 / distance) * distance * len(place) * len(candidates)
        if hits >= max(6, 0.3 * len(place)) and (best is None or _weight(chance) > best[0]):
            best = _weight(chance), distance, near
    if best is None or best[0] < LEAST_WEIGHT:
        return
    weight, distance, near = best
    single, runs = np.zeros(len(rest.single), bool), np.zeros(len(rest.runs), bool)
    for mask, which in ((single, of_single), (runs, of_run)):
        mask[which[near & (which >= 0)]] = True
    evidence = (
        f"{int(near.sum()):,} of {len(place):,} errors lie at multiples of {distance:,} bytes from each other"
    )
    yield _finding(Cause.PERIOD, weight, evidence, rest.take(runs, single))


MOST_EVENTS = 20_000


def _events(rest: _Rest) -> tuple[Integers, Integers, Integers, Integers]:
    """Member and place of errors, near ones taken as one, and the single byte or run that each is."""
    pattern, runs = rest.pattern, rest.pattern.runs
    single, run = np.flatnonzero(rest.single), np.flatnonzero(rest.runs)
    owner = np.concatenate([pattern.owner[single], runs.owner[run]])
    place = np.concatenate([pattern.offset[single], runs.start[run]])
    of_single = np.concatenate([single, np.full(len(run), -1)])
    of_run = np.concatenate([np.full(len(single), -1), run])
    order = np.lexsort((place, owner))
    owner, place = owner[order], place[order]
    apart = np.ones(len(order), bool)
    apart[1:] = (np.diff(place) > 1) | (np.diff(owner) != 0)
    chosen = np.flatnonzero(apart)[:MOST_EVENTS]
    return owner[chosen], place[chosen], of_single[order][chosen], of_run[order][chosen]


def _distances(owner: Integers, place: Integers) -> list[int]:
    """Distances that occur often between errors and those near them, and what divides two of them."""
    found = []
    for lag in range(1, min(9, len(place))):
        same = owner[lag:] == owner[:-lag]
        found.append((place[lag:] - place[:-lag])[same])
    values, counts = np.unique(np.concatenate(found), return_counts=True)
    often = values[np.argsort(-counts, kind="stable")][:12].tolist()
    common = {math.gcd(a, b) for a in often for b in often if a < b}
    return sorted(d for d in {*often, *common} if d > POSITIONS // 8)


def _scattered(rest: _Rest) -> Iterator[CauseFinding]:
    pattern = rest.pattern
    flips = pattern.flips[rest.single]
    count = int(np.bitwise_count(flips).sum())
    if not count:
        return
    up = int(np.bitwise_count(flips & pattern.received[rest.single]).sum())
    if count < 12:
        evidence = f"{count:,} flips, too few to tell more"
    else:
        evidence = (
            f"{count:,} flips, {up:,} of them from 0 to 1; no bit position, direction or distance stands out"
        )
    weight = 1.0 if count < 3 else 5.0 if count < 12 else 8.0
    names = tuple(pattern.members[i].path for i in np.unique(pattern.owner[rest.single]).tolist())
    yield _finding(Cause.SCATTERED, weight, evidence, rest.take(single=rest.single), names)


DETECTORS: tuple[Callable[[_Rest], Iterator[CauseFinding]], ...] = (
    _unsteady, _line_ends, _cut_short, _unreadable, _high_bit, _filled, _stuck_bit, _rewritten, _past_offset,
    _aligned, _period, _overwritten, _direction, _scattered,
)  # fmt: skip
"""In the order in which they are asked."""
