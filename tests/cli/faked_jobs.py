"""Jobs that answer at once, results built by hand, and a way to call the command line in this process."""

import importlib
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

from oakum.cli.running import run
from oakum.results import (
    CheckResult,
    CodeSummary,
    Description,
    MemberDescription,
    MemberReport,
    MemberState,
    Outcome,
    ProtectResult,
    SidecarReport,
    Totals,
)

SHELF = CodeSummary("shelf", (255, 223), (128, 120, 4), 0.2197, 65)


@dataclass
class Call:
    """What a command made of its arguments: exit status, both outputs, and the call of the job."""

    status: int
    out: str
    err: str
    arguments: tuple[Any, ...]
    options: dict[str, Any]


Oakum = Callable[..., Call]


def check_result(command: str, outcome: Outcome, target: Path = Path("x.tar")) -> CheckResult:
    state = MemberState.INTACT if outcome is Outcome.INTACT else MemberState.ALTERED
    return CheckResult(
        command,
        target,
        outcome,
        SHELF,
        Totals(bits_read=80, blocks=1, blocks_clean=1),
        (),
        (MemberReport("x.tar", 10, state, 0),),
        SidecarReport(Path("x.tar.oakum"), Outcome.INTACT, 0, 0),
    )


def description() -> Description:
    member = MemberDescription("x.tar", b"x.tar", "file", 10, bytes(32), 0, 0o644)
    return Description(
        Path("x.tar.oakum"), 1, "ab" * 16, SHELF, 10, 900, 64, 1, 1, 0, (member,), ("a note of the sidecar",)
    )


RESULTS = {
    "protect": ProtectResult(Path("x.tar.oakum"), SHELF, 1, 10, 900, 64, 1, 1, 0, 0.1),
    "verify": check_result("verify", Outcome.INTACT),
    "repair": check_result("repair", Outcome.INTACT),
    "describe": description(),
}


@pytest.fixture(name="oakum")
def oakum_fixture(monkeypatch: pytest.MonkeyPatch, capfdbinary: pytest.CaptureFixture[bytes]) -> Oakum:
    """Calls a command with its job replaced by one that returns, or raises, what `result` says."""

    def call(*arguments: str, result: object = None) -> Call:
        command = next((a for a in arguments if a in RESULTS), "describe")
        seen: list[tuple[tuple[Any, ...], dict[str, Any]]] = []

        def job(*args: Any, **options: Any) -> object:
            seen.append((args, options))
            answer = RESULTS[command] if result is None else result
            if isinstance(answer, BaseException):
                raise answer
            return answer(**options) if callable(answer) else answer

        module = importlib.import_module(f"oakum.jobs.{command}")
        monkeypatch.setattr(module, command, job)
        if command == "protect":
            monkeypatch.setattr(importlib.import_module("oakum.jobs.pipe"), "protect_pipe", job)
        status = run(arguments)
        captured = capfdbinary.readouterr()
        args, options = seen[0] if seen else ((), {})
        return Call(status, captured.out.decode(), captured.err.decode(), args, options)

    return call
