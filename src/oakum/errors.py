"""The errors that reach a user: one plain sentence each, and the exit status that goes with it."""


class OakumError(Exception):
    """What happened and what to do next, in one sentence; `status` is the exit status.

    Anything else that escapes a job is a fault of the program itself (status 1).
    """

    status = 30


class UsageError(OakumError):
    """The request itself is wrong: an unknown code, a depth of zero, an output that exists."""

    status = 2


class CannotCheck(OakumError):
    """Nothing could be said about the files: no sidecar, not readable, no space."""


class FormatError(CannotCheck):
    """The bytes at hand are not a sidecar that this version reads."""
