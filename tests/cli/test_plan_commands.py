"""`oakum plan` and `oakum rehearse` from the command line: options, documents, refusals."""

import json
import xml.etree.ElementTree as ET
from pathlib import Path

import pytest
from support import content

from oakum.cli.damage import parse_lengths, parse_share
from oakum.cli.running import run
from oakum.jobs.protect import protect

Captured = pytest.CaptureFixture[str]


def test_plan_prints_the_line_to_run(capfd: Captured) -> None:
    assert run(["plan", "--size", "10TB", "--flip-rate", "1e-4", "--years", "30"]) == 0
    out = capfd.readouterr().out
    assert "oakum protect --code" in out and "within 30 years" in out


def test_plan_as_a_document_with_a_chart(tmp_path: Path, capfd: Captured) -> None:
    chart = tmp_path / "loss.svg"
    arguments = ["plan", "--size", "1TB", "--medium", "disk", "--overhead", "25%", "--chart", str(chart)]
    assert run([*arguments, "--json"]) == 0
    document = json.loads(capfd.readouterr().out)
    assert document["size"] == 10**12 and document["budget"] == 0.25
    assert all(c["code"]["overhead"] <= 0.25 for c in document["frontier"])
    assert {figure["mark"] for figure in document["assumptions"]} >= {"published", "second-hand", "assumed"}
    assert ET.parse(chart).getroot().tag.endswith("svg")


def test_a_chart_that_cannot_be_written(tmp_path: Path, capfd: Captured) -> None:
    chart = tmp_path / "none" / "loss.svg"
    assert run(["plan", "--size", "1TB", "--flip-rate", "1e-5", "--chart", str(chart)]) == 30
    assert "could not be written" in capfd.readouterr().err


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        (["--flip-rate", "0.7"], "from 0 to 0.5"),
        (["--flip-rate", "1e-4", "--years", "-2"], "no period"),
        (["--years", "30"], "a period needs a rate"),
        (["--flip-rate", "1e-4", "--overhead", "1%"], "weakest code"),
        (["--burst-length", "long"], "not a size"),
        (["--burst-length", "4K:much"], "no burst length"),
        (["--lost-share", "some"], "no share"),
        (["--flip-rate", "nan"], "from 0 to 0.5"),
        (["--flip-rate", "1e-4", "--depth", "5000"], "a depth of 5000"),
    ],
)
def test_one_sentence_for_what_makes_no_sense(arguments: list[str], sentence: str, capfd: Captured) -> None:
    assert run(["plan", "--size", "1TB", *arguments]) == 2
    captured = capfd.readouterr()
    assert captured.out == ""
    assert sentence in captured.err and captured.err.count("\n") == 1


def test_rehearse(tmp_path: Path, capfd: Captured) -> None:
    path = tmp_path / "x"
    path.write_bytes(content(100_000))
    protect([path])
    arguments = ["rehearse", str(path), "--burst-length", "2K", "--trials", "3", "--seed", "4"]
    assert run(arguments) == 0
    assert "Everything came back whole in 3 of 3 trials." in capfd.readouterr().out
    assert run([*arguments, "--json", "--quiet"]) == 0
    document = json.loads(capfd.readouterr().out)
    assert document["survived"] == 3 and document["seed"] == 4 and document["limit"] is None
    assert run(["rehearse", str(path), "--find-limit", "--bursts", "1", "--json", "--quiet"]) == 0
    document = json.loads(capfd.readouterr().out)
    assert document["limit"]["quantity"] == "burst length" and document["trials"] == []


def test_rehearse_without_a_sidecar(tmp_path: Path, capfd: Captured) -> None:
    (tmp_path / "x").write_bytes(content(1000))
    assert run(["rehearse", str(tmp_path / "x"), "--flip-rate", "1e-4"]) == 30
    assert "oakum protect" in capfd.readouterr().err


def test_lengths_and_shares() -> None:
    assert parse_lengths("512:0.25,64K:0.75") == ((512, 0.25), (65536, 0.75))
    assert parse_lengths("4k") == ((4096, 1.0),)
    assert parse_lengths(None) is None
    assert parse_share("25%") == parse_share("0.25") == parse_share(0.25) == 0.25
