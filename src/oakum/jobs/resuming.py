"""What a long run leaves behind when it is interrupted, so that the next one goes on where it stopped.

Only sets of at least `LEAST` bytes keep a state, and it is written every `INTERVAL` seconds. It is a file of
one line, which names its kind and holds the SHA-256 of what follows, and a JSON document. Nothing in it is
trusted before that digest, and the key of the run that wrote it (a hash of everything that decides what the
run does: options, and what the system says of every file), have been compared; what does not fit is left
aside. It goes away when the run has come to its end.
"""

from __future__ import annotations

import base64
import hashlib
import json
import os
import time
import zlib
from collections.abc import Iterable, Iterator
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import Any

from oakum.errors import CannotCheck
from oakum.files import NewFile, let_go
from oakum.members import Folder

LEAST = 1 << 30
"""Bytes of a set from which on a state is kept: smaller ones are done again in seconds."""

INTERVAL = 30.0
"""Seconds between two states."""

SHARE = 50
"""A state is not written before so many times the time has passed that the last one took."""

SUFFIX = ".unfinished"

_HEAD = b"oakum state 1 "
_MOST = 1 << 30


class State:
    """The state file of one run."""

    def __init__(self, paths: Iterable[Path], key: str) -> None:
        """`paths`: where it may be; the first one that can be written is taken."""
        self._paths = list(paths)
        self.key = key
        self._due = time.monotonic() + INTERVAL

    def load(self) -> dict[str, Any] | None:
        """What an earlier run with the same key left; None where there is nothing of use."""
        for path in self._paths:
            content = _read(path)
            if content is not None and content.get("key") == self.key:
                return content
        return None

    @property
    def there(self) -> bool:
        """Whether there is any state, of use or not."""
        return any(os.path.lexists(path) for path in self._paths)

    @property
    def of_no_use(self) -> str:
        """A sentence about a state that does not fit this run."""
        (path, *_) = filter(os.path.lexists, self._paths)
        return f"{path} is what an interrupted run left, but files or options are others now; it was not used"

    @property
    def due(self) -> bool:
        """Whether it is time to write one."""
        return time.monotonic() >= self._due and bool(self._paths)

    def save(self, content: dict[str, Any]) -> None:
        """Write a state, at the first place where that can be done; with none of them, do without."""
        begin = time.monotonic()
        body = json.dumps({"key": self.key, **content}).encode()
        text = _HEAD + hashlib.sha256(body).hexdigest().encode() + b"\n" + body
        while self._paths:
            path = self._paths[0]
            try:
                path.parent.mkdir(mode=0o700, parents=True, exist_ok=True)
                with NewFile(path, overwrite=True) as file:
                    file.write(0, text)
                    file.commit(len(text), mode=0o600)
            except (CannotCheck, OSError):
                self._paths.pop(0)
            else:
                break
        now = time.monotonic()
        self._due = now + max(INTERVAL, SHARE * (now - begin))

    @contextmanager
    def needed(self) -> Iterator[None]:
        """Around a run: its state goes when the run ends by itself, and stays when it is interrupted."""
        try:
            yield
        except Exception:
            self.remove()
            raise
        self.remove()

    def remove(self) -> None:
        """Take it away, for good."""
        for path in filter(os.path.lexists, self._paths):
            with suppress(OSError):
                path.unlink()
                folder = os.open(path.parent, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)
                try:
                    os.fsync(folder)
                finally:
                    let_go(folder)


def _read(path: Path) -> dict[str, Any] | None:
    """The content of a state file; None where there is none or it is not whole."""
    try:
        with open(path, "rb", opener=_opener) as file:
            head, _, body = file.read(_MOST).partition(b"\n")
    except OSError:
        return None
    if head != _HEAD + hashlib.sha256(body).hexdigest().encode():
        return None
    content = json.loads(body)
    return content if isinstance(content, dict) else None


def _opener(path: str, flags: int) -> int:
    return os.open(path, flags | os.O_CLOEXEC | os.O_NOFOLLOW | os.O_NONBLOCK)


def beside(sidecar: Path) -> Path:
    """The state file beside a sidecar."""
    return sidecar.with_name(sidecar.name + SUFFIX)


def in_state_folder(sidecar: Path) -> Path | None:
    """The state file of a sidecar in the user's folder for such, where there is one."""
    configured = os.environ.get("XDG_STATE_HOME", "")
    try:
        base = Path(configured) if os.path.isabs(configured) else Path.home() / ".local" / "state"
    except RuntimeError:  # no home folder
        return None
    name = hashlib.sha256(os.fsencode(sidecar)).hexdigest()[:32]
    return base / "oakum" / (name + SUFFIX)


def key_of(folder: Folder, paths: Iterable[bytes], *facts: object) -> str:
    """The key of a run: its facts, and what the system says of each file now."""
    digest = hashlib.sha256(repr(facts).encode())
    for path in paths:
        try:
            found = folder.stat(path)
        except OSError as error:
            digest.update(b"%d %s\n" % (error.errno or 0, path))
        else:
            facts_of_file = (found.st_dev, found.st_ino, found.st_mode, found.st_size, found.st_mtime_ns)
            digest.update(b"%r %d %b\0" % (facts_of_file, found.st_ctime_ns, path))
    return digest.hexdigest()


def pack(data: bytes) -> str:
    """Bytes as JSON can hold them."""
    return base64.b64encode(zlib.compress(data, 1)).decode()


def unpack(text: str, most: int = _MOST) -> bytes:
    """The bytes of `pack`, at most `most`. Raises ValueError for anything else."""
    machine = zlib.decompressobj()
    try:
        data = machine.decompress(base64.b64decode(text, validate=True), most)
    except zlib.error as error:
        raise ValueError(str(error)) from None
    if not machine.eof:
        raise ValueError("too long")
    return data


def pack_digests(digests: Iterable[bytes]) -> str:
    return pack(b"".join(digests))


def unpack_digests(text: str) -> list[bytes]:
    data = unpack(text)
    return [data[i : i + 32] for i in range(0, len(data), 32)]
