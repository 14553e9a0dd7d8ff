"""What plan and rehearse are told about the damage: a preset of a medium, and figures that override it."""

from __future__ import annotations

from dataclasses import dataclass, replace

from oakum.channel import MEDIA, Channel, Runs, medium_named
from oakum.errors import UsageError
from oakum.report.units import size
from oakum.results import Assumption

GIVEN = "given"
SECTOR = 4096
BURST = 64 << 10
CLUSTER_WITHIN = 100
"""Sectors within which those of a cluster lie."""

Lengths = tuple[tuple[int, float], ...]
