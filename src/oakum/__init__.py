"""Oakum keeps archived files whole: parity beside them finds flipped bits years later and puts them right.

The functions here are the commands without their looks: they return records (`oakum.results`), report
progress to an object that the caller gives, print nothing, and raise `OakumError` with one plain sentence.
They are imported when first used, so that importing the package costs nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

from oakum.errors import CannotCheck, FormatError, OakumError, UsageError

if TYPE_CHECKING:
    from oakum.jobs.audit import AuditOptions, audit
    from oakum.jobs.damage import Wishes
    from oakum.jobs.describe import describe
    from oakum.jobs.history import history
    from oakum.jobs.pipe import protect_pipe
    from oakum.jobs.plan import plan
    from oakum.jobs.protect import protect
    from oakum.jobs.rehearse import rehearse
    from oakum.jobs.repair import repair, roll_back
    from oakum.jobs.verify import verify
    from oakum.throttle import reading_at

__version__ = "0.1.0"

_LAZY = {
    "AuditOptions": "oakum.jobs.audit",
    "Wishes": "oakum.jobs.damage",
    "audit": "oakum.jobs.audit",
    "history": "oakum.jobs.history",
    "describe": "oakum.jobs.describe",
    "plan": "oakum.jobs.plan",
    "protect": "oakum.jobs.protect",
    "protect_pipe": "oakum.jobs.pipe",
    "reading_at": "oakum.throttle",
    "rehearse": "oakum.jobs.rehearse",
    "repair": "oakum.jobs.repair",
    "roll_back": "oakum.jobs.repair",
    "verify": "oakum.jobs.verify",
}

__all__ = [
    "AuditOptions", "CannotCheck", "FormatError", "OakumError", "UsageError", "Wishes", "__version__",
    "audit", "describe", "history", "plan", "protect", "protect_pipe", "reading_at", "rehearse", "repair",
    "roll_back", "verify",
]  # fmt: skip


def __getattr__(name: str) -> Any:
    if name in _LAZY:
        return getattr(import_module(_LAZY[name]), name)
    raise AttributeError(f"module 'oakum' has no attribute {name!r}")
