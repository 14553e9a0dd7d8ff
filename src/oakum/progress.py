"""How a job tells what it is doing. Jobs never print; the command line decides what is shown."""

from typing import Protocol


class Progress(Protocol):
    """What a job reports while it runs. Methods may be called from one thread only, the job's own."""

    def phase(self, name: str, total: int | None) -> None:
        """A new phase begins, such as "reading"; `total` is its work in bytes, None where unknown."""

    def advance(self, nbytes: int) -> None:
        """`nbytes` more bytes of the current phase are done."""

    def note(self, text: str) -> None:
        """Something the user should know now, in one sentence (not an error)."""


class Silent:
    """A `Progress` that says nothing."""

    def phase(self, name: str, total: int | None) -> None:
        pass

    def advance(self, nbytes: int) -> None:
        pass

    def note(self, text: str) -> None:
        pass
