"""How far a `protect` has come: what its state file holds (see `oakum.jobs.resuming`)."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

from oakum.encoding import Leg
from oakum.files import NewFile
from oakum.jobs.resuming import State, pack, pack_digests, unpack, unpack_digests
from oakum.sidecar.layout import Track


@dataclass(frozen=True)
class Halfway:
    """The sections before `window` are written; of that one, what `legs` says (None: nothing)."""

    window: int = 0
    place: int = 0
    first: bytes = bytes(16)
    parent: bytes = bytes(16)
    """The identities of the first section and of the last one before `window`."""

    digests: Sequence[bytes] = ()
    """SHA-256 of the pieces of `window` that end before the first leg's place."""

    legs: tuple[Leg, Leg] | None = None

    def pack(self) -> dict[str, Any]:
        """As JSON holds it."""
        return {
            "window": self.window,
            "place": self.place,
            "identities": [self.first.hex(), self.parent.hex()],
            "digests": pack_digests(self.digests),
            "legs": None if self.legs is None else [_pack_leg(leg) for leg in self.legs],
        }

    @staticmethod
    def unpack(content: dict[str, Any]) -> Halfway:
        """The opposite. Raises KeyError, TypeError or ValueError for anything else."""
        first, parent = map(bytes.fromhex, content["identities"])
        legs = content["legs"]
        if legs is not None:
            one, two = map(_unpack_leg, legs)
            legs = one, two
        return Halfway(
            int(content["window"]),
            int(content["place"]),
            first,
            parent,
            tuple(unpack_digests(content["digests"])),
            legs,
        )


class Keeper:
    """Keeps the unfinished sidecar and the state that belongs to it, when it is time."""

    def __init__(self, file: NewFile, state: State) -> None:
        self._file = file
        self._state = state

    def keep(self, halfway: Callable[[], Halfway]) -> None:
        """Note how far the run has come, if the last note is old enough."""
        if not self._state.due:
            return
        content = halfway().pack()
        self._file.sync()
        self._file.keep = True  # before there is a state that speaks of it: a signal may come any time
        try:
            self._state.save(content)
        finally:
            self._file.keep = self._state.there


def _pack_leg(leg: Leg) -> list[Any]:
    kept = {track.name: [laid, pack(pending)] for track, (laid, pending) in leg.kept.items()}
    return [leg.at, leg.sum, kept, pack(leg.rest)]


def _unpack_leg(content: list[Any]) -> Leg:
    at, total, kept, rest = content
    tracks = {Track[name]: (int(laid), unpack(pending)) for name, (laid, pending) in kept.items()}
    return Leg(int(at), int(total), tracks, unpack(rest))
