"""The progress displays, with time in our hands."""

import io

import pytest
from rich.console import Console

from oakum.cli import progress
from oakum.cli.progress import Bar, Pace, TimedLine, reporting
from oakum.progress import Silent


class Clock:
    """A clock that stands until it is set."""

    now = 100.0

    def monotonic(self) -> float:
        return self.now


@pytest.fixture
def clock(monkeypatch: pytest.MonkeyPatch) -> Clock:
    clock = Clock()
    monkeypatch.setattr(progress, "time", clock)
    return clock


def test_pace_in_words(clock: Clock) -> None:
    pace = Pace(10_000_000)
    assert pace.words() == "0 %, 0 B of 10.0 MB"
    pace.done, clock.now = 2_500_000, 102.0
    assert pace.words() == "25 %, 2.50 MB of 10.0 MB, 1.25 MB/s, 6.0 s left"
    pace.done = 10_000_000
    assert pace.words() == "100 %, 10.0 MB of 10.0 MB, 5.00 MB/s"


def test_pace_without_a_known_end(clock: Clock) -> None:
    pace = Pace(None)
    pace.done, clock.now = 4_000_000, 102.0
    assert pace.words() == "4.00 MB, 2.00 MB/s"
    assert Pace(0).words() == "0 B"


def test_timed_lines_come_every_few_seconds(clock: Clock, capsys: pytest.CaptureFixture[str]) -> None:
    line = TimedLine()
    line.phase("reading \x1b", 1_000_000)
    for second in range(1, 12):
        clock.now = 100.0 + second
        line.advance(50_000)
    captured = capsys.readouterr()
    assert captured.out == ""
    assert captured.err.splitlines() == [
        "[5.0 s] reading \\x1b: 25 %, 250 kB of 1.00 MB, 50.0 kB/s, 15 s left",
        "[10 s] reading \\x1b: 50 %, 500 kB of 1.00 MB, 50.0 kB/s, 10 s left",
    ]


def test_a_short_run_writes_no_line(clock: Clock, capsys: pytest.CaptureFixture[str]) -> None:
    with reporting(quiet=False) as display:
        display.phase("reading", 10)
        display.advance(10)
    assert capsys.readouterr() == ("", "")


def test_notes_are_shown_at_once(capsys: pytest.CaptureFixture[str]) -> None:
    with reporting(quiet=False) as display:
        display.note("kernels are being compiled\x07")
    assert capsys.readouterr() == ("", "oakum: kernels are being compiled\\x07\n")


def test_quiet() -> None:
    with reporting(quiet=True) as display:
        assert isinstance(display, Silent)


def test_standard_error_may_be_gone(monkeypatch: pytest.MonkeyPatch, clock: Clock) -> None:
    closed = io.StringIO()
    closed.close()
    monkeypatch.setattr("sys.stderr", closed)
    line = TimedLine()
    clock.now += 10
    line.advance(1)


def test_the_bar_shows_brackets_and_escapes_as_text(clock: Clock) -> None:
    console = Console(file=io.StringIO(), force_terminal=True, width=100, color_system=None)
    bar = Bar(console)
    bar.phase("reading [bold]\x1b[2J", 1_000_000)
    clock.now += 2
    bar.advance(500_000)
    bar.note("a [red]note[/]\x07")
    bar.close()
    drawn = console.file.getvalue()  # type: ignore[attr-defined]
    assert "reading [bold]\\x1b[2J" in drawn
    assert "50 %, 500 kB of 1.00 MB, 250 kB/s, 2.0 s left" in drawn
    assert "oakum: a [red]note[/]\\x07" in drawn
    assert "\x07" not in drawn and "\x1b[2J\x1b" not in drawn
