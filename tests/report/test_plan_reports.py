"""What plan and rehearse say, in words, as a chart, as SVG and as JSON."""

import json
import xml.etree.ElementTree as ET
from dataclasses import replace
from math import exp, inf, log
from pathlib import Path

import pytest

from oakum.report.chances import between, chance, log10
from oakum.report.chart import HEIGHT, WIDTH, Scales, chart_lines, points
from oakum.report.json import dump
from oakum.report.plan_json import plan_document, rehearsal_document
from oakum.report.svg import chart_svg
from oakum.report.text import plan_text, rehearsal_text
from oakum.results import (
    Assumption,
    Candidate,
    CodeSummary,
    Curve,
    Limit,
    Loss,
    PlanResult,
    RehearsalResult,
    Trial,
)

SLIM = CodeSummary("slim", (255, 239), (128, 120, 4), 0.138, 33)
SHELF = CodeSummary("shelf", (255, 223), (128, 120, 4), 0.2197, 65)
LOW, HIGH = log(1e-20), log(3e-19)
LOSS = Loss(log(1e-29), (LOW, LOW), (LOW, HIGH))
CANDIDATES = tuple(Candidate(code, "RS", 4096, 8 << 20, LOSS, LOSS, log(1e-40)) for code in (SLIM, SHELF))
RATES = (1e-5, 1e-4, 1e-3, 1e-2)
CURVES = (
    Curve("slim", RATES, (-1000.0, log(1e-25), log(1e-9), 0.0)),
    Curve("shelf", RATES, (-inf, -inf, log(1e-28), 0.0)),
)
PLAN = PlanResult(
    Path("plates"), 10**13, 30.0, 1e-9, None, (Assumption("a rate", "the command\x1b[2J line", "given"),),
    CANDIDATES, CANDIDATES[0], True, "oakum protect --code slim plates", CURVES, 3e-4,
)  # fmt: skip
TRIALS = (
    Trial(0, True, True, 12_345, 0, 7, 0, 0.61),
    Trial(1, False, False, 9, 512, 8, 1, None, "1 of the files could not be put right"),
)
REHEARSAL = RehearsalResult(
    Path("plates"), SHELF, 67_108_864, 74, 11, PLAN.assumptions, TRIALS, 0.95, (0.0126, 0.9874),
    Loss(log(0.4), (log(0.4), log(0.5)), (log(0.4), log(0.6))),
)  # fmt: skip


@pytest.mark.parametrize(
    ("value", "shown"),
    [
        (-inf, "never"),
        (0.0, "100 %"),
        (log(0.37), "37 %"),
        (log(0.0123), "1.2 %"),
        (log(0.0057), "5.7e-3"),
        (log(9.97e-31), "1.0e-30"),
        (-489 * log(10) + log(3.14), "3.1e-489"),
    ],
)
def test_chances_as_people_read_them(value: float, shown: str) -> None:
    assert chance(value) == shown


def test_bounds_that_read_the_same_are_one() -> None:
    assert between((log(1e-9), log(1.01e-9))) == "1.0e-9"
    assert between((LOW, HIGH)) == "1.0e-20 to 3.0e-19"


def test_json_has_no_infinity() -> None:
    assert log10(-inf) is None
    assert log10(log(1e-30)) == -30


def test_the_recommendation_comes_first_with_its_reason_and_line() -> None:
    lines = plan_text(PLAN).splitlines()
    lead = " ".join(lines[:3])
    assert lead.startswith("Take slim, RS(255,239) with the inner code [128,120,4], overhead 13.8 %")
    assert "below 1.0e-9" in lead and "10.0 TB within 30 years" in lead
    assert "  oakum protect --code slim plates" in lines
    assert "8.39 MB" in plan_text(PLAN)


def test_a_target_that_no_code_reaches_is_said() -> None:
    text = " ".join(plan_text(replace(PLAN, reached=False, budget=0.14)).split())
    assert text.startswith("No code tried within an overhead of 14.0 % keeps the chance")


def test_no_line_is_given_to_run_where_loss_is_certain() -> None:
    lost = replace(CANDIDATES[0], period=Loss(0.0, (0.0, 0.0), (0.0, 0.0)))
    text = plan_text(replace(PLAN, reached=False, recommended=lost))
    assert "comes nearest (at most 100 %)" in " ".join(text.split())
    assert "oakum protect" not in text


def test_terminal_codes_never_reach_a_terminal() -> None:
    assert "\x1b" not in plan_text(PLAN)
    assert "\x1b" not in dump(plan_document(PLAN))


def test_every_figure_is_shown_with_source_and_mark() -> None:
    assert "- a rate (the command" in plan_text(PLAN) and "given)" in plan_text(PLAN)


def test_long_figures_keep_within_the_line_and_percent_signs_with_their_numbers() -> None:
    figure = Assumption("figures " + "99 % " * 40, "a source", "given")
    lines = plan_text(replace(PLAN, assumptions=(figure,))).splitlines()
    assert max(map(len, lines)) <= 79
    assert not any(line.endswith("99") or line.lstrip().startswith("%") for line in lines)
    bullet = next(i for i, line in enumerate(lines) if line.startswith("  - figures"))
    assert lines[bullet + 1].startswith("    99 %")


def test_the_chart_goes_where_the_curves_go() -> None:
    lines = chart_lines(CURVES, 3e-4)
    grid = [line[10:].ljust(WIDTH) for line in lines[:HEIGHT]]
    assert grid[0].rstrip().endswith("a")  # a loss of 1 at the right
    # The slim curve passes 1e-9 at 1e-3, two thirds of the way.
    row = round(9 / 30 * (HEIGHT - 1))
    assert grid[row][round(2 / 3 * (WIDTH - 1))] == "a"
    assert not any("b" in line[: WIDTH // 2] for line in grid)
    assert all(":" in line or "a" in line for line in grid)
    assert lines[-1].strip().startswith("a slim, b shelf; the dotted line")
    assert all(len(line) <= 79 for line in lines)


def test_curves_leave_at_the_bottom() -> None:
    found = points(CURVES[0], Scales.of(CURVES))
    assert found[0][1] == 0.0 and found[-1] == (1.0, 1.0)
    assert all(0 <= x <= 1 and 0 <= y <= 1 for x, y in found)


def test_the_picture_is_sound_and_says_what_it_shows() -> None:
    root = ET.fromstring(chart_svg(CURVES, 3e-4, "Loss <1> & more"))
    space = "{http://www.w3.org/2000/svg}"
    assert root.tag == f"{space}svg"
    assert root.find(f"{space}title").text == "Loss <1> & more"
    texts = {element.text for element in root.iter(f"{space}text")}
    assert {"slim", "shelf", "1e-30", "1e-3", "planned: 0.0003", "chance of a bit to differ"} <= texts
    # A curve and its key each, and the second is told apart by dashes.
    curves = [e for e in root.iter(f"{space}path") if e.get("class") == "curve"]
    assert len(curves) == 4
    assert [e.get("stroke-dasharray") is None for e in curves] == [True, True, False, False]


def test_the_rehearsal_says_how_many_came_back_beside_what_was_predicted() -> None:
    text = " ".join(rehearsal_text(REHEARSAL).split())
    assert text.startswith("Everything came back whole in 1 of 2 trials.")
    assert "kept 61 % of its margin" in text
    assert "between 1.3 % and 98.7 % (exact 95 % interval)" in text
    assert "Predicted chance of loss: 40 % to 60 %." in text
    assert "outside the interval" not in text
    assert "In 1 trial: 1 of the files could not be put right." in text
    assert "Seed 11 repeats this run exactly" in text


@pytest.mark.parametrize(
    ("measured", "sentence"),
    [
        (None, "at most 60 % in one pass of the decoder; feedback saves more."),
        (log(0.55), "at most 55 %, as far as the decoder was measured."),
        (log(0.9), "at most 60 % in one pass of the decoder; feedback saves more."),
    ],
)
def test_under_flips_a_prediction_is_an_upper_limit(measured: float | None, sentence: str) -> None:
    """Nothing says how much feedback saves at the least: less loss than in one pass is no surprise."""
    loss = Loss(0.0, (log(0.999), 0.0), (log(0.999), log(0.6)), measured)
    text = " ".join(rehearsal_text(replace(REHEARSAL, predicted=loss, flip_rate=1e-2)).split())
    assert f"Predicted chance of loss: {sentence}" in text
    assert "outside the interval" not in text


def test_a_prediction_that_does_not_hold_is_said() -> None:
    sure = replace(REHEARSAL, predicted=Loss(-50.0, (-50.0, -50.0), (-50.0, -50.0)))
    assert "outside the interval" in " ".join(rehearsal_text(sure).split())


@pytest.mark.parametrize(
    ("limit", "sentence"),
    [
        (
            Limit("flip rate", 0.0113, 0.0115, 9),
            "The first block was lost at a flip rate of 0.0115; 0.0113 was",
        ),
        (Limit("burst length", None, 4096.0, 3), "nothing below it was survived"),
        (Limit("burst length", 70_000.0, None, 5), "No block was lost up to a burst length of 70.0 kB"),
    ],
)
def test_limits(limit: Limit, sentence: str) -> None:
    result = replace(REHEARSAL, limit=limit, trials=(), interval=None, predicted=None)
    assert sentence in " ".join(rehearsal_text(result).split())
    assert rehearsal_document(result)["limit"]["quantity"] == limit.quantity


def test_documents_can_be_read_back() -> None:
    plan = json.loads(dump(plan_document(PLAN)))
    assert plan["command"] == "plan" and plan["recommended"] == "RS"
    assert plan["frontier"][0]["period"]["stream"]["at_most"]["log10"] == pytest.approx(-18.522879)
    assert plan["frontier"][0]["period"]["measured_at_most"] is None
    assert plan["curves"][1]["points"][0] == [1e-5, None]
    rehearsed = json.loads(dump(rehearsal_document(REHEARSAL)))
    assert rehearsed["survived"] == 1 and rehearsed["interval"]["level"] == 0.95
    assert rehearsed["trials"][1]["margin"] is None
    assert rehearsed["predicted"]["column"]["value"] == pytest.approx(exp(log(0.4)))
