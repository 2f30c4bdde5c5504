"""Every sentence in the source of what a report prints, whether or not a table triggers it.

All literals of the rooms that write sentences or notes are read with `ast`, f-strings with a mark
where a value goes, and held against the phrases that no report may hold. Docstrings are not
printed and not read.
"""

from __future__ import annotations

import ast
import functools
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import robustrm as rm
from robustrm.sensitivity_analysis.questions import questions
from tests.report.test_wording import BANNED, visible

PACKAGE = Path(__file__).resolve().parents[2] / "robustrm"
ROOMS = (
    "sensitivity_analysis", "report", "figures", "analysis", "advice", "methods", "plan",
    "reading", "records", "table",
)  # fmt: skip
SOURCES = [path for room in ROOMS for path in sorted((PACKAGE / room).rglob("*.py"))]
TEMPLATES = sorted(PACKAGE.rglob("*.html")) + sorted(PACKAGE.rglob("*.j2"))
VALUE = "…"

# A change in one person is no response to anything, and only a margin can make a change small.
MORE_BANNED = [
    *BANNED,
    r"\b(non-?)?respon(se|sive|siveness|ding|ds?)\b",
    r"\btreatment (effect|success|failure)s?\b",
    r"\bequivalen(t|ce|cy)\b",
    r"\bno (relevant )?change (was|is) (shown|found|seen)\b",
    r"\b(improved|improvement|worsen(ed|ing)|recover(ed|y)|healthy|abnormal|pathological)\b",
]

# Words that are compared with, not printed.
KEYS = ("nan", "None", "NaN", "<NA>", "NaT")
# (file, match): why it stands there all the same.
EXCEPTIONS = {
    ("report/plan_text.py", "None"): "the English word: none of them replaces the primary analysis",
    ("methods/estimators.py", "None"): "code that an error message tells the user to write",
    ("methods/additive.py", "effective"): "the effective sample size of weighted draws",
}


def docstrings(tree: ast.AST) -> Iterator[ast.Constant]:
    """Yield every text that stands as a statement of its own."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Expr) and isinstance(node.value, ast.Constant):
            yield node.value


def literals(source: str) -> Iterator[str]:
    """Yield every text of a file: literals, and f-strings with a mark for each value."""
    tree = ast.parse(source)
    read = {id(node) for node in docstrings(tree)}
    for node in ast.walk(tree):  # an f-string is met before its parts
        if isinstance(node, ast.JoinedStr):
            parts = [p.value if isinstance(p, ast.Constant) else VALUE for p in node.values]
            read |= {id(part) for part in node.values}
            yield "".join(map(str, parts))
        elif (
            isinstance(node, ast.Constant) and isinstance(node.value, str) and id(node) not in read
        ):
            yield node.value


def matches(text: str) -> list[str]:
    if text in KEYS:
        return []
    found = (re.search(pattern, text, flags=re.IGNORECASE) for pattern in MORE_BANNED)
    return [match[0] for match in found if match]


@functools.cache
def offences(path: Path) -> tuple[tuple[str, str], ...]:
    """Return (match, text) of every banned phrase in the texts of a file."""
    texts = literals(path.read_text(encoding="utf-8"))
    return tuple((match, text) for text in texts for match in matches(text))


def place(path: Path) -> str:
    return path.relative_to(PACKAGE).as_posix()


@pytest.mark.parametrize("path", SOURCES, ids=place)
def test_no_sentence_in_the_source_holds_a_banned_phrase(path: Path):
    found = [o for o in offences(path) if (place(path), o[0]) not in EXCEPTIONS]
    assert found == []


def test_every_exception_is_still_needed():
    used = {(place(path), match) for path in SOURCES for match, _ in offences(path)}
    assert set(EXCEPTIONS) <= used


@pytest.mark.parametrize("path", TEMPLATES, ids=place)
def test_no_template_holds_a_banned_phrase(path: Path):
    words = re.sub(r"\{[{%#].*?[}%#]\}", VALUE, path.read_text(encoding="utf-8"), flags=re.DOTALL)
    assert matches(visible(words)) == []


def test_the_rooms_and_templates_are_there():
    rooms = {path.relative_to(PACKAGE).parts[0] for path in SOURCES}
    assert rooms == set(ROOMS)
    assert TEMPLATES


@pytest.mark.parametrize(
    "source",
    [
        'x = "The medians differ."',
        'x = f"{a} caused a fall"',
        'x = f"{n} " "responders"',
        'x = f"There was {word}, no effect on {marker}."',
        'x = {"key": ("a", "P = 0.000")}',
        'def f():\n    """Say so."""\n    return "a treatment response"',
        'x = f"{a:.2f} and {b}: the two are equivalent"',
        'x = "with a value of " + "nan here"',
    ],
)
def test_the_reader_sees_a_banned_phrase_wherever_it_stands(source: str):
    assert [match for text in literals(source) for match in matches(text)]


@pytest.mark.parametrize(
    "source", ['"""The medians differ."""', 'def f():\n    """No effect."""', 'x = y == "nan"']
)
def test_the_reader_passes_what_is_not_printed(source: str):
    assert [match for text in literals(source) for match in matches(text)] == []


# ── the same sentences with their numbers ─────────────────────────────────────────────────


def varied() -> Iterator[tuple[rm.OccasionTable, rm.Plan]]:
    """Yield tables with limits, gaps and one subject, and plans with every kind of answer."""
    rng = np.random.default_rng(2)
    answers: list[dict[str, Any]] = [
        {"selected": True, "own_runs": True, "margin": 1.3, "margin_reason": "agreed"},
        {"selected": False, "own_runs": False, "scale": "raw"},
        {"selected": True, "contrasts": "successive", "pair": "sign_test"},
        {"margin": 0.9, "margin_reason": "agreed", "contrasts": "all", "purpose": "confirmatory"},
    ]
    for n in (1, 3, 12):
        values = np.round(np.exp(rng.normal(1, 1, (n, 3))), 1) + 0.1
        below = values < 1
        values[below] = 1.0
        values[0, 2], below[0, 2] = np.nan, False
        table = rm.OccasionTable.from_array(
            values, occasions=["a", "b", "c"], below=below, lower_limit=1.0
        )
        for keys in answers:
            yield table, rm.Plan(**keys)


def test_what_is_asked_and_what_is_said_of_one_person_hold_no_banned_phrase():
    said: list[str] = []
    for table, plan in varied():
        found = questions(table, plan, root=1)
        one = rm.reference_changes(table, plan, cv_within=0.4, cv_assay=0.05, source="invented")
        said += [*found.sentences, *map(str, found.notes), str(one)]
        said += [str(value) for value in one.frame["reading"]]
    assert [(match, text) for text in said for match in matches(text)] == []
