"""Which instructions a kernel may use: GFNI, byte shuffles, or none in particular.

A *tier* is one way to multiply many bytes by constants of GF(2^8):

- ``gfni``: the affine byte-matrix instruction, on 256-bit vectors (x86-64 with GFNI and AVX2);
- ``shuffle``: two nibble tables looked up by a byte shuffle (AVX2, SSSE3, NEON);
- ``portable``: tables of multiples and XOR, in code that runs on any CPU.

All give the same bytes. The best one that the CPU has is taken; the environment variable
OAKUM_KERNEL_TIER forces another.
"""

from __future__ import annotations

import os
from functools import cache

from oakum.errors import UsageError
from oakum.kernels import store

TIERS = ("gfni", "shuffle", "portable")
"""All tiers, best first."""

ENVIRONMENT_VARIABLE = "OAKUM_KERNEL_TIER"


@cache
def target() -> tuple[str, str, str]:
    """LLVM triple, CPU name and feature string that numba compiles for.

    These are what counts, not the CPU's own word: NUMBA_CPU_NAME and NUMBA_CPU_FEATURES may have taken
    features away, and an instruction outside them would end the process instead of raising.
    """
    if kept := store.load("target"):  # To ask numba takes longer than many a job.
        triple, name, features = kept.decode().split("\n")
        return triple, name, features
    from numba.core.registry import cpu_target

    triple, name, features = map(str, cpu_target.target_context.codegen().magic_tuple())
    store.save("target", "\n".join((triple, name, features)).encode())
    return triple, name, features


def target_features() -> frozenset[str]:
    """The features, by LLVM's names, that compiled code may use."""
    triple, _, features = target()
    enabled = {feature[1:] for feature in features.split(",") if feature.startswith("+")}
    if triple.startswith(("aarch64", "arm64")):
        enabled.add("neon")  # part of the architecture, whatever the feature string says
    return frozenset(enabled)


def available_tiers() -> tuple[str, ...]:
    """The tiers that compiled code may use on this CPU, best first; ``portable`` is always among them."""
    features = target_features()
    found = []
    if {"gfni", "avx2"} <= features:
        found.append("gfni")
    if features & {"avx2", "ssse3", "neon"}:
        found.append("shuffle")
    found.append("portable")
    return tuple(found)


def check_tier(tier: str) -> str:
    """`tier` itself if it can be used here. Raises UsageError if it is unknown or the CPU lacks it."""
    available = available_tiers()
    if tier in available:
        return tier
    what = "cannot be used on this CPU" if tier in TIERS else "is unknown"
    raise UsageError(f"the kernel tier {tier!r} {what}; here one can have {', '.join(available)}")


def current_tier() -> str:
    """The tier that OAKUM_KERNEL_TIER names, else the best one. Raises UsageError as `check_tier` does."""
    forced = os.environ.get(ENVIRONMENT_VARIABLE, "").strip()
    return check_tier(forced) if forced else available_tiers()[0]
