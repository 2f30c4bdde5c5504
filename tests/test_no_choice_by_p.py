"""No code path reads a p value, or the P of a diagnostic, to choose a method.

Every condition of the package is read from the source with `ast`. A name, attribute or key that
looks like a p value may stand in one only where the list below says why: to word or to round what
was found, to keep NaN in its place, to say that draws are not resolved.
"""

from __future__ import annotations

import ast
import re
from collections.abc import Iterator
from pathlib import Path

import pytest

PACKAGE = Path(__file__).resolve().parents[1] / "robustrm"
LOOKS_LIKE_P = re.compile(r"(ps?|p_.+|.+_p|.+_ps?_.+)")

WORDING = "words or rounds a p value that is already there"
READING = "says how finished rows read against the level; nothing is chosen by it"
ALLOWED = {
    ("_format.py", "p_cell"): WORDING,
    ("figures/describing.py", "_p_words"): WORDING,
    ("report/results_text.py", "_p_values"): WORDING,
    ("report/results_text.py", "_drawn"): WORDING,
    ("report/results_text.py", "_test"): WORDING,
    ("report/sheets.py", "_adjusted"): WORDING,
    ("report/sensitivity_sheets.py", "_gaps"): WORDING,
    ("report/sensitivity_sheets.py", "_left_out"): WORDING,
    ("sensitivity_analysis/overview.py", "_reading"): "says how a row reads",
    ("sensitivity_analysis/reading.py", "_is_at_or_below"): READING,
    ("sensitivity_analysis/reading.py", "p_against"): WORDING,
    ("sensitivity_analysis/reading.py", "p_words"): WORDING,
    ("sensitivity_analysis/beside.py", "_cells"): WORDING,
    ("sensitivity_analysis/beside.py", "_reads_like"): READING,
    ("sensitivity_analysis/drivers.py", "_adjustment"): WORDING,
    ("sensitivity_analysis/drivers.py", "_together_words"): WORDING,
    ("sensitivity_analysis/drivers.py", "parted_words"): WORDING,
    ("sensitivity_analysis/influence.py", "of"): "keeps a repeat that has no P in its place",
    ("sensitivity_analysis/influence_words.py", "_ranges"): WORDING,
    ("sensitivity_analysis/influence_words.py", "_sides_held"): WORDING,
    ("sensitivity_analysis/leave_one_out.py", "_numbers"): WORDING,
    ("sensitivity_analysis/limits_rows.py", "_open"): READING,
    ("sensitivity_analysis/limits_rows.py", "range_row"): "keeps a row without adjusted P",
    ("sensitivity_analysis/limits_substitutes.py", "_parted"): READING,
    ("sensitivity_analysis/limits_substitutes.py", "overall_apart"): READING,
    ("sensitivity_analysis/limits_words.py", "_moves"): WORDING,
    ("methods/signed_rank.py", "_disagreement_note"): "notes that P and interval disagree",
    ("methods/rank_sums.py", "agreement_notes"): "notes that an approximation fails",
    ("methods/rank_sums.py", "conover"): "keeps a P that is not defined in its place",
    ("methods/rank_sums.py", "nemenyi"): "keeps a P that is not defined in its place",
    ("methods/rank_pair.py", "_disagreement"): "notes that P and interval disagree",
    ("methods/additive.py", "monte_carlo_notes"): "says how many draws were made",
    ("methods/adjusting.py", "adjusted"): "keeps a pair that was not tested in its place",
    ("methods/attainable.py", "__str__"): "says whether a smallest p exists",
    ("methods/null_distribution.py", "problem_of"): "p is a parameter of a signature",
    ("kernels/null/sorted_sums.py", "comparators"): "p is half a power of two",
    ("records/arrangement.py", "_step"): "p is a problem of a file",
    ("records/arrangement.py", "_missing_lines"): "p is a place in a file",
    ("records/arrangement.py", "of"): "p is a place in a file",
    ("records/limits.py", "settle"): "p is a place in a file",
    ("records/limits.py", "_differ"): "p is a place in a file",
    ("records/limits.py", "_measured_beyond"): "p is a place in a file",
}
# Where methods are chosen, nothing is allowed: no p may even be mentioned in a condition.
CHOOSING = (
    "advice/",
    "plan/",
    "analysis/",
    "cli/",
    "methods/registry.py",
    "methods/follow_up.py",
)


def conditions(tree: ast.AST) -> Iterator[ast.AST]:
    for node in ast.walk(tree):
        if isinstance(node, (ast.If, ast.While, ast.IfExp)):
            yield node.test
        elif isinstance(node, ast.comprehension):
            yield from node.ifs
        elif isinstance(node, ast.Match):
            yield node.subject


def named(node: ast.AST) -> Iterator[str]:
    for inner in ast.walk(node):
        if isinstance(inner, ast.Name):
            yield inner.id
        elif isinstance(inner, ast.Attribute):
            yield inner.attr
        elif isinstance(inner, ast.Subscript) and isinstance(inner.slice, ast.Constant):
            yield str(inner.slice.value)


def readings(source: str) -> set[tuple[str, str]]:
    """Return (function, name) of every condition that reads what looks like a p value."""
    return {
        (function.name, name)
        for function in ast.walk(ast.parse(source))
        if isinstance(function, ast.FunctionDef)
        for condition in conditions(function)
        for name in named(condition)
        if LOOKS_LIKE_P.fullmatch(name)
    }


@pytest.mark.parametrize(
    "source",
    [
        "def f(r):\n    return a if r.p_value < 0.05 else b",
        "def f(r):\n    if r.details['mauchly_p'] < 0.05:\n        return a",
        "def f(r):\n    return [m for m, p in r if p <= alpha]",
        "def f(r):\n    while shapiro_p > level:\n        pass",
    ],
)
def test_the_reader_finds_a_choice_by_p(source):
    assert readings(source)


@pytest.mark.parametrize(
    "path", sorted(PACKAGE.rglob("*.py")), ids=lambda p: p.relative_to(PACKAGE).as_posix()
)
def test_no_condition_reads_a_p_value_to_choose(path):
    place = path.relative_to(PACKAGE).as_posix()
    found = {
        (function, name)
        for function, name in readings(path.read_text(encoding="utf-8"))
        if (place, function) not in ALLOWED
    }
    assert not found, f"{place} reads a p value in a condition: {sorted(found)}"


def test_nothing_is_allowed_where_methods_are_chosen():
    assert not [place for place, _ in ALLOWED if place.startswith(CHOOSING)]


def test_every_exception_is_still_needed():
    used = {
        (path.relative_to(PACKAGE).as_posix(), function)
        for path in PACKAGE.rglob("*.py")
        for function, _ in readings(path.read_text(encoding="utf-8"))
    }
    assert not set(ALLOWED) - used
