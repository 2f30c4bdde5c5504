"""What is asked of every study: answered by the plan or the file, or printed as open."""

from __future__ import annotations

import io
import json
import math

import numpy as np
import pytest

import robustrm as rm
from robustrm.sensitivity_analysis.margin import (
    ACROSS,
    INSIDE,
    NOT_ESTIMABLE,
    OTHER_ESTIMAND,
    OUTSIDE,
)
from robustrm.sensitivity_analysis.questions import Questions, questions

WEEKS = ["week 0", "week 6", "week 12"]


def table_of(values, **options) -> rm.OccasionTable:
    return rm.OccasionTable.from_array(values, occasions=WEEKS[: np.shape(values)[1]], **options)


@pytest.fixture
def table() -> rm.OccasionTable:
    """Six people: nearly the same at week 6, half as high at week 12."""
    return table_of(
        [
            [9.1, 9.0, 4.6],
            [4.0, 4.1, 2.1],
            [12.0, 11.8, 6.3],
            [6.6, 6.7, 3.1],
            [3.2, 3.1, 1.7],
            [7.5, 7.4, 3.8],
        ]
    )


def asked(table: rm.OccasionTable, **keys) -> Questions:
    return questions(table, rm.Plan(**keys), root=1)


def answer(found: Questions, key: str) -> str:
    return str(found.frame.set_index("key").loc[key, "answer"])


def codes(found: Questions) -> list[str]:
    return [note.code for note in found.notes]


def test_three_questions_stand_open_until_the_plan_answers(table):
    found = asked(table)
    assert found.frame["key"].tolist() == ["selected", "own_runs", "margin"]
    assert found.frame["answer"].tolist() == ["open"] * 3
    assert found.margins.empty
    assert found.notes == ()
    assert len(found.sentences) == 3
    assert found.sentences[0].startswith(
        "Were people selected on a high value of this marker? Open."
    )
    assert all("in the plan" in sentence for sentence in found.sentences)


def test_the_result_is_plain(table):
    found = asked(table, margin=1.25, margin_reason="agreed", selected=True)
    text = json.dumps(found.to_dict(), allow_nan=False)
    assert "regression to the mean" in text


def test_progress_is_told(table):
    seen: list[tuple[int, int]] = []
    questions(table, rm.Plan(), root=1, progress=lambda done, total: seen.append((done, total)))
    assert seen[-1] == (3, 3)


# ── selection ─────────────────────────────────────────────────────────────────────────────


def test_selection_on_a_high_value_brings_a_note_with_the_direction(table):
    found = asked(table, selected=True)
    assert answer(found, "selected") == "yes"
    (note,) = found.notes
    assert note.code == "regression to the mean"
    assert "week 0 is in week 6 vs week 0 and week 12 vs week 0" in note.fact
    assert "later values are expected to lie lower without any change" in note.consequence
    assert "By how much cannot be told from these data" in note.consequence


def test_a_contrast_without_the_first_occasion_brings_none(table):
    found = asked(table, selected=True, contrasts=[("week 6", "week 12")])
    assert found.notes == ()
    assert "No planned contrast has the first occasion" in found.sentences[0]


def test_no_selection_is_said(table):
    found = asked(table, selected=False)
    assert answer(found, "selected") == "no"
    assert found.notes == ()


def test_the_direction_of_the_note_is_that_of_chance_alone():
    """People whose first of two like measurements is high fall on average: simulated, seed fixed.

    With equal variances between and within people, half of the excess is chance (Galton's
    regression): ln ratios average −half of the mean excess of those selected.
    """
    rng = np.random.default_rng(5)
    person = rng.normal(0, 1, 200_000)
    logs = person[:, None] + rng.normal(0, 1, (200_000, 2))
    high = logs[:, 0] > 1.5
    change = np.mean(logs[high, 1] - logs[high, 0])
    assert change == pytest.approx(-np.mean(logs[high, 0]) / 2, abs=0.02)


# ── runs ──────────────────────────────────────────────────────────────────────────────────


def test_own_runs_by_the_word_of_the_plan(table):
    yes = asked(table, own_runs=True)
    assert answer(yes, "own_runs") == "yes"
    assert codes(yes) == ["own runs"]
    assert "cannot be told from a change" in yes.sentences[1]
    no = asked(table, own_runs=False)
    assert (answer(no, "own_runs"), codes(no)) == ("no", [])


def plated(*runs: str) -> rm.OccasionTable:
    """Three people at three weeks, week by week assayed in `runs`."""
    lines = ["id,week,crp,run"]
    lines += [
        f"P{i},{week},{3 + i + j},{run}"
        for i in range(3)
        for j, (week, run) in enumerate(zip(WEEKS, runs, strict=True))
    ]
    return rm.read_table(
        io.BytesIO("\n".join(lines).encode()),
        subject="id",
        occasion="week",
        value="crp",
        order=WEEKS,
        plate="run",
    )


@pytest.mark.parametrize(
    ("runs", "told", "noted"),
    [
        (("A", "B", "C"), "yes, by column 'run'", ["own runs"]),
        (("A", "A", "B"), "some, by column 'run'", ["own runs"]),
        (("A", "B", "B"), "yes, by column 'run'", ["own runs"]),
        (("A", "A", "A"), "no, by column 'run'", []),
    ],
)
def test_own_runs_by_the_column_of_plates(runs, told, noted):
    found = asked(plated(*runs))
    assert answer(found, "own_runs") == told
    assert codes(found) == noted


def test_the_contrasts_that_share_no_plate_are_named():
    found = asked(plated("A", "A", "B"))
    assert "A difference between runs enters week 12 vs week 0 and" in found.sentences[1]


def test_only_planned_contrasts_count():
    found = asked(plated("A", "B", "B"), contrasts=[("week 6", "week 12")])
    assert answer(found, "own_runs") == "no, by column 'run'"


@pytest.mark.parametrize(("runs", "said"), [(("A", "B", "C"), False), (("A", "A", "A"), True)])
def test_a_plan_that_the_plates_contradict_is_told(runs, said):
    assert "The plan says otherwise" in asked(plated(*runs), own_runs=said).sentences[1]
    assert "The plan says otherwise" not in asked(plated(*runs), own_runs=not said).sentences[1]


def test_a_column_of_sample_numbers_answers_nothing():
    lines = ["id,week,crp,tube"] + [
        f"P{i},{week},{3 + i + j},T{3 * i + j}" for i in range(3) for j, week in enumerate(WEEKS)
    ]
    table = rm.read_table(
        io.BytesIO("\n".join(lines).encode()),
        subject="id",
        occasion="week",
        value="crp",
        order=WEEKS,
        plate="tube",
    )
    assert answer(asked(table), "own_runs") == "open"


# ── the margin ────────────────────────────────────────────────────────────────────────────

MARGIN = {"margin": 1.25, "margin_reason": "smaller than two visits apart"}


def test_the_ninety_percent_interval_is_read_against_the_margin(table):
    """The interval is that of the planned method at 90%, whatever the level of the plan."""
    found = asked(table, level=0.99, **MARGIN)
    assert found.margins["reading"].tolist() == [INSIDE, OUTSIDE]
    for row in found.margins.to_dict("records"):
        alone = rm.signed_rank(table.log(), row["first"], row["second"], level=0.9).estimate
        assert alone is not None
        assert (row["estimate"], row["low"], row["high"]) == (alone.value, alone.low, alone.high)
        assert row["level"] == alone.level
        assert row["level"] >= 0.9
        assert (row["margin_low"], row["margin_high"]) == (0.8, 1.25)
        assert (row["role"], row["n"], row["scale"]) == ("primary", 6, "log")
    assert "lies within the margin (1/1.25 to 1.25)." in found.sentences[3]
    assert "is not within the margin (1/1.25 to 1.25): the whole interval" in found.sentences[4]
    assert found.sentences[2].endswith("1/1.25 to 1.25. Reason: smaller than two visits apart.")


def test_an_interval_that_reaches_across_an_end_is_not_within(table):
    found = asked(table, margin=1.005, margin_reason="x", contrasts=[("week 0", "week 6")])
    assert found.margins["reading"].tolist() == [ACROSS]
    assert found.notes == ()


@pytest.mark.parametrize("margin", [1.25, 0.8])
def test_a_margin_below_one_is_its_reciprocal(table, margin):
    row = asked(table, margin=margin, margin_reason="x").margins.iloc[0]
    assert (row["margin_low"], row["margin_high"]) == pytest.approx((0.8, 1.25))


def test_a_margin_of_differences(table):
    found = asked(table, scale="raw", margin=0.5, margin_reason="x")
    assert (found.margins["margin_low"][0], found.margins["margin_high"][0]) == (-0.5, 0.5)
    assert answer(found, "margin") == "a difference of −0.5 to 0.5"
    assert found.margins["reading"].tolist() == [INSIDE, OUTSIDE]


def test_several_contrasts_bring_a_note_on_their_number(table):
    assert codes(asked(table, **MARGIN)) == ["margin"]


@pytest.mark.parametrize("pair", ["sign_test", "rank_pair"])
def test_a_probability_is_not_held_against_a_ratio(table, pair):
    found = asked(table, pair=pair, **MARGIN)
    assert set(found.margins["reading"]) == {OTHER_ESTIMAND}
    assert "against the margin: not comparable" in found.sentences[3]


def test_the_rank_sum_methods_of_a_family_have_nothing_to_hold_against_a_ratio(table):
    found = asked(table, pair="nemenyi", adjust="single-step", **MARGIN)
    assert set(found.margins["reading"]) <= {OTHER_ESTIMAND, NOT_ESTIMABLE}


@pytest.mark.parametrize("pair", ["paired_t", "trimmed_difference", "trimmed_pair", "sign_flip"])
def test_every_method_with_a_shift_is_read(table, pair):
    assert asked(table, pair=pair, **MARGIN).margins["reading"].tolist() == [INSIDE, OUTSIDE]


def test_too_few_subjects_are_not_estimable():
    one = table_of([[3.0, 2.0, 1.0]])
    assert set(asked(one, **MARGIN).margins["reading"]) == {NOT_ESTIMABLE}
    closed = asked(one, pair="sign_flip", adjust="closed", **MARGIN)
    assert set(closed.margins["reading"]) == {NOT_ESTIMABLE}
    assert len(closed.margins) == 2


def test_complete_subjects_alone_where_the_plan_says_so(table):
    values = table.values.copy()
    values[0, 2] = math.nan
    gap = table_of(values)
    available = asked(gap, **MARGIN).margins["n"].tolist()
    complete = asked(gap, missing="complete", **MARGIN).margins["n"].tolist()
    assert (available, complete) == ([6, 5], [5, 5])


def test_a_reading_that_hangs_on_the_substitute_is_told():
    values = np.array([[4.0, 3.7]] * 5 + [[1.25, 1.2], [1.3, 1.0], [1.25, 1.0], [1.3, 1.0]])
    table = table_of(values, below=values == 1.0, lower_limit=1.0)
    found = asked(table, margin=1.6, margin_reason="x")
    by_rule = {
        rule: asked(table, margin=1.6, margin_reason="x", substitute=rule).margins["reading"][0]
        for rule in ("half", "root2", "limit")
    }
    assert len(set(by_rule.values())) > 1
    assert found.margins["over_substitutes"].tolist() == ["changes"]
    assert found.sentences[3].endswith(
        "With another substitute below the limit the reading changes."
    )


def test_draws_come_from_the_root(table):
    keys = {"pair": "sign_flip", "stages": (99,), **MARGIN}
    one, other = (asked(table, **keys).to_dict() for _ in range(2))
    assert one == other
