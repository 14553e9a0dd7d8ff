"""What each command hands to its job, writes, and ends with."""

import json
import sys
from pathlib import Path

import pytest
from faked_jobs import RESULTS, Oakum, check_result

from oakum.errors import CannotCheck, FormatError, OakumError, UsageError
from oakum.progress import Silent
from oakum.results import Outcome
from oakum.throttle import Throttle, current

MIB = 1 << 20


def test_protect_hands_over_everything(oakum: Oakum) -> None:
    call = oakum(
        *"protect a b --output s.oakum --code stout --depth 64K --overwrite --read-back".split(),
        *"--fresh --memory 1GiB --jobs 3 --quiet".split(),
    )
    assert (call.status, call.out, call.err) == (0, "", "")
    assert call.arguments == ([Path("a"), Path("b")],)
    assert isinstance(call.options.pop("progress"), Silent)
    assert call.options == {
        "output": Path("s.oakum"),
        "code": "stout",
        "depth": 65_536,
        "overwrite": True,
        "read_back": True,
        "bag": False,
        "fresh": True,
        "memory": 1024 * MIB,
        "jobs": 3,
    }


def test_protect_defaults(oakum: Oakum) -> None:
    call = oakum("protect", "x.tar")
    assert call.out.startswith("x.tar.oakum now protects 1 member")
    del call.options["progress"]
    assert call.options == {
        "output": None,
        "code": "shelf",
        "depth": None,
        "overwrite": False,
        "read_back": False,
        "bag": False,
        "fresh": False,
        "memory": 384 * MIB,
        "jobs": None,
    }
    assert oakum("protect", "x.tar", "--depth", "whole").options["depth"] is None


def test_a_pipe(oakum: Oakum) -> None:
    call = oakum("protect", "-", "--name", "b.tar")
    assert call.arguments == (sys.stdin.buffer,)
    assert call.options["name"] == "b.tar"
    assert call.options["output"] == Path("b.tar.oakum")
    assert call.options["depth"] == MIB
    assert "read_back" not in call.options


def test_a_sidecar_to_standard_output_leaves_it_clean(oakum: Oakum) -> None:
    def writes(**options: object) -> object:
        sys.stdout.buffer.write(b"the sidecar")
        sys.stdout.flush()
        return RESULTS["protect"]

    call = oakum("protect", "-", "--name", "b.tar", "--output", "-", result=writes)
    assert call.out == "the sidecar"
    assert "now protects" in call.err


@pytest.mark.parametrize(
    "arguments",
    [
        "protect",
        "protect - x",
        "protect -",
        "protect - --name n --depth whole",
        "protect - --name n --read-back",
        "protect - --name n --json --output -",
        "protect x --name n",
        "protect x --output -",
        "protect x --depth deep",
        "verify",
        "verify x y",
        "verify x --memory 1Q",
        "verify x --jobs 0",
        "verify x --no-such-option",
        "describe x --json --digests",
        "no-such-command",
        "",
    ],
)
def test_wrong_usage_is_one_sentence_and_status_2(oakum: Oakum, arguments: str) -> None:
    call = oakum(*arguments.split())
    assert call.status == 2
    assert call.out == ""
    assert call.err.startswith("oakum: ") and call.err.count("\n") == 1
    assert call.err[7].islower() or not call.err[7].isalpha()
    assert not call.err.rstrip("\n").endswith(".")


@pytest.mark.parametrize(
    ("command", "outcome", "status"),
    [
        ("verify", Outcome.INTACT, 0),
        ("verify", Outcome.CORRECTABLE, 10),
        ("verify", Outcome.UNCORRECTABLE, 20),
        ("verify", Outcome.UNCHECKED, 30),
        ("repair", Outcome.INTACT, 0),
        ("repair", Outcome.CORRECTABLE, 0),
        ("repair", Outcome.UNCORRECTABLE, 20),
    ],
)
def test_exit_status_follows_the_outcome(oakum: Oakum, command: str, outcome: Outcome, status: int) -> None:
    assert oakum(command, "x.tar", result=check_result(command, outcome)).status == status


def test_verify_hands_over_everything(oakum: Oakum) -> None:
    call = oakum(
        *"verify x.tar --sidecar s --root r --digests-only --unreadable u.csv".split(),
        *"--memory 64M --fresh -j 1 -q".split(),
    )
    assert call.arguments == (Path("x.tar"),)
    del call.options["progress"]
    assert call.options == {
        "sidecar": Path("s"),
        "root": Path("r"),
        "digests_only": True,
        "unreadable": Path("u.csv"),
        "fresh": True,
        "memory": 64 * MIB,
        "jobs": 1,
    }


def test_repair_hands_over_everything(oakum: Oakum) -> None:
    call = oakum(
        *"repair x.tar -o out -m p/a -m p/b --accept-loss --sidecar s --root r --unreadable u".split()
    )
    del call.options["progress"]
    assert call.options == {
        "output": Path("out"),
        "in_place": False,
        "even_newer": False,
        "members": ("p/a", "p/b"),
        "accept_loss": True,
        "sidecar": Path("s"),
        "root": Path("r"),
        "unreadable": Path("u"),
        "memory": 384 * MIB,
        "jobs": None,
    }


@pytest.mark.parametrize("command", ["protect", "verify", "repair", "describe"])
def test_json_is_one_document(oakum: Oakum, command: str) -> None:
    call = oakum(command, "x.tar", "--json")
    document = json.loads(call.out)
    assert (document["schema"], document["command"]) == ("oakum/1", command)


@pytest.mark.parametrize("command", ["verify", "repair"])
def test_what_could_not_be_checked_has_a_document_too(oakum: Oakum, command: str) -> None:
    call = oakum(command, "x.tar", "--json", result=CannotCheck("x.tar has no sidecar"))
    assert call.status == 30
    assert json.loads(call.out)["outcome"] == "unchecked"
    assert json.loads(call.out)["error"] == "x.tar has no sidecar"
    assert call.err == "oakum: x.tar has no sidecar\n"


@pytest.mark.parametrize(
    ("error", "status"),
    [
        (UsageError("there is no code called x"), 2),
        (CannotCheck("no sidecar"), 30),
        (FormatError("not a sidecar"), 30),
        (OakumError("something else"), 30),
        (PermissionError(13, "Permission denied", "x.tar"), 30),
        (MemoryError(), 30),
        (KeyError("x"), 1),
    ],
)
def test_errors_are_one_sentence(oakum: Oakum, error: Exception, status: int) -> None:
    call = oakum("verify", "x.tar", result=error)
    assert call.status == status
    assert call.err.startswith("oakum: ") and call.err.count("\n") == 1
    assert "Traceback" not in call.err


def test_a_fault_of_ours_shows_its_place_when_asked(oakum: Oakum, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("OAKUM_DEBUG", "1")
    call = oakum("verify", "x.tar", result=KeyError("x"))
    assert call.status == 1
    assert "Traceback" in call.err


def test_an_error_cannot_reach_the_terminal(oakum: Oakum) -> None:
    call = oakum("verify", "x.tar", result=CannotCheck("\x1b[2Jname\nnext"))
    assert call.err == "oakum: \\x1b[2Jname\\x0anext\n"


def test_quiet_says_nothing(oakum: Oakum) -> None:
    for command in ("protect", "verify", "repair"):
        call = oakum(command, "x.tar", "--quiet")
        assert (call.out, call.err) == ("", "")


def test_describe(oakum: Oakum) -> None:
    assert oakum("describe", "x.tar.oakum").out.startswith("x.tar.oakum protects 1 file")
    call = oakum("describe", "x.tar.oakum", "--digests")
    assert call.out == "0" * 64 + "  x.tar\n"
    assert call.err == "oakum: a note of the sidecar\n"


def test_every_command_takes_what_all_take(oakum: Oakum) -> None:
    for command in ("protect", "verify", "repair", "describe"):
        assert oakum(command, "x", "--json", "--quiet", "--memory", "1M", "--jobs", "2").status == 0
        help_text = oakum(command, "--help").out
        assert all(option in help_text for option in ("--json", "--quiet", "--memory", "--jobs"))


@pytest.mark.parametrize("command", ["protect", "verify", "repair"])
@pytest.mark.parametrize("text, rate", [("5M", 5 << 20), ("20MB", 20_000_000)])
def test_the_read_rate_holds_for_the_job(oakum: Oakum, command: str, text: str, rate: int) -> None:
    limits: list[Throttle | None] = []

    def job(**_: object) -> object:
        limits.append(current.get())
        return RESULTS[command]

    assert oakum(command, "x", "--read-rate", text, result=job).status == 0
    assert [limit.rate for limit in limits if limit] == [rate]
    assert current.get() is None


def test_nothing_can_be_read_at_no_rate(oakum: Oakum) -> None:
    call = oakum("verify", "x", "--read-rate", "0")
    assert call.status == 2
    assert "rate of 0" in call.err
