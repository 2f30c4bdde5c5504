"""The rule, line by line, and what goes with its choices."""

from __future__ import annotations

import numpy as np
import pytest

import robustrm as rm
from robustrm.advice import advise, diagnose
from robustrm.advice.rule import MANY_AT_LIMIT, RULES

OCCASIONS = ["week 0", "week 6", "week 12"]


def table_of(rows, **options) -> rm.OccasionTable:
    return rm.OccasionTable.from_array(rows, occasions=OCCASIONS[: np.shape(rows)[1]], **options)


def spread_table(power: float) -> rm.OccasionTable:
    """Twelve subjects whose spread grows as the level to a power; by a seeded generator."""
    rng = np.random.default_rng(7)
    level = np.geomspace(2, 60, 12)[:, None]
    errors = rng.uniform(0.9, 1.1, (12, 1)) * np.array([-1.0, 0.1, 0.9])
    return table_of((level + 0.3 * level**power * errors).round(4))


ROWS = [[9.1, 7.2, 6.0], [4.0, 3.1, 2.5], [12.0, 12.5, 8.0], [6.6, 5.0, 5.9], [3.3, 2.1, 2.4]]


def codes(advice) -> list[str]:
    return [note.code for note in advice.cautions]


def test_a_concentration_is_advised_on_logs_by_aligned_ranks():
    advice = advise(table_of(ROWS))
    assert (advice.plan.scale, advice.plan.omnibus, advice.plan.pair) == (
        "log", "aligned_ranks", "signed_rank",
    )  # fmt: skip
    assert advice.reasons[0].startswith("Scale: log.")


@pytest.mark.parametrize("kind", ["count", "score"])
def test_counts_and_scores_are_advised_raw(kind):
    assert advise(table_of(ROWS), plan=rm.Plan(marker_kind=kind)).plan.scale == "raw"


@pytest.mark.parametrize("scale", ["raw", "log"])
def test_a_declared_scale_is_never_changed(scale):
    advice = advise(table_of(ROWS), plan=rm.Plan(scale=scale, marker_kind="score"))
    assert advice.plan.scale == scale
    assert "as the plan declares" in advice.reasons[0]


def test_the_slope_raises_a_caution_and_changes_nothing():
    """Spread that does not grow with the level speaks for the raw scale, and only speaks."""
    flat, proportional = advise(spread_table(0.0)), advise(spread_table(1.0))
    assert flat.plan == proportional.plan
    assert "spread and level" in codes(flat)
    assert "spread and level" not in codes(proportional)
    raw = advise(spread_table(1.0), plan=rm.Plan(scale="raw"))
    assert "spread and level" in codes(raw)


@pytest.mark.parametrize(("hidden", "omnibus"), [(7, "aligned_ranks"), (8, "friedman")])
def test_many_values_at_a_limit_turn_to_methods_that_need_only_order(hidden, omnibus):
    """Of 15 values 7 are 47% and 8 are 53%; the bound is a half."""
    flat = np.sort(np.array(ROWS).ravel())
    limit = float((flat[hidden - 1] + flat[hidden]) / 2)
    values = np.where(np.array(ROWS) < limit, limit, ROWS)
    advice = advise(table_of(values, below=values == limit, lower_limit=limit))
    assert advice.figures is not None
    assert (advice.figures.share_at_limit >= MANY_AT_LIMIT) == (omnibus == "friedman")
    assert advice.plan.omnibus == omnibus
    assert advice.plan.pair == ("sign_test" if omnibus == "friedman" else "signed_rank")


def test_what_is_declared_is_kept():
    advice = advise(table_of(ROWS), plan=rm.Plan(omnibus="quade"), keep={"omnibus"})
    assert (advice.plan.omnibus, advice.plan.scale) == ("quade", "log")
    assert "omnibus: quade, as declared." in advice.reasons
    assert not any("aligned ranks" in reason for reason in advice.reasons)


def test_a_gap_brings_the_test_made_for_gaps_to_mind():
    rows = [*ROWS, [5.0, np.nan, 4.0]]
    assert any("1 of 6 subjects lack an occasion" in r for r in advise(table_of(rows)).reasons)
    assert not any("Skillings" in r for r in advise(table_of(ROWS)).reasons)


def test_the_design_alone_is_enough():
    advice = advise(n_subjects=6, n_occasions=4)
    assert advice.figures is None
    assert advice.plan.omnibus == "aligned_ranks"
    # 6 subjects, 3 comparisons: 3 · 2/2⁶ = 0.094 after Holm, by hand
    assert "after Holm 0.0938" in str(advice.cautions[0])


def test_few_subjects_draw_a_caution():
    assert "few subjects" in codes(advise(n_subjects=5, n_occasions=3))
    assert "few subjects" not in codes(advise(n_subjects=6, n_occasions=3))


def test_a_value_without_logarithm_draws_the_question():
    advice = advise(table_of([*ROWS, [0.0, 2.0, 3.0]]))
    assert "not positive" in codes(advice)
    assert "true zero" in str(advice)


def test_advice_on_its_own_plan_is_the_same_plan():
    for table in (table_of(ROWS), spread_table(0.0)):
        once = advise(table).plan
        assert advise(table, plan=once).plan == once


def test_every_part_of_the_rule_ends_with_a_line_that_decides_or_is_silent_on_purpose():
    parts = list(dict.fromkeys(rule.part for rule in RULES))
    last = {rule.part: rule.when for rule in RULES}
    assert [part for part in parts if last[part] != "otherwise"] == ["missing visits"]


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: advise(), "needs a table, or `n_subjects` and `n_occasions`"),
        (lambda: advise(n_subjects=8), "needs a table, or"),
        (lambda: advise(table_of(ROWS), n_subjects=5), "Leave one of them out"),
        (lambda: advise(table_of(ROWS).log()), "raw scale, got 'log'"),
        (lambda: diagnose("file.csv"), "must be an OccasionTable"),  # type: ignore[arg-type]  # wrong on purpose
        (lambda: advise(n_subjects=8, n_occasions=1), "`n_occasions` must be a whole number"),
    ],
)
def test_what_cannot_be_advised_is_refused(call, message):
    with pytest.raises(rm.ArgumentError, match=message):
        call()
