"""The two paragraphs: journal style, numbers of the document, the limits of the design last."""

from __future__ import annotations

import copy
import re

import numpy as np
import pytest

from robustrm._format import p_phrase
from robustrm.analysis import Analysis, analyze
from robustrm.plan import Plan
from robustrm.report.document import document
from robustrm.report.methods_text import methods_paragraph, methods_text
from robustrm.report.results_text import results_paragraph
from robustrm.table import OccasionTable
from tests.report.conftest import invented


def test_both_paragraphs_are_one_line_each(varied: Analysis):
    held = document(varied)
    lines = methods_text(held).splitlines()
    assert lines[0::2] == ["Methods", methods_paragraph(held), "Results", results_paragraph(held)]


def test_the_corrected_f_has_decimals_in_its_degrees_of_freedom(analysis: Analysis):
    found = results_paragraph(document(analysis))
    raw = next(row.result for row in analysis.beside if row.result.method == "anova")
    df1, df2 = raw.df
    expected = f"F({df1:.2f}, {df2:.2f}) = {raw.statistic:.2f}, exploratory {p_phrase(raw.p_value)}"
    assert expected in found


def test_apa_drops_the_zero_before_the_point_of_what_cannot_exceed_one(varied: Analysis):
    found = methods_text(document(varied), "apa")
    assert re.findall(r"\bP [=<]", found) == []
    assert re.findall(r"\bp [=<] 0", found) == []
    assert re.findall(r"(?:W|epsilon) = 0\.", found) == []
    assert re.findall(r"CI \d", found) == []


def test_medical_keeps_it(varied: Analysis):
    found = methods_text(document(varied), "medical")
    assert re.findall(r"\bp [=<]", found) == []
    assert re.findall(r"\bP [=<] \.", found) == []


def test_estimates_come_before_exploratory_p_values(analysis: Analysis):
    found = results_paragraph(document(analysis))
    assert found.index("pseudo-median ratio of week 4") < found.index("Exploratory P values")
    assert re.search(r"\bP [=<]", found[: found.index("Exploratory P values")]) is None


def test_the_last_sentence_says_that_a_single_arm_has_no_cause(varied: Analysis):
    last = results_paragraph(document(varied)).split(". ")[-1]
    if varied.plan.design == "single-arm":
        assert "no control group" in last
        assert "cannot be attributed" in last
    else:
        assert "randomised within subjects" in last


def test_every_comparison_stands_with_its_n(varied: Analysis):
    found = results_paragraph(document(varied))
    for comparison in varied.primary:
        assert f"n = {comparison.result.n_subjects}" in found
        name = f"of {comparison.second} to {comparison.first}"
        raw = f"{comparison.second} − {comparison.first}"
        assert name in found or raw in found or comparison.label in found


@pytest.mark.parametrize("path", [
    ("primary", "comparisons", 0, "result", "estimate", "value"),
    ("primary", "comparisons", 1, "result", "p_value"),
    ("primary", "comparisons", 2, "p_adjusted"),
    ("omnibus", "result", "statistic"),
    ("omnibus", "result", "details", "kendall_w"),
    ("beside", 0, "result", "details", "epsilon_gg"),
    ("summary", 0, "median"),
])  # fmt: skip
def test_a_number_in_the_text_is_the_one_in_the_document(analysis: Analysis, path: tuple):
    held = document(analysis)
    before = results_paragraph(held)
    changed = copy.deepcopy(held)
    place = changed
    for key in path[:-1]:
        place = place[key]
    place[path[-1]] = 0.4321
    after = results_paragraph(changed)
    assert before != after
    assert re.search(r"0\.43", after)


def test_counts_stand_instead_of_a_ratio_that_cannot_be_estimated():
    values = np.array([[5.0, 1.0], [4.0, 1.0], [3.0, 1.0], [6.0, 1.0], [2.0, 2.5], [7.0, 3.5]])
    below = values == 1.0
    table = OccasionTable.from_array(values, occasions=["before", "after"], below=below)
    found = results_paragraph(document(analyze(table, Plan(seed=1))))
    assert "No estimate is given for after vs before" in found
    assert "5 fell, 0 did not change, 1 rose" in found
    assert "More than half of the values of an occasion lie beyond a limit." in found


def test_methods_say_what_was_planned(analysis: Analysis):
    found = methods_paragraph(document(analysis))
    for words in (
        "Wilcoxon signed-rank test", "two-sided", "Pratt", "Holm", "at level 5%", "Friedman test",
        "Greenhouse-Geisser", "half the limit", "no value was filled in", "robustrm 0.1.0",
        "removed no value as an outlier", "the smallest p is", "not adjusted for their number",
    ):  # fmt: skip
        assert words in found


@pytest.mark.parametrize("method", ["nemenyi", "conover"])
def test_comparisons_of_rank_sums_are_told_as_what_they_are(method: str):
    """Two of the twelve subjects lack an occasion: they count among the falls, not in the test."""
    plan = Plan(pair=method, adjust="single-step", purpose="confirmatory", seed=1)
    held = document(analyze(invented(missing=2), plan))
    done, found = methods_paragraph(held), results_paragraph(held)
    assert f"by the {method.capitalize()} test (two-sided)." in done
    assert "P values of the planned comparisons are asymptotic, that of the overall test" in done
    assert "adjusted over all pairs of occasions by the studentized range, at level 5%." in done
    assert "difference of mean ranks, with studentized range intervals that together hold" in done
    assert "Planned comparisons use the subjects with every occasion" in done
    assert re.search(r"mean ranks week 4 − week 0 was −[\d.]+ \(.*n = 10; of 11 with both, ", found)
    assert re.search(r"asymptotic P [=<] [\d.]+, adjusted P [=<]", found)
