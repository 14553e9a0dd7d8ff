"""The pages in a real browser: nothing overflows, text can be read, nothing is fetched and nothing is run."""

from __future__ import annotations

import html
import json
import os
import re
import shutil
import subprocess
import sys
from datetime import UTC, datetime, timedelta
from html.parser import HTMLParser
from pathlib import Path

import pytest

from oakum.audits import (
    Advice,
    AuditResult,
    Cause,
    CauseFinding,
    Distribution,
    Growth,
    Likelihood,
    Point,
    Rate,
    Statistics,
    TargetAudit,
    Trend,
)
from oakum.cli.running import run
from oakum.report.html import audit_page, history_page
from oakum.results import CheckResult, Outcome

BROWSER = next(filter(None, map(shutil.which, ("chromium", "chromium-browser", "google-chrome"))), None)
LONG = "plates/" + "a-very-long-name-without-a-blank" * 6 + ".tif"
EVIL = '<script>alert(1)</script>&"\x1b[31m\u202e'
BEGUN = datetime(2031, 5, 4, 12, 30, tzinfo=UTC)


def trend() -> Trend:
    points = tuple(
        Point(
            BEGUN - timedelta(days=365 * (5 - n)),
            Rate(3**n - 1, 8e12, (3**n - 1) * 0.8 / 8e12, (3**n + 4) * 1.2 / 8e12),
            Rate(n, 1e12, 0.0, 5e-12), 1 - 0.05 * n, 1.0,
        )
        for n in range(6)
    )  # fmt: skip
    growth = Growth(3e-11, 3.0, 2.5, 3.6, 1.1)
    return Trend(
        f"LTO {EVIL}", points, growth, None, -0.05, 0.001, 2e-9, 2034, Advice.AUDIT_SOONER,
        "the trend passes the limit in 2034.", ("some audits were samples",),
    )  # fmt: skip


def audited(check: CheckResult) -> AuditResult:
    """One damaged target with everything that a page can show, and one that was not checked."""
    statistics = Statistics(
        8 * 10**9, 10**8, Rate(234, 8e9, 2.5e-8, 3.3e-8), Rate(3, 1e9, 6e-10, 8e-9), (40, 5000, 65536), 2, 1,
        0.61, (0, 1), 0.25,
    )  # fmt: skip
    findings = tuple(
        CauseFinding(cause, Likelihood.VERY_LIKELY, f"evidence {EVIL} of {LONG}", "Do this.", 5, (LONG,))
        for cause in Cause
    )
    along = tuple(n % 7 * (n % 3 == 0) for n in range(240))
    up, down = tuple(range(64)), tuple(range(64, 0, -1))
    target = TargetAudit(
        Path(LONG), check.outcome, "ab", check, statistics, findings, Distribution(along, (up, down))
    )
    missing = TargetAudit(Path(EVIL), Outcome.UNCHECKED, reason=f"the medium {EVIL} is not there")
    return AuditResult(
        BEGUN, f"LTO {EVIL}", (target, missing), 3.0, 0.25, 17, (("reallocated", 12.0),), None,
        "it is locked", trend(),
    )  # fmt: skip


@pytest.fixture(params=["audit", "history", "uncorrectable"])
def page(request: pytest.FixtureRequest, correctable: CheckResult, uncorrectable: CheckResult) -> str:
    if request.param == "history":
        return history_page([trend(), trend()])
    return audit_page(audited(correctable if request.param == "audit" else uncorrectable))


# -- without a browser ---------------------------------------------------------------------------------


class Tags(HTMLParser):
    """All tags with their attributes, and the names that are given more than once."""

    def __init__(self, page: str) -> None:
        super().__init__()
        self.tags: list[str] = []
        self.attributes: list[tuple[str, str]] = []
        self.feed(page)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)
        self.attributes += [(name, value or "") for name, value in attrs]


def test_it_fetches_and_runs_nothing(page: str) -> None:
    tags = Tags(page)
    assert not {"script", "link", "img", "iframe", "object", "embed", "base", "form"} & set(tags.tags)
    links = [value for name, value in tags.attributes if name in ("href", "xlink:href", "src")]
    assert all(value.startswith("#") for value in links)
    assert not any(name.startswith("on") for name, _ in tags.attributes)
    assert not re.search(r"url\((?!#)|@import", page)


def test_names_stay_text(page: str) -> None:
    assert "<script>" not in page and "\x1b" not in page and "\u202e" not in page


def test_no_name_is_given_twice(page: str) -> None:
    ids = [value for name, value in Tags(page).attributes if name == "id"]
    assert len(ids) == len(set(ids))


def test_everything_has_its_colour_from_the_page(page: str) -> None:
    """One hue, that suits light and dark: no colour stands in a picture itself."""
    pictures = "".join(re.findall(r"<svg.*?</svg>", page, re.DOTALL))
    assert pictures
    assert set(re.findall(r"(?:fill|stroke): ([^;\"]+)", pictures)) <= {"none", "var(--ink)", "var(--hue)"}


def test_the_same_result_gives_the_same_page(correctable: CheckResult) -> None:
    assert audit_page(audited(correctable)) == audit_page(audited(correctable))


def test_the_counts_are_there(correctable: CheckResult) -> None:
    shown = html.unescape(audit_page(audited(correctable)))
    for text in ("234 scattered, 1,000 in bursts", "2.9e-08 (2.5e-08 to 3.3e-08)", "it is locked", "61 %"):
        assert text in shown
    for cause in Cause:
        assert str(cause)[1:] in shown


def test_the_command(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    file, page = tmp_path / "x", tmp_path / "page.html"
    file.write_bytes(bytes(5000))
    ledger = ["--ledger", str(tmp_path / "l")]
    assert run(["protect", str(file), "--quiet"]) == 0
    assert run(["audit", str(file), *ledger, "--html", str(page), "--quiet"]) == 0
    assert page.read_text().startswith("<!doctype html>") and "Nothing is damaged" in page.read_text()
    assert run(["history", *ledger, "--html", str(page)]) == 2
    assert "exists" in capsys.readouterr().err
    assert run(["history", *ledger, "--html", str(page), "--overwrite", "--quiet"]) == 0
    assert "Audits over the years" in page.read_text()
    monkeypatch.setattr("oakum.jobs.pages.find_spec", lambda name: None)
    assert run(["history", *ledger, "--html", str(tmp_path / "other")]) == 2
    assert "oakum[report]" in capsys.readouterr().err and not (tmp_path / "other").exists()


def test_charts_are_imported_only_when_drawn() -> None:
    program = "import sys, oakum.report.html, oakum.cli.audit; assert 'matplotlib' not in sys.modules"
    subprocess.run([sys.executable, "-c", program], check=True)


# -- in a browser --------------------------------------------------------------------------------------

PROBE = """
<script>
addEventListener("load", () => {
  const page = document.querySelector("iframe").contentDocument, view = page.defaultView;
  const wide = [], faint = [], width = page.documentElement.clientWidth;
  const light = colour => {
    const [r, g, b] = colour.match(/[\\d.]+/g).slice(0, 3).map(v => v / 255)
      .map(v => v <= 0.04045 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4);
    return 0.2126 * r + 0.7152 * g + 0.0722 * b;
  };
  const paper = view.getComputedStyle(page.body).backgroundColor;
  for (const e of page.body.querySelectorAll("*")) {
    const box = e.getBoundingClientRect(), style = view.getComputedStyle(e);
    if (box.width && (box.right > width + 0.5 || box.left < -0.5))
      wide.push(e.tagName + " " + e.textContent.slice(0, 40));
    if (![...e.childNodes].some(n => n.nodeType === 3 && n.textContent.trim()) || !box.width) continue;
    const ink = e.closest("svg") ? style.fill : style.color;
    const [a, b] = [light(ink), light(paper)].sort((x, y) => y - x);
    if ((a + 0.05) / (b + 0.05) < 4.5) faint.push(e.tagName + " " + ink + " on " + paper);
  }
  document.title = "done";
  document.body.innerHTML = "<pre id=answer></pre>";
  document.querySelector("#answer").textContent = JSON.stringify(
    {wide, faint, paper, width, scroll: page.documentElement.scrollWidth,
     texts: page.querySelectorAll("svg text").length});
});
</script>
"""


def browse(folder: Path, page: str, width: int, dark: bool, *what: str) -> str:
    """Shows a page in a frame of `width` pixels and returns what the browser prints."""
    frame = f'<iframe style="border:0;width:{width}px;height:1200px" srcdoc="{html.escape(page)}"></iframe>'
    probe = PROBE if "--dump-dom" in what else ""
    file = folder / "frame.html"
    file.write_text(f'<!doctype html><body style="margin:0">{probe}{frame}', encoding="utf-8")
    done = subprocess.run(
        [
            BROWSER or "", "--headless", "--no-sandbox", "--disable-gpu", "--hide-scrollbars",
            f"--user-data-dir={folder / 'profile'}", f"--blink-settings=preferredColorScheme={int(not dark)}",
            f"--window-size={max(500, width)},1200", *what, file.as_uri(),
        ],
        capture_output=True, text=True, timeout=120, check=True, env=os.environ | {"HOME": str(folder)},
    )  # fmt: skip
    return done.stdout


@pytest.mark.skipif(BROWSER is None, reason="needs Chromium")
@pytest.mark.parametrize(("width", "dark"), [(400, False), (1400, True)], ids=["narrow light", "wide dark"])
def test_in_a_browser(tmp_path: Path, page: str, width: int, dark: bool) -> None:
    """WCAG 2.2, 1.4.3 (AA): text has a contrast of at least 4.5 to 1 (common practice)."""
    shown = browse(tmp_path, page, width, dark, "--dump-dom")
    found = re.search(r'<pre id="answer">(.*?)</pre>', shown, re.DOTALL)
    assert found is not None
    answer = json.loads(html.unescape(found[1]))
    assert (answer["wide"], answer["faint"]) == ([], [])
    assert answer["scroll"] <= answer["width"] <= width
    assert answer["texts"] > 5
    levels = [int(v) for v in re.findall(r"\d+", answer["paper"])[:3]]
    assert (max(levels) < 64) if dark else (min(levels) > 192)


@pytest.mark.skipif(BROWSER is None, reason="needs Chromium")
def test_a_screenshot(tmp_path: Path, correctable: CheckResult) -> None:
    picture = tmp_path / "page.png"
    browse(tmp_path, audit_page(audited(correctable)), 1400, False, f"--screenshot={picture}")
    assert picture.read_bytes().startswith(b"\x89PNG\r\n\x1a\n")
    assert picture.stat().st_size > 20_000  # a blank page of this size takes a few thousand
