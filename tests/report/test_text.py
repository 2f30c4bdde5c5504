"""The terminal text: what could be reached first, cautions last, columns straight."""

from __future__ import annotations

import itertools
import re

import numpy as np

from robustrm._format import width
from robustrm.analysis import Analysis, analyze
from robustrm.plan import Plan
from robustrm.report.document import document
from robustrm.report.sentences import CAUTIONS
from robustrm.report.text import text
from robustrm.table import OccasionTable


def test_the_order_of_the_parts(analysis: Analysis):
    shown = text(document(analysis))
    parts = [
        str(analysis.attainable)[:40], "14 subjects × 4 occasions", "Exploratory study",
        "Planned contrasts", "Overall test", "Two occasions", "All occasions",
        "What each row tests", "Notes", "Cautions",
    ]  # fmt: skip
    places = [shown.index(part) for part in parts]
    assert places == sorted(places)
    assert places[0] == 0
    assert shown.rstrip().endswith(CAUTIONS[-1])


def test_every_line_fits(varied: Analysis):
    assert max(width(line) for line in text(document(varied)).splitlines()) <= 120


def test_rows_of_a_table_end_where_its_rule_ends(varied: Analysis):
    lines = text(document(varied)).splitlines()
    rules = [i for i, line in enumerate(lines) if line.startswith("──")]
    assert rules
    for rule in rules:
        assert width(lines[rule - 1]) <= width(lines[rule])
        for line in lines[rule + 1 :]:
            if not line:
                break
            assert width(line) <= width(lines[rule])


def test_every_number_of_the_planned_table_stands_beside_its_n(analysis: Analysis):
    lines = text(document(analysis)).splitlines()
    start = next(i for i, line in enumerate(lines) if line.startswith("Planned contrasts"))
    for comparison, line in zip(analysis.primary, lines[start + 3 :], strict=False):
        assert line.startswith(comparison.label)
        assert f" {comparison.result.n_subjects} " in line


def test_rows_of_one_group_share_estimand_and_scale_and_other_footings_are_marked_last(
    analysis: Analysis,
):
    lines = text(document(analysis)).splitlines()
    heads = [
        i for i, line in enumerate(lines) if re.match(r"week 4 vs week 0: .*, \w+ scale$", line)
    ]
    end = next(i for i, line in enumerate(lines) if line.startswith("week 8 vs week 0: "))
    assert lines[heads[0]] == "week 4 vs week 0: pseudo-median ratio, log scale"
    assert lines[heads[-1]] == "week 4 vs week 0: mean difference, raw scale"
    groups = [lines[i + 1 : j] for i, j in itertools.pairwise([*heads, end])]
    apart = [line.startswith("≠") for group in groups for line in group]
    assert apart == sorted(apart)
    assert any(apart)
    assert not all(apart)
    assert groups[-1][0].startswith("≠ Paired t test")
    assert any(line.startswith("≠ rests on another n or scale") for line in lines)


def test_every_row_says_what_it_tests(varied: Analysis):
    shown = " ".join(text(document(varied)).split())
    for row in varied.rows():
        assert f"Null: {row.result.hypothesis}" in shown
        assert f"Estimand: {row.result.estimand}." in shown


def test_skipped_analyses_are_told_with_their_reason():
    values = np.array([[0.0, 1.0, 2.0], [3.0, 1.0, 4.0], [2.0, 5.0, 6.0], [8.0, 7.0, 3.0]])
    table = OccasionTable.from_array(values, occasions=["a", "b", "c"])
    shown = text(document(analyze(table, Plan(scale="raw", seed=1))))
    assert "Not made\n- parametric results (log scale): subject 'S1' has 0 at 'a'" in shown


def test_a_label_cannot_move_the_cursor(hostile: Analysis):
    shown = text(document(hostile))
    assert {c for c in shown if ord(c) < 32} == {"\n"}
    assert "\x1b" not in shown


def test_counts_stand_where_no_estimate_can(mostly_below: Analysis):
    shown = " ".join(text(document(mostly_below)).split())
    for comparison in mostly_below.primary:
        assert comparison.estimate is None
        assert f"No estimate for {comparison.label}; counts stand instead: " in shown
