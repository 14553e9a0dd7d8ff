"""Sidecars inside bags (BagIt, RFC 8493): tag files beside the payload, listed in the tag manifests.

The payload, `data/`, is never written to: a sidecar goes into the base folder of the bag. A tag file need
not be listed (section 2.2.1), but one that is listed and changed makes the bag invalid.
"""

from __future__ import annotations

import hashlib
import os
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from oakum.errors import CannotCheck, UsageError
from oakum.files import NewFile, reason
from oakum.jobs.common import SUFFIX

DECLARATION = "bagit.txt"
PAYLOAD = "data"
MOST_BYTES = 64 << 20
"""Of a tag manifest; a longer one is refused."""


@dataclass(frozen=True)
class Bag:
    """A bag, by its base folder."""

    base: Path

    @property
    def payload(self) -> Path:
        """The folder of what the bag holds."""
        return self.base / PAYLOAD

    def holds(self, path: Path) -> bool:
        """Whether a path is part of the payload."""
        return path.is_relative_to(self.payload)

    def tag_manifests(self) -> dict[Path, str]:
        """The tag manifests with their algorithms. Raises CannotCheck for one that is not known here."""
        found = {}
        for path in sorted(self.base.glob("tagmanifest-*.txt")):
            algorithm = path.stem.removeprefix("tagmanifest-").replace("-", "").lower()
            if algorithm not in hashlib.algorithms_available:
                raise CannotCheck(f"{path} uses a checksum that is not known here; do without --bag")
            found[path] = algorithm
        return found

    def lists(self, path: Path) -> bool:
        """Whether a tag manifest names a file of the bag."""
        name = self._name(path)
        return any(
            self._named(line) == name for manifest in self.tag_manifests() for line in _lines(manifest)
        )

    def enter(self, path: Path) -> None:
        """Put a file of the bag into all its tag manifests, in place of what they said of it.

        Each manifest is replaced as a whole. Raises CannotCheck when that fails.
        """
        for manifest, algorithm in self.tag_manifests().items():
            kept = [line for line in _lines(manifest) if self._named(line) != self._name(path)]
            kept.append(f"{_digest(path, algorithm)}  {self._name(path)}")
            content = "".join(f"{line}\n" for line in kept)
            raw = content.encode("utf-8", "surrogateescape")
            with NewFile(manifest, overwrite=True) as file:
                file.write(0, raw)
                file.commit(len(raw))

    def _name(self, path: Path) -> str:
        """The name of a file in a manifest: line ends and the sign that escapes them are escaped."""
        name = path.relative_to(self.base).as_posix()
        return name.replace("%", "%25").replace("\n", "%0A").replace("\r", "%0D")

    @staticmethod
    def _named(line: str) -> str:
        """What a line of a manifest names (some tools put a star before it)."""
        parts = line.split(maxsplit=1)
        return parts[1].lstrip("*") if len(parts) == 2 else ""


def bag_of(path: Path) -> Bag | None:
    """The innermost bag that a path is or lies in."""
    for folder in (path, *path.parents):
        if (folder / DECLARATION).is_file():
            return Bag(folder)
    return None


def into_bag(places: Sequence[Path], output: Path | None) -> tuple[Bag, list[Path], Path]:
    """For `protect --bag`: the bag, what is protected in it, and where the sidecar goes.

    A bag itself means its payload. Raises UsageError where the paths lie in no bag or in different ones.
    """
    bags = {bag_of(place) for place in places}
    bag = bags.pop() if len(bags) == 1 else None
    if bag is None:
        raise UsageError("--bag needs paths inside one bag, a folder with a file bagit.txt")
    inside = [bag.payload if place == bag.base else place for place in places]
    if output is None and len(inside) > 1:
        raise UsageError("several paths need --output to say where their sidecar goes")
    sidecar = output or bag.base / (inside[0].name + SUFFIX)
    if bag_of(sidecar.parent) != bag or bag.holds(sidecar):
        raise UsageError(f"with --bag the sidecar goes into {bag.base}, outside its payload")
    bag.tag_manifests()
    return bag, inside, sidecar


def refuse_in_bag(sidecar: Path) -> None:
    """Raises UsageError when a sidecar written without --bag would make a bag invalid."""
    bag = bag_of(sidecar.parent)
    if bag is None:
        return
    if bag.holds(sidecar):
        raise UsageError(
            f"{sidecar.name} would lie in the payload of the bag {bag.base}; "
            "give --bag to put it beside the payload"
        )
    if bag.lists(sidecar):
        raise UsageError(
            f"{sidecar.name} is listed in the tag manifests of {bag.base}; give --bag to keep them right"
        )


def _lines(manifest: Path) -> Iterator[str]:
    try:
        if manifest.stat().st_size > MOST_BYTES:
            raise CannotCheck(f"{manifest} is too large for a tag manifest")
        text = manifest.read_bytes().decode("utf-8", "surrogateescape")
    except OSError as error:
        raise CannotCheck(f"{manifest} cannot be read: {reason(error)}") from None
    yield from filter(str.strip, text.replace("\r\n", "\n").replace("\r", "\n").split("\n"))


def _digest(path: Path, algorithm: str) -> str:
    try:
        with path.open("rb") as file:
            return hashlib.file_digest(file, algorithm).hexdigest()
    except OSError as error:
        raise CannotCheck(f"{os.fspath(path)} cannot be read: {reason(error)}") from None
