"""The page in a browser, as wide as a phone and as a desk."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

from robustrm.analysis import Analysis, analyze
from robustrm.figures import pictures
from robustrm.plan import Plan
from robustrm.report.folder import write_report
from robustrm.table import OccasionTable

pytestmark = pytest.mark.browser

# The page forbids scripts of its own; what is asked through the debugging pipe is not one of them.
PROBE = """({
  wide: document.documentElement.scrollWidth - innerWidth,
  figures: [...document.querySelectorAll('figure svg')].map(e => e.getBoundingClientRect().width),
  tables: [...document.querySelectorAll('table')].map(e => e.getBoundingClientRect().height),
  outside: [...document.querySelectorAll('main *')].filter(e => !e.closest('.table, svg, thead')
    && e.getBoundingClientRect().right > innerWidth + 1).map(e => e.outerHTML.slice(0, 80)),
  small: [...document.querySelectorAll('nav a')].map(e => e.getBoundingClientRect().height)
})"""


@pytest.fixture
def report(analysis: Analysis, tmp_path: Path) -> Path:
    return write_report(analysis, tmp_path / "report") / "report.html"


@pytest.mark.parametrize("width", [390, 1280])
def test_the_page_fits_and_shows_everything(
    browser: Any, report: Path, analysis: Analysis, width: int
):
    browser.open(report, width)
    seen = browser.evaluate(PROBE)
    assert browser.complaints == []
    assert seen["wide"] <= 0
    assert seen["outside"] == []
    assert len(seen["figures"]) == len(pictures(analysis))
    assert min(seen["figures"]) >= 280
    assert len(seen["tables"]) >= 10
    assert min(seen["tables"]) > 20
    assert min(seen["small"]) >= 24  # WCAG 2.2 success criterion 2.5.8


def test_long_labels_do_not_widen_a_phone(browser: Any, tmp_path: Path):
    values = [[5.1, 4.0], [3.3, 3.9], [2.2, 1.0], [8.0, 6.1], [1.5, 1.1], [4.4, 2.0], [7.0, 6.5]]
    long = "interleukin6receptorantagonist" * 3
    table = OccasionTable.from_array(
        values, occasions=[f"{long} before", f"{long} after"], marker=long, unit="pg/mL",
        subjects=[f"{long}{i}" for i in range(7)],
    )  # fmt: skip
    folder = write_report(analyze(table, Plan(seed=1)), tmp_path / "report")
    browser.open(folder / "report.html", 390)
    seen = browser.evaluate(PROBE)
    assert browser.complaints == []
    assert seen["wide"] <= 0
    assert seen["outside"] == []


def test_a_hostile_label_does_nothing(browser: Any, hostile: Analysis, tmp_path: Path):
    folder = write_report(hostile, tmp_path / "report")
    browser.open(folder / "report.html", 1280)
    assert browser.complaints == []
    assert browser.evaluate("document.querySelectorAll('script, main img, main b').length") == 0
    assert "<img src=x" in browser.evaluate("document.querySelector('h1').textContent")


def test_the_browser_would_complain(browser: Any, tmp_path: Path):
    """The probe is no blind witness: a blocked script and a wide page are both seen."""
    bad = tmp_path / "bad.html"
    bad.write_text(
        "<!DOCTYPE html><meta http-equiv='Content-Security-Policy' content=\"default-src 'none'\">"
        "<title>bad</title><script>1</script><main><pre>" + "wide " * 200 + "</pre></main>",
        encoding="utf-8",
    )
    browser.open(bad, 390)
    seen = browser.evaluate(PROBE)
    assert browser.complaints
    assert seen["wide"] > 0
