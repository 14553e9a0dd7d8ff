"""Choosing a tier, and all kernels' tests over again with the features of other CPUs."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path
from types import SimpleNamespace

import pytest
from llvmlite import binding, ir
from tier_runs import ON_X86, gfni_environment, run_tests

from oakum.errors import UsageError
from oakum.kernels import stripmap_kernels, tiers

KERNEL_TESTS = ("test_stripmap.py", "test_words.py")
WHERE_SLOW = "not galois and not share"
"""What need not run again, and would take minutes with emulated instructions."""

SHOW = """
import ctypes, sys
from oakum.kernels import tiers
print(*tiers.available_tiers())
"""


def available_with(**environment: str) -> list[str]:
    """What `available_tiers` says in a process with these environment variables."""
    return subprocess.run(
        [sys.executable, "-c", SHOW],
        env={**os.environ, **environment},
        capture_output=True,
        text=True,
        check=True,
    ).stdout.split()


def with_features(features: str) -> dict[str, str]:
    return {**os.environ, "NUMBA_CPU_NAME": "generic", "NUMBA_CPU_FEATURES": features}


def test_best_available_tier_is_current(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv(tiers.ENVIRONMENT_VARIABLE, raising=False)
    available = tiers.available_tiers()
    assert available[-1] == "portable"
    assert tiers.current_tier() == available[0]
    assert [tier for tier in tiers.TIERS if tier in available] == list(available)


def test_environment_forces_a_tier(monkeypatch: pytest.MonkeyPatch) -> None:
    for tier in tiers.available_tiers():
        monkeypatch.setenv(tiers.ENVIRONMENT_VARIABLE, tier)
        assert tiers.current_tier() == tier


def test_unknown_and_unavailable_tiers_are_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv(tiers.ENVIRONMENT_VARIABLE, "abacus")
    with pytest.raises(UsageError, match=r"'abacus' is unknown.*portable"):
        tiers.current_tier()
    monkeypatch.setattr(tiers, "target", lambda: ("x86_64-unknown-linux-gnu", "generic", "+sse2"))
    monkeypatch.setenv(tiers.ENVIRONMENT_VARIABLE, "gfni")
    with pytest.raises(UsageError, match=r"'gfni' cannot be used on this CPU.*portable"):
        tiers.current_tier()


@pytest.mark.parametrize(
    ("triple", "features", "expected"),
    [
        ("x86_64-unknown-linux-gnu", "+64bit,+avx,+avx2,+gfni,+ssse3", ("gfni", "shuffle", "portable")),
        ("x86_64-unknown-linux-gnu", "+gfni,+ssse3,-avx2", ("shuffle", "portable")),
        ("x86_64-unknown-linux-gnu", "+sse2,-ssse3", ("portable",)),
        ("x86_64-unknown-linux-gnu", "", ("portable",)),
        ("aarch64-unknown-linux-gnu", "", ("shuffle", "portable")),
        ("arm64-apple-darwin23", "+aes", ("shuffle", "portable")),
        ("riscv64-unknown-linux-gnu", "+v", ("portable",)),
    ],
)
def test_features_decide(
    monkeypatch: pytest.MonkeyPatch, triple: str, features: str, expected: tuple[str, ...]
) -> None:
    monkeypatch.setattr(tiers, "target", lambda: (triple, "generic", features))
    assert tiers.available_tiers() == expected


@pytest.mark.skipif(not ON_X86, reason="names features of x86-64")
def test_numba_features_count_and_not_the_cpu() -> None:
    """Taking features away by NUMBA_CPU_FEATURES takes the tiers away that need them."""
    assert available_with(NUMBA_CPU_FEATURES="+sse2,+ssse3") == ["shuffle", "portable"]
    assert available_with(NUMBA_CPU_FEATURES="+sse2") == ["portable"]


def test_importing_tiers_imports_no_compiler() -> None:
    code = "import sys, oakum.kernels.tiers, oakum.kernels.compiling; print('numba' in sys.modules)"
    run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert run.stdout.strip() == "False"


@pytest.mark.skipif(not ON_X86, reason="names features of x86-64")
@pytest.mark.parametrize("features", ["+sse2", "+sse2,+sse3,+ssse3"], ids=["SSE2", "SSSE3"])
def test_kernels_on_older_cpus(features: str) -> None:
    """All that the kernels' tests say, with 128-bit vectors: portable alone, and by 16-byte shuffles."""
    run_tests(with_features(features), *KERNEL_TESTS, keyword=WHERE_SLOW)


def test_kernels_with_gfni(tmp_path: Path) -> None:
    """Emulated where the CPU lacks the instruction. Of these two files only the strip map has a gfni tier."""
    keyword = f"{WHERE_SLOW} and not every_length and not threads"
    run_tests(gfni_environment(tmp_path), "test_stripmap.py", keyword=keyword)


def test_gfni_tier_is_made_of_gfni_instructions(tmp_path: Path) -> None:
    """The kernel holds affine instructions on 256 bits and, without AVX-512, no register beyond VEX."""
    code = "from oakum.kernels.stripmap import KERNELS\nprint(KERNELS['gfni'].compiled().assembly())"
    environment = gfni_environment(tmp_path)
    run = subprocess.run(
        [sys.executable, "-c", code], env=environment, capture_output=True, text=True, check=True
    )
    affine = [line for line in run.stdout.splitlines() if "vgf2p8affineqb" in line]
    assert len(affine) >= 8 and all("%ymm" in line for line in affine)
    if "LD_PRELOAD" in environment:
        assert "%zmm" not in run.stdout and "%ymm16" not in run.stdout


def test_shuffle_tier_on_arm64_is_made_of_table_lookups(monkeypatch: pytest.MonkeyPatch) -> None:
    """What LLVM makes of the shuffle tile: 2 lookups for each of 4 rows and 4 vectors. It is not executed."""
    monkeypatch.setattr(tiers, "target", lambda: ("aarch64-unknown-linux-gnu", "generic", "+neon"))
    module = ir.Module()
    module.triple = "aarch64-unknown-linux-gnu"
    integers = [ir.IntType(64)] * 5
    function = ir.Function(module, ir.FunctionType(ir.VoidType(), integers), "tile")
    builder = ir.IRBuilder(function.append_basic_block())
    _, generate = stripmap_kernels.shuffle_tile._defn(None, *integers)
    generate(SimpleNamespace(get_dummy_value=lambda: None), builder, None, function.args)
    builder.ret_void()
    binding.initialize_all_targets()
    binding.initialize_all_asmprinters()
    try:
        machine = binding.Target.from_triple(module.triple).create_target_machine()
    except RuntimeError:
        pytest.skip("this llvmlite was built without arm64")
    assembly = machine.emit_assembly(binding.parse_assembly(str(module)))
    assert sum("\ttbl\t" in line for line in assembly.splitlines()) == 2 * 4 * 4
