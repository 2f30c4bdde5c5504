"""Every subject left out in turn: hand-made numbers, known culprits, and what cannot be told."""

from __future__ import annotations

import json
import math
import re

import numpy as np
import pytest
from scipy import stats

import robustrm as rm
from robustrm.sensitivity_analysis.leave_one_out import LeaveOneOut, leave_one_out
from tests.report.conftest import invented
from tests.report.test_wording import BANNED
from tests.sensitivity_analysis import constructed

RAW = rm.Plan(scale="raw", companions=())


def rows(found: LeaveOneOut, method: str, scale: str) -> list[dict]:
    frame = found.frame
    return frame[(frame["method"] == method) & (frame["scale"] == scale)].to_dict("records")


def summary(found: LeaveOneOut, method: str, scale: str) -> dict:
    frame = found.summary
    (row,) = frame[(frame["method"] == method) & (frame["scale"] == scale)].to_dict("records")
    return row


def of_differences(*differences: float) -> rm.OccasionTable:
    return rm.OccasionTable.from_array(
        [[20.0, 20.0 + d] for d in differences],
        occasions=constructed.PAIR,
        subjects=[f"P{i + 1}" for i in range(len(differences))],
    )


# ── numbers by hand ───────────────────────────────────────────────────────────────────────────


def test_estimates_by_hand():
    """Differences 1, 2, 3, 10. Medians of the Walsh averages and means of three of them."""
    found = leave_one_out(of_differences(1, 2, 3, 10), RAW, root=1)
    medians = [row["estimate"] for row in rows(found, "signed_rank", "raw")]
    assert medians == pytest.approx([4.5, 4.25, 3.75, 2.0])
    means = [row["estimate"] for row in rows(found, "paired_t", "raw")]
    assert means == pytest.approx([5.0, 14 / 3, 13 / 3, 2.0])
    assert [row["left_out"] for row in rows(found, "paired_t", "raw")] == ["P1", "P2", "P3", "P4"]
    assert {row["n"] for row in rows(found, "paired_t", "raw")} == {3}
    told = summary(found, "paired_t", "raw")
    assert told["estimate"] == pytest.approx(4.0)
    assert (told["estimate_min"], told["estimate_max"]) == pytest.approx((2.0, 5.0))
    assert told["most_influential"] == "P4"


def test_p_values_and_intervals_are_those_of_the_others():
    table = constructed.one_outlier()
    found = leave_one_out(table, rm.Plan(), root=1)
    steps = np.log(table.values[:, 1] / table.values[:, 0])
    for i, row in enumerate(rows(found, "paired_t", "log")):
        t = stats.ttest_1samp(np.delete(steps, i), 0)  # SciPy
        interval = t.confidence_interval(0.95)
        assert row["p"] == pytest.approx(t.pvalue)
        assert (row["low"], row["high"]) == pytest.approx(
            (np.exp(interval.low), np.exp(interval.high))
        )
    for i, row in enumerate(rows(found, "signed_rank", "log")):
        exact = stats.wilcoxon(np.delete(steps, i), method="exact").pvalue  # SciPy
        assert row["p"] == pytest.approx(exact)
    # with two occasions F is the square of t
    for one, other in zip(rows(found, "anova", "raw"), rows(found, "paired_t", "raw"), strict=True):
        assert one["p"] == pytest.approx(other["p"])


def test_the_overall_test_is_repeated_without_each_subject():
    table = invented(8)
    found = leave_one_out(table, rm.Plan(omnibus="friedman"), root=1)
    for i, row in enumerate(rows(found, "friedman", "log")):
        others = np.delete(table.values, i, axis=0)
        again = rm.friedman(rm.OccasionTable.from_array(others, occasions=table.occasions))
        assert row["p"] == again.p_value
        assert math.isnan(row["estimate"])


def test_influence_is_measured_on_the_scale_of_the_analysis():
    # Ratios 2, 1/2 and 1 twice; in units the largest person moves the mean most.
    steps = np.log([8.0, 0.9, 1.1, 1.0, 1.05, 0.95])
    table = constructed.of_log_ratios(steps, [1, 500, 900, 40, 50, 60])
    found = leave_one_out(table, rm.Plan(companions=()), root=1)
    assert summary(found, "paired_t", "log")["most_influential"] == "P1"
    assert summary(found, "paired_t", "raw")["most_influential"] == "P3"


def test_those_who_tie_are_all_named_and_nobody_where_all_do():
    found = leave_one_out(of_differences(-1, -1, 5, 5, 2, 2), RAW, root=1)
    assert summary(found, "paired_t", "raw")["most_influential"] == "P1, P2, P3, P4"
    even = leave_one_out(of_differences(*[3.0] * 5), RAW, root=1)
    assert summary(even, "signed_rank", "raw")["most_influential"] == ""


# ── readings ──────────────────────────────────────────────────────────────────────────────────


def test_the_one_who_changes_the_reading_is_named():
    found = leave_one_out(constructed.one_outlier(), rm.Plan(), root=1)
    assert summary(found, "signed_rank", "log")["changes_reading"] == ""
    assert summary(found, "signed_rank", "log")["holds"]
    told = summary(found, "paired_t", "log")
    assert (told["most_influential"], told["changes_reading"]) == ("P7", "P7")
    assert not told["holds"]
    changes = {row["left_out"]: row["changes"] for row in rows(found, "paired_t", "raw")}
    assert {who for who, what in changes.items() if what} == {"P7"}
    assert changes["P7"] == "direction, p, p_adjusted"
    (sentence,) = [s for s in found.sentences if "paired t test (raw" in s]
    assert "With P7 left out it reads as a fall and P lies at or below 0.05" in sentence


def test_what_holds_is_said():
    found = leave_one_out(constructed.all_fall(), rm.Plan(), root=1)
    assert found.summary["holds"].all()
    assert found.sentences[0] == (
        "The reading holds whichever subject is left out in 1 of 1 planned contrast."
    )
    assert (
        "Whoever is left out, it reads as a fall and P lies at or below 0.05 before and after "
        "adjustment."
    ) in found.sentences[1]


def test_a_level_out_of_reach_is_said_and_nobody_is_blamed():
    # Exact P of six falls is 2/64, of five 2/32 (enumeration).
    found = leave_one_out(constructed.all_fall(6), rm.Plan(), root=1)
    told = summary(found, "signed_rank", "log")
    assert (told["p"], told["p_min"], told["p_max"]) == (1 / 32, 1 / 16, 1 / 16)
    assert (told["changes_reading"], told["holds"]) == ("", False)
    assert "it cannot be told in after vs before" in found.sentences[0]
    assert "With 5 subjects P cannot reach 0.05 whatever the values" in found.sentences[1]
    assert "Whoever is left out, it reads as a fall." in found.sentences[1]


def test_an_estimate_of_no_change_is_not_called_a_direction():
    # Pseudo-median 0.25 of all four; without the last one 0.
    found = leave_one_out(of_differences(-1, 0, 1, 2), RAW, root=1)
    (sentence,) = [s for s in found.sentences if "signed-rank" in s]
    assert "Whoever is left out, it does not read as a fall" in sentence


def test_a_subject_who_is_not_in_a_comparison_moves_nothing():
    found = leave_one_out(constructed.another_group(), rm.Plan(companions=()), root=1)
    frame = found.frame
    planned = frame[(frame["method"] == "signed_rank") & (frame["label"] == "week 6 vs week 0")]
    outside = planned[~planned["included"]]
    assert list(outside["left_out"]) == ["P9", "P10", "P11", "P12", "P13", "P14"]
    assert outside["estimate"].nunique() == 1
    assert set(outside["n"]) == {8}


# ── what is not there ─────────────────────────────────────────────────────────────────────────


def test_two_subjects_are_too_few():
    with pytest.raises(rm.TooFewError, match="at least 3 subjects, got 2"):
        leave_one_out(of_differences(1, 2), RAW, root=1)


def test_a_zero_stops_a_log_plan_and_costs_a_raw_one_the_log_rows():
    table = rm.OccasionTable.from_array(
        [[0.0, 1.0], [2.0, 3.5], [3.0, 1.0], [7.0, 2.0]], occasions=constructed.PAIR
    )
    with pytest.raises(rm.DataError, match="true zero"):
        leave_one_out(table, rm.Plan(), root=1)
    found = leave_one_out(table, RAW, root=1)
    assert set(found.frame["scale"]) == {"raw"}
    (note,) = [note for note in found.notes if note.code == "not repeated"]
    assert "paired t test (log scale)" in note.fact


def test_equal_differences_have_no_t_and_that_is_noted():
    found = leave_one_out(of_differences(2, 2, 2, 5), RAW, root=1)
    (note,) = [note for note in found.notes if note.code == "no repeat"]
    assert "paired t test (raw scale, n = 4): P4" in note.fact


def test_it_is_json_safe_and_the_order_of_rows_plays_no_part():
    table = invented(9, missing=1, below=2)
    found = leave_one_out(table, rm.Plan(), root=5)
    held = found.to_dict()
    assert json.loads(json.dumps(held, allow_nan=False)) == held
    turned = table.select(subjects=table.subjects[::-1])
    assert leave_one_out(turned, rm.Plan(), root=5).to_dict() == held


def test_an_analysis_stands_once():
    found = leave_one_out(of_differences(1, 2, 4, 7), RAW.replace(pair="paired_t"), root=1)
    roles = found.summary.set_index(["method", "scale"])["role"]
    assert roles["paired_t", "raw"] == "primary"
    assert roles["paired_t", "log"] == "supplementary"


def test_progress_is_told_to_the_end():
    told = []
    leave_one_out(of_differences(1, 2, 4, 7), RAW, root=1, progress=lambda *step: told.append(step))
    assert told == [(i, 24) for i in range(1, 25)]  # six analyses, four subjects


@pytest.mark.parametrize(
    "table",
    [
        constructed.one_outlier(), constructed.all_fall(6), constructed.another_group(),
        of_differences(2, 2, 2, 5), invented(13, missing=2, below=3),
    ],
    ids=range(5),
)  # fmt: skip
def test_no_sentence_holds_a_banned_phrase(table):
    words = str(leave_one_out(table, rm.Plan(), root=1))
    assert [m[0] for p in BANNED for m in re.finditer(p, words, flags=re.IGNORECASE)] == []
