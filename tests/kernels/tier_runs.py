"""Running tests as on other CPUs: fewer features, or GFNI by the emulator beside this file."""

from __future__ import annotations

import os
import platform
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

from oakum.kernels import tiers

HERE = Path(__file__).parent
ON_X86 = platform.machine().lower() in ("x86_64", "amd64")


def gfni_environment(folder: Path) -> dict[str, str]:
    """The environment in which Python has the gfni tier; skips the test where that cannot be had.

    On a CPU without GFNI an emulator is compiled into `folder` and preloaded.
    """
    if "gfni" in tiers.available_tiers():
        return {**os.environ, tiers.ENVIRONMENT_VARIABLE: "gfni"}
    compiler = shutil.which("cc")
    if not (ON_X86 and sys.platform == "linux" and compiler and "avx2" in tiers.target_features()):
        pytest.skip("needs GFNI, or Linux, AVX2 and a C compiler to emulate it")
    library = folder / "gfni_emulator.so"
    subprocess.run([compiler, "-O2", "-shared", "-fPIC", "-o", library, HERE / "gfni_emulator.c"], check=True)
    kept = [feature for feature in tiers.target()[2].split(",") if feature != "-gfni"]
    return {
        **os.environ,
        tiers.ENVIRONMENT_VARIABLE: "gfni",
        "LD_PRELOAD": str(library),
        "NUMBA_CPU_FEATURES": ",".join([*kept, "+gfni"]),
    }


def run_tests(environment: dict[str, str], *files: str, keyword: str = "") -> None:
    """Run test files of this folder in a process of their own; fails with their output.

    Without pytest's fault handler, which would take SIGILL away from the emulator.
    """
    arguments = ["-q", "-x", "-p", "no:faulthandler", "-p", "no:cacheprovider"]
    paths = [str(HERE / name) for name in files]
    run = subprocess.run(
        [sys.executable, "-m", "pytest", *arguments, *(["-k", keyword] if keyword else []), *paths],
        env=environment,
        capture_output=True,
        text=True,
        timeout=280,
        cwd=HERE.parent.parent,
    )
    assert run.returncode == 0, run.stdout + run.stderr
