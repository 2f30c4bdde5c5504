"""Rows beside the planned one: in every constructed case it is known what makes them disagree."""

from __future__ import annotations

import json
import re

import numpy as np
import pytest
from scipy import stats

import robustrm as rm
from robustrm.analysis import Row
from robustrm.results import Estimate, TestResult
from robustrm.sensitivity_analysis.beside import Beside, Disagreement, beside
from robustrm.sensitivity_analysis.reading import (
    Reading,
    alike,
    direction_of,
    is_resolved,
    p_against,
    parts,
    the,
)
from robustrm.sensitivity_analysis.repeats import Recipe, Repeats
from tests.report.conftest import invented
from tests.report.test_wording import BANNED
from tests.sensitivity_analysis import constructed

PAIR = constructed.PAIR


def found_in(table: rm.OccasionTable, **plan) -> Beside:
    return beside(rm.analyze(table, rm.Plan(**{"companions": (), **plan}), rng=1))


def against(found: Beside, method: str, label: str = "after vs before") -> Disagreement:
    """Return the one disagreement of a comparison with a method, named as in a sentence."""
    (one,) = [d for d in found.disagreements if d.label == label and d.other.startswith(method)]
    return one


def kinds(one: Disagreement) -> list[str]:
    return [driver.kind for driver in one.drivers]


def logs(table: rm.OccasionTable) -> np.ndarray:
    return np.log(table.values[:, 1] / table.values[:, 0])


# ── one known culprit a case ──────────────────────────────────────────────────────────────────


def test_one_outlying_subject_is_named():
    table = constructed.one_outlier()
    one = against(found_in(table), "the paired t test (log")
    assert one.parted == ("p", "p_adjusted")
    (driver,) = one.drivers
    assert (driver.kind, driver.subjects) == ("one subject", ("P7",))
    assert "with P7 left out both lie at or below 0.05" in one.sentence
    kept = np.delete(logs(table), 6)
    expected = stats.wilcoxon(kept, method="exact").pvalue, stats.ttest_1samp(kept, 0).pvalue
    assert driver.p_values[0] == pytest.approx(expected, rel=1e-9)  # SciPy


def test_an_outlier_that_turns_the_direction_of_the_mean_is_named():
    one = against(found_in(constructed.one_outlier()), "the paired t test (raw")
    assert one.parted == ("direction", "p", "p_adjusted")
    assert [(driver.kind, driver.subjects) for driver in one.drivers] == [("one subject", ("P7",))]
    assert "The first reads as a fall, the second as a rise" in one.sentence
    assert "with P7 left out both read as a fall" in one.sentence


def test_the_scale_is_named():
    table = constructed.another_scale()
    one = against(found_in(table), "the paired t test (raw")
    driver = one.drivers[0]
    assert (driver.kind, driver.scales) == ("scale", ("log",))
    assert driver.p_values[0][1] == pytest.approx(stats.ttest_1samp(logs(table), 0).pvalue)  # SciPy
    assert "on the log scale the paired t test gives P < 0.001" in one.sentence


def test_the_value_entered_below_the_limit_is_named():
    table = constructed.another_limit_value()
    one = against(found_in(table, companions=("sign_test",)), "the sign test")
    (driver,) = [driver for driver in one.drivers if driver.kind == "limit value"]
    assert driver.fractions == (1.0,)
    assert "one subject" not in kinds(one)
    # the cells below the limit hold the limit itself
    expected = stats.wilcoxon(logs(table), method="exact").pvalue, stats.binomtest(3, 15).pvalue
    assert driver.p_values[0] == pytest.approx(expected, rel=1e-9)  # SciPy
    assert "with 100% of the limit entered for a value below it, both lie" in one.sentence
    assert "The plan enters 50%." in one.sentence


def test_a_plan_that_enters_the_limit_has_nothing_to_disagree_about():
    table = constructed.another_limit_value()
    assert found_in(table, companions=("sign_test",), substitute="limit").disagreements == ()


def test_who_was_left_out_is_named():
    table = constructed.another_group()
    found = found_in(table, companions=("conover",))
    one = against(found, "the Conover test", "week 2 vs week 0")
    (driver,) = one.drivers
    assert driver.kind == "who is in it"
    assert driver.subjects == ("P9", "P10", "P11", "P12", "P13", "P14")
    both = stats.wilcoxon(logs(table)[:8], method="exact").pvalue  # SciPy
    assert driver.p_values[0][0] == pytest.approx(both, rel=1e-9)
    assert "the rows rest on 14 and 8 subjects" in one.sentence


def test_nobody_is_left_out_where_the_plan_takes_complete_rows():
    found = found_in(constructed.another_group(), companions=("conover",), missing="complete")
    assert found.disagreements == ()


def with_p(p: float, n: int = 10, seed: int = 4) -> rm.OccasionTable:
    """Return three occasions; on logs the paired t test of each later one gives about this p."""
    rng = np.random.default_rng(seed)
    steps = []
    for _ in range(2):
        noise = rng.normal(size=n)
        noise = (noise - noise.mean()) / noise.std(ddof=1)
        steps.append(0.2 * (noise + stats.t.isf(p / 2, n - 1) / np.sqrt(n)))
    base = rng.uniform(400, 600, n)
    values = np.stack([base, *(base * np.exp(-step) for step in steps)], axis=1)
    return rm.OccasionTable.from_array(np.round(values, 4), occasions=["w0", "w2", "w6"])


def test_the_adjustment_is_named():
    found = found_in(with_p(0.03), pair="paired_t", adjust="none")
    one = against(found, "the paired t test (log", "w2 vs w0")
    assert one.parted == ("p_adjusted",)
    assert "adjustment" in kinds(one)
    assert (
        "before it both P values are at or below 0.05 (0.030 and 0.030), after it one alone "
        "(unadjusted 0.030 and Bonferroni 0.060)"
    ) in one.sentence
    assert "Adjusted alike" not in one.sentence


def test_rows_adjusted_alike_are_told():
    # Hochberg leaves the larger of two P values as it is, Bonferroni doubles both
    found = found_in(with_p(0.03), pair="paired_t", adjust="hochberg")
    one = against(found, "the paired t test (log", "w2 vs w0")
    assert "Adjusted alike, by Hochberg, both lie at or below 0.05" in one.sentence


def test_another_question_is_named_where_nothing_brings_rows_together():
    found = found_in(constructed.two_questions(), companions=("sign_test",))
    one = against(found, "the sign test")
    assert kinds(one) == ["another estimand"]
    assert "not brought together by leaving any one subject out" in one.sentence
    assert "pseudo-median ratio 0.772 and probability of a fall 0.625" in one.sentence
    assert "both can be true" in one.sentence


def test_where_nothing_disagrees_it_says_so():
    found = found_in(constructed.all_fall(), companions=("sign_test", "conover"))
    assert found.disagreements == ()
    assert all(sentence.endswith("Nothing disagrees.") for sentence in found.sentences)
    assert "all 4 other rows read like the Wilcoxon signed-rank test" in found.sentences[0]
    assert found.frame["reads_like_planned"].all()


def test_rows_that_meet_for_lack_of_subjects_are_not_brought_together():
    # Six falls: exact P = 2/64. With five, 2/32 is above 0.05 whatever the values (enumeration).
    table = constructed.of_log_ratios(
        [-0.3, -0.31, -0.33, -0.36, -0.4, -0.45], [9, 20, 30, 40, 50, 4000]
    )
    one = against(found_in(table), "the paired t test (raw")
    assert not {"one subject", "any subject"} & set(kinds(one))


# ── the table ─────────────────────────────────────────────────────────────────────────────────


def test_the_table_has_a_row_a_method_and_comparison():
    analysis = rm.analyze(constructed.one_outlier(), rm.Plan(), rng=1)
    found = beside(analysis)
    assert len(found.frame) == len(analysis.rows())
    for (_, cells), row in zip(found.frame.iterrows(), analysis.rows(), strict=True):
        assert cells["p"] == row.result.p_value
        assert (cells["label"], cells["role"], cells["scale"]) == (
            row.label, row.role, row.result.scale,
        )  # fmt: skip
        assert cells["n"] == row.result.n_subjects
        if row.result.estimate is not None:
            assert cells["estimate"] == row.result.estimate.value
    parted = found.frame.loc[~found.frame["reads_like_planned"], ["label", "title"]]
    assert len(parted) == len(found.disagreements)


def test_what_a_row_differs_in_is_what_the_report_says():
    analysis = rm.analyze(invented(14, missing=2, below=3), rng=1)
    document = analysis.to_dict()
    told = [", ".join(row["apart"]) for row in [*document["supplementary"], *document["beside"]]]
    planned = len(analysis.primary) + 1
    assert list(beside(analysis).frame["differs_in"])[planned:] == told


def test_a_row_without_p_is_not_compared():
    equal = rm.OccasionTable.from_array(np.repeat([[3.0], [4.0], [5.0]], 2, 1), occasions=PAIR)
    frame = found_in(equal).frame
    assert frame["reads_like_planned"][frame["method"] == "paired_t"].isna().all()


def test_it_is_json_safe_and_the_order_of_rows_plays_no_part():
    table = invented(12, missing=1, below=2)
    found = beside(rm.analyze(table, rng=3))
    held = found.to_dict()
    assert json.loads(json.dumps(held, allow_nan=False)) == held
    turned = table.select(subjects=table.subjects[::-1])
    assert beside(rm.analyze(turned, rng=3)).to_dict() == held


def test_every_row_can_be_made_again():
    analysis = rm.analyze(invented(10, missing=1, below=2), rng=2)
    repeats = Repeats(analysis.table, analysis.plan, int(analysis.record["seed"]))
    for row in analysis.rows():
        made = repeats.outcome(Recipe.of(row))
        assert made is not None
        again = made.rows[row.label]
        assert again.result.estimate == row.result.estimate
        assert again.p_adjusted == row.p_adjusted
        if row.result.null in ("exact", "parametric", "asymptotic", "bootstrap"):
            assert again.result.p_value == row.result.p_value


def test_progress_is_told():
    told = []
    analysis = rm.analyze(constructed.one_outlier(), rm.Plan(companions=()), rng=1)
    found = beside(analysis, progress=lambda done, total: told.append((done, total)))
    assert told == [(i, len(found.disagreements)) for i in range(1, len(found.disagreements) + 1)]


# ── readings ──────────────────────────────────────────────────────────────────────────────────

FALL = Reading(-1, p=True, p_adjusted=True)


@pytest.mark.parametrize(
    ("other", "expected"),
    [
        (FALL, ()),
        (Reading(1, p=True, p_adjusted=True), ("direction",)),
        (Reading(0, p=True, p_adjusted=True), ()),
        (Reading(None, p=False, p_adjusted=None), ("p",)),
        (Reading(-1, p=True, p_adjusted=False), ("p_adjusted",)),
        (Reading(-1, p=None, p_adjusted=None), ()),
    ],
)
def test_readings_part_in_direction_and_in_the_side_of_p(other, expected):
    assert parts(FALL, other) == expected


def test_what_parted_must_be_known_to_be_alike():
    assert alike(FALL, FALL, ("p",))
    assert not alike(FALL, Reading(-1, p=None, p_adjusted=None), ("p",))


@pytest.mark.parametrize(
    ("name", "value", "no_change", "direction"),
    [
        ("mean difference", -2.0, None, -1),
        ("mean difference", 0.0, None, 0),
        ("probability of a fall", 0.8, 0.5, -1),
        ("probability of a larger value", 0.8, 0.5, 1),
    ],
)
def test_directions_are_those_of_the_values(name, value, no_change, direction):
    estimate = Estimate(name, value, None, None, None, "exact", no_change=no_change)
    assert direction_of(estimate) == direction


def drawn(p: float, interval: tuple[float, float], adjusted: float) -> Row:
    result = TestResult(
        "sign_flip", 1.0, "t", (), p, "monte carlo", 9, 2, "", "", "raw", p_interval=interval
    )
    return Row("primary", "b vs a", result, adjusted, "holm")


def test_draws_that_straddle_the_level_do_not_tell():
    assert is_resolved(drawn(0.03, (0.02, 0.04), 0.03), 0.05)
    assert not is_resolved(drawn(0.045, (0.03, 0.06), 0.045), 0.05)
    assert not is_resolved(drawn(0.03, (0.02, 0.04), 0.06), 0.05)  # after adjustment 0.04 to 0.08


@pytest.mark.parametrize(
    ("p", "text"),
    [
        (0.0123, "0.012"),
        (0.0502, "0.0502"),
        (0.050001, "0.050001"),
        (0.05, "0.050"),
        (1e-9, "< 0.001"),
    ],
)
def test_a_p_near_the_level_shows_its_side(p, text):
    assert p_against(p, 0.05) == text


def test_names_of_methods_stand_in_a_sentence():
    assert the("Sign test") == "the sign test"
    assert the("Yuen's paired test") == "Yuen's paired test"


# ── wording ───────────────────────────────────────────────────────────────────────────────────

CASES = [
    constructed.one_outlier, constructed.another_scale, constructed.another_limit_value,
    constructed.another_group, constructed.all_fall, constructed.two_questions,
    lambda: invented(12, missing=2, below=3),
]  # fmt: skip


@pytest.mark.parametrize("case", range(len(CASES)))
def test_no_sentence_holds_a_banned_phrase(case):
    found = beside(rm.analyze(CASES[case](), rng=1))
    words = str(found)
    assert words
    assert [m[0] for p in BANNED for m in re.finditer(p, words, flags=re.IGNORECASE)] == []


def test_all_who_do_it_are_named_with_their_numbers():
    found = beside(rm.analyze(invented(14, missing=1, below=3), rng=1))
    for one in found.disagreements:
        for driver in one.drivers:
            assert driver.sentence in one.sentence
            if driver.kind in ("one subject", "who is in it"):
                assert all(subject in driver.sentence for subject in driver.subjects)
