"""How far the scan of a set has come: what the state file of a `verify` holds (see `oakum.jobs.resuming`)."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from oakum.geometry import Geometry
from oakum.jobs.checking import WindowCheck
from oakum.jobs.resuming import State, pack, pack_digests, unpack, unpack_digests
from oakum.members import MemberHasher
from oakum.sidecar.reading import Section

_WINDOWS = "windows"


class Scanned:
    """The windows of a set, some of which an earlier run has scanned."""

    def __init__(self, state: State, sections: Sequence[Section], *, fresh: bool) -> None:
        self._state = state
        self._windows: list[WindowCheck] = []
        self._before = [] if fresh else _load(state, sections)
        parts = zip(self._before, sections, strict=False)
        self.skipped = sum(min(kept["looked_to"], section.geometry.length) for kept, section in parts)
        """Bytes of members that an earlier run has read."""

    def begin(self, window: WindowCheck, hasher: MemberHasher | None) -> None:
        """Bring the next window to where an earlier run left it, and keep what becomes of it from now on."""
        number = len(self._windows)
        self._windows.append(window)
        window.resumed = bool(self._before) and number <= len(self._before)
        if number < len(self._before):
            _restore(window, self._before[number])
        window.mark = lambda: self._save(hasher)

    def _save(self, hasher: MemberHasher | None) -> None:
        if not self._state.due:
            return
        *done, current = self._windows
        digests = [] if hasher is None else hasher.digests_before(current.looked_to)
        kept = [_pack(window, window.digests) for window in done]
        self._state.save({_WINDOWS: [*kept, _pack(current, digests)]})


def _load(state: State, sections: Sequence[Section]) -> list[dict[str, Any]]:
    """What an earlier run has kept of the first windows; nothing where that makes no sense."""
    content = state.load()
    if content is None:
        return []
    try:
        windows = content[_WINDOWS]
        return [_checked(kept, s.geometry) for kept, s in zip(windows, sections[: len(windows)], strict=True)]
    except (KeyError, TypeError, ValueError):
        return []


def _checked(kept: dict[str, Any], g: Geometry) -> dict[str, Any]:
    """What is kept of a window, unpacked. Raises KeyError, TypeError or ValueError where it cannot be so."""
    made: dict[str, Any] = {
        "looked_to": int(kept["looked_to"]),
        "body_done": int(kept["body_done"]),
        "digests": unpack_digests(kept["digests"]),
        "data": _unpack_sparse(kept["data"], g.data_cells),
        "parity": _unpack_sparse(kept["parity"], g.r * g.blocks),
        "inner": {int(block): set(map(int, strips)) for block, strips in kept["inner"]},
        "faulty": [(int(start), int(stop)) for start, stop in kept["faulty"]],
        "body_unreadable": {int(start): int(count) for start, count in kept["body_unreadable"]},
    }
    if not (0 <= made["looked_to"] <= g.cells_end and made["body_done"] >= 0):
        raise ValueError("there is no such place")
    if not all(0 <= start < stop <= g.length for start, stop in made["faulty"]):
        raise ValueError("there are no such bytes")
    if not all(
        0 <= block < g.blocks and strips <= set(range(g.n)) for block, strips in made["inner"].items()
    ):
        raise ValueError("there are no such cells")
    return made


def _restore(window: WindowCheck, kept: dict[str, Any]) -> None:
    window.looked_to, window.body_done = kept["looked_to"], kept["body_done"]
    window.digests = kept["digests"]
    window.data[:] = kept["data"]
    window.parity.reshape(-1)[:] = kept["parity"]
    window.inner_suspects = kept["inner"]
    window.faulty = kept["faulty"]
    window.body_unreadable = kept["body_unreadable"]


def _pack(window: WindowCheck, digests: Sequence[bytes]) -> dict[str, Any]:
    return {
        "looked_to": window.looked_to,
        "body_done": window.body_done,
        "digests": pack_digests(digests),
        "data": _pack_sparse(window.data),
        "parity": _pack_sparse(window.parity.reshape(-1)),
        "inner": [[block, sorted(strips)] for block, strips in sorted(window.inner_suspects.items())],
        "faulty": [[start, stop] for start, stop in window.faulty if start < window.looked_to],
        "body_unreadable": sorted(window.body_unreadable.items()),
    }


def _pack_sparse(states: NDArray[np.uint8]) -> list[str]:
    """Where states are not zero, and what they are. Threads are still at work on them: hence the copy."""
    states = states.copy()
    places = np.flatnonzero(states)
    return [pack(places.astype("<i8").tobytes()), pack(states[places].tobytes())]


def _unpack_sparse(content: Sequence[str], count: int) -> NDArray[np.uint8]:
    """The opposite, uint8[count]. Raises ValueError for places that are not there and unknown states."""
    places, values = (
        np.frombuffer(unpack(text), kind) for text, kind in zip(content, ("<i8", "u1"), strict=True)
    )
    if len(places) != len(values) or (
        len(places) and (places.min() < 0 or places.max() >= count or values.max() > 2)
    ):
        raise ValueError("there are no such cells")
    states = np.zeros(count, np.uint8)
    states[places] = values
    return states
