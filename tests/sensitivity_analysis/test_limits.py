"""Values beyond a limit: ranges over substitutes, and bounds where order alone decides."""

from __future__ import annotations

import itertools
import json
from collections.abc import Sequence
from typing import Any

import numpy as np
import pandas as pd
import pytest
from scipy import stats

import robustrm as rm
from robustrm.sensitivity_analysis.limits import Limits, limit_sensitivity
from robustrm.sensitivity_analysis.limits_orders import (
    friedman_bounds,
    sign_bounds,
    signed_rank_bounds,
)
from tests.sensitivity_analysis.test_wording import matches

Rows = list[list[object]]


def table(rows: Sequence[Sequence[object]], *, lower: Sequence[float] | None = None, **options):
    """Make a table of written cells: ``"<5"``, ``">20"`` or a number."""
    written = [[str(cell) for cell in row] for row in rows]
    values = np.array([[float(cell.strip("<>")) for cell in row] for row in written])
    return rm.OccasionTable.from_array(
        values,
        occasions=[f"week {j}" for j in range(values.shape[1])],
        below=[[cell.startswith("<") for cell in row] for row in written],
        above=[[cell.startswith(">") for cell in row] for row in written],
        lower_limit=lower,
        **options,
    )


def found_row(
    found: Limits, method: str, varied: str, label: str = "week 1 vs week 0"
) -> pd.Series:
    frame = found.frame
    rows = frame[(frame.method == method) & (frame.varied == varied) & (frame.label == label)]
    assert len(rows) == 1
    return rows.iloc[0]


# n = 8, one fall by half. Of the rises two are smaller than that fall, four larger, and one starts
# below 1: from f to 1.2, which is larger than a doubling exactly while f < 0.6.
FLIPS: Rows = [
    [4, 2], [2, 2.2], [2, 2.6], [2, 6], [2, 8], [2, 10], [2, 12], ["<1", 1.2],
]  # fmt: skip


def test_a_limit_rule_that_turns_the_reading_is_named_with_its_place():
    found = limit_sensitivity(table(FLIPS), rm.Plan(), root=1)
    row = found_row(found, "signed_rank", "one substitute")
    # T⁻ = 3 of n = 8: P = 10/256; T⁻ = 4: P = 14/256 (Wilcoxon's table: 3 is the 5% point)
    assert row.p_lowest == pytest.approx(10 / 256)
    assert row.p_highest == pytest.approx(14 / 256)
    assert row.p == row.p_lowest
    assert row.changes == "P"
    assert row.changes_above == pytest.approx(0.6, rel=2e-3)
    assert np.isnan(row.changes_below)
    said = " ".join(found.sentences)
    assert "P crosses 0.05, first at 60.0% of the limit" in said
    assert (
        "With one substitute for all values below the reading changes for week 1 vs week 0." in said
    )


def test_a_reading_that_holds_is_said_to_hold():
    holds: Rows = [*FLIPS[:-1], ["<1", 3.0]]  # larger than a doubling whatever stands below 1
    found = limit_sensitivity(table(holds), rm.Plan(), root=1)
    row = found_row(found, "signed_rank", "one substitute")
    assert (row.changes, row.p_lowest, row.p_highest) == ("", row.p, row.p)
    assert "reads the same" in found.sentences[-1]
    assert found_row(found, "signed_rank", "any value beyond its own limit").p_highest == row.p


def test_the_ends_over_one_substitute_are_those_of_scipy_at_each_share():
    tested = table(FLIPS)
    found = limit_sensitivity(tested, rm.Plan(), root=1)
    steps = found.steps[
        (found.steps.method == "paired_t") & (found.steps.varied == "one substitute")
    ]
    assert {0.01, 0.5, 1.0} <= set(steps.times_limit)
    for step in steps.itertuples():
        values = np.where(tested.below, step.times_limit * tested.values, tested.values)
        want = stats.ttest_rel(np.log(values[:, 1]), np.log(values[:, 0]))
        assert step.p == pytest.approx(want.pvalue)
    row = found_row(found, "paired_t", "one substitute")
    assert (row.p_lowest, row.p_highest) == (steps.p.min(), steps.p.max())


BOTH: Rows = [
    ["<1", 1.5], [3.0, "<1"], ["<1", "<1"], [5, 2.5], [4, 3.1], [6, 2.2], [2.4, 2.1], [7, 4],
    [3.3, 1.7], [2.9, 3.6], [8, 3],
]  # fmt: skip


def test_a_substitute_of_its_own_for_each_occasion_moves_further():
    tested = table(BOTH)
    found = limit_sensitivity(tested, rm.Plan(), root=1)
    row = found_row(found, "paired_t", "a substitute an occasion")
    share = np.where(tested.below, [0.01, 1.0], 1.0)
    ends = [
        float(np.exp((np.log(tested.values * s) @ [-1, 1]).mean()))
        for s in (np.where(tested.below, [1.0, 0.01], 1.0), share)
    ]
    assert (row.estimate_lowest, row.estimate_highest) == pytest.approx(ends)
    one = found_row(found, "paired_t", "one substitute")
    assert row.estimate_lowest < one.estimate_lowest <= one.estimate_highest < row.estimate_highest


# ── any value: the signed-rank test ───────────────────────────────────────────────────────


def completions(tested: rm.OccasionTable, rng: np.random.Generator, count: int) -> np.ndarray:
    """Draw values (count, n, 2) that the limits allow, from near the limit to far beyond it."""
    far = 10 ** (
        rng.uniform(0, 4, (count, *tested.values.shape)) * rng.integers(0, 2, (count, 1, 1))
    )
    far = np.where(rng.random(far.shape) < 0.3, 1.0001, far)
    values = np.where(tested.below, tested.values / far, tested.values)
    return np.where(tested.above, values * far, values)


@pytest.mark.parametrize("alternative", ["two-sided", "greater", "less"])
def test_no_completed_table_leaves_the_bounds_of_the_signed_rank_test(alternative: Any):
    tested = table([*BOTH, [3, ">9"], [">9", 2.7]])
    found = signed_rank_bounds(tested.log(), alternative=alternative, zeros="pratt")
    assert found.n_open == 5
    rng = np.random.default_rng(1)
    p_values, middles = [], []
    for values in completions(tested, rng, 400):
        gaps = np.log(values[:, 1] / values[:, 0])
        p_values.append(stats.wilcoxon(gaps, alternative=alternative, method="exact").pvalue)
        i, j = np.triu_indices(gaps.size)
        middles.append(np.exp(np.median((gaps[i] + gaps[j]) / 2)))
    low, high = found.p
    assert low - 1e-12 <= min(p_values)
    assert max(p_values) <= high + 1e-12
    assert found.estimate is not None
    assert found.estimate[0] <= min(middles) * (1 + 1e-12)
    assert max(middles) <= found.estimate[1] * (1 + 1e-12)


def test_the_ends_of_the_signed_rank_test_are_reached():
    tested = table(BOTH).log()
    found = signed_rank_bounds(tested, alternative="two-sided", zeros="pratt")
    p_values = []
    for down, up in ((-40.0, 0.0), (0.0, -40.0)):
        raw = np.where(tested.below, tested.values + np.array([down, up]), tested.values)
        p_values.append(stats.wilcoxon(raw[:, 1] - raw[:, 0], method="exact").pvalue)
    assert found.p == pytest.approx((min(p_values), max(p_values)))


def test_nothing_bounds_the_ratio_where_many_are_open():
    rows: Rows = [["<1", 2.0 + j / 10] for j in range(4)] + [[2, 3.1], [3, 4.3], [2, 2.9], [4, 4.4]]
    found = signed_rank_bounds(table(rows).log(), alternative="two-sided", zeros="pratt")
    assert found.estimate is not None
    assert np.isinf(found.estimate[1])
    on_raw = signed_rank_bounds(table(rows), alternative="two-sided", zeros="pratt")
    gaps = np.array([2.0, 2.1, 2.2, 2.3, 1.1, 1.3, 0.9, 0.4])  # zero entered: the value itself
    i, j = np.triu_indices(8)
    assert on_raw.estimate is not None
    assert on_raw.estimate[1] == pytest.approx(np.median((gaps[i] + gaps[j]) / 2))


# ── any order: sign test and Friedman's test ──────────────────────────────────────────────


def test_order_is_certain_or_open():
    rows: Rows = [["<5", 3], ["<5", 5], [4, 7], ["<5", "<3"], [">9", 9], [6, 6]]
    tested = table(rows, lower=[5, 3])
    # open: "<5" and 3, "<5" and "<3"; certain: a rise, a rise, a fall; no change
    found = sign_bounds(tested, tied=True, alternative="two-sided")
    assert found.n_open == 2
    p_values = [
        stats.binomtest(2 + moved.count(1), 3 + moved.count(1) + moved.count(-1)).pvalue
        for moved in itertools.product((-1, 0, 1), repeat=2)
    ]
    assert found.p == pytest.approx((min(p_values), max(p_values)))
    # falls: 1 certain, 2 open, one unchanged counts half
    assert found.estimate == pytest.approx((1.5 / 6, 3.5 / 6))


def test_two_values_below_one_limit_are_tied_or_open():
    tested = table([["<1", "<1"], [2, 3], [2, 4], [3, 5], [2, 5], [4, 5], [3, 4]])
    tied = sign_bounds(tested, tied=True, alternative="two-sided")
    either = sign_bounds(tested, tied=False, alternative="two-sided")
    assert tied.p == pytest.approx((2 / 64, 2 / 64))
    assert either.p == pytest.approx((2 / 128, 16 / 128))


def exact_friedman(ranks: np.ndarray) -> float:
    """Full enumeration of every subject's orders."""
    k = ranks.shape[1]
    observed = ((ranks.sum(axis=0) - ranks.sum() / k) ** 2).sum()
    orders = [np.array(list(itertools.permutations(row))) for row in ranks]
    sums = np.zeros((1, k))
    for order in orders:
        sums = (sums[:, None, :] + order[None, :, :]).reshape(-1, k)
    size = ((sums - ranks.sum() / k) ** 2).sum(axis=1)
    return float((size >= observed - 1e-9).mean())


@pytest.mark.parametrize("tied", [True, False])
def test_the_bounds_of_friedmans_test_are_those_of_every_order(tied: bool):
    rows: Rows = [["<5", 3, 7], ["<5", "<5", 6], [2, 4, 9], ["<5", "<2", 8], [3, 3, 1]]
    tested = table(rows, lower=[5, 5, 2])
    # every order of the open cells, by hand: ranks a subject may have
    first = [[1, 2, 3], [2, 1, 3]]
    second = [[1.5, 1.5, 3]] if tied else [[1, 2, 3], [2, 1, 3]]
    # week 1 of the fourth is "<2": open against "<5"; 8 is above both
    options = [first, second, [[1, 2, 3]], [[1, 2, 3], [2, 1, 3]], [[2.5, 2.5, 1]]]
    p_values = [exact_friedman(np.array(ranks)) for ranks in itertools.product(*options)]
    found = friedman_bounds(tested, tied=tied, rng=1)
    assert found is not None
    assert found.p == pytest.approx((min(p_values), max(p_values)))
    assert found.n_open == (2 if tied else 3)


def test_at_one_limit_ranks_with_ties_leave_nothing_open():
    tested = table([["<1", 2, 3], ["<1", "<1", 4], [2, 3, "<1"], [5, 6, 7]])
    found = friedman_bounds(tested, tied=True, rng=1)
    assert found is not None
    assert found.n_open == 0
    assert found.p == pytest.approx((rm.friedman(tested).p_value,) * 2)


# ── the common limit, upper limits, and more than half beyond ─────────────────────────────


def test_the_common_limit_is_told_with_what_it_gave_up():
    rows: Rows = [
        [0.4, 1.1], [0.6, 2.0], [1.5, "<0.8"], [2.2, 1.0], [3, 1.2], [2.5, 1.9], [1.8, 1.3], [4, 2],
    ]  # fmt: skip
    tested = table(rows, lower=[0.3, 0.8])
    found = limit_sensitivity(tested, rm.Plan(), root=1)
    count = found.counts.iloc[0]
    # 0.4 and 0.6 were measured below 0.8, the limit of week 1
    assert (count.common_lower, count.n_below, count.n_given_up) == (0.8, 3, 2)
    assert "2 measured values given up" in found.sentences[0]
    row = found_row(found, "signed_rank", "one substitute")
    at_common = table([["<0.8", 1.1], ["<0.8", 2.0], *rows[2:]], lower=[0.8, 0.8])
    want = rm.signed_rank(at_common.log(), "week 0", "week 1")
    assert row.p == pytest.approx(want.p_value)
    assert row.estimate == pytest.approx(want.estimate.value if want.estimate else np.nan)


def test_values_above_a_limit_enter_at_multiples_of_it():
    rows: Rows = [[5, ">20"], [8, 12], [6, 9], [9, 8], [7, ">20"], [10, 15], [6, 6.5]]
    found = limit_sensitivity(table(rows), rm.Plan(), root=1)
    row = found_row(found, "paired_t", "multiples of the upper limit")
    gaps = np.log([20 / 5, 12 / 8, 9 / 6, 8 / 9, 20 / 7, 15 / 10, 6.5 / 6])
    far = gaps + np.log(10) * np.array([1, 0, 0, 0, 1, 0, 0])
    assert row.estimate_lowest == pytest.approx(np.exp(gaps.mean()))
    assert row.estimate_highest == pytest.approx(np.exp(far.mean()))
    steps = found.steps[found.steps.varied == "multiples of the upper limit"]
    assert set(steps.times_limit) == {1.0, 1.5, 2.0, 3.0, 5.0, 10.0}
    assert "1 to 10 times" in " ".join(found.sentences)


def test_with_more_than_half_below_counts_stand_in_place_of_a_ratio():
    rows: Rows = [
        *[[2.0 + j / 7, "<1"] for j in range(5)], ["<1", "<1"], [2, 3], [3, 4.4], ["<1", 2.2],
    ]  # fmt: skip
    found = limit_sensitivity(table(rows), rm.Plan(), root=1)
    count = found.counts.iloc[0]
    assert (count.n_fell, count.n_rose, count.n_unknown) == (5, 3, 1)
    assert "5 fell, 3 rose, 0 did not change, 1 unknown" in found.sentences[0]
    shifts = found.frame[
        found.frame.method.isin(["signed_rank", "sign_flip", "paired_t", "likelihood"])
    ]
    assert shifts[["estimate", "low", "estimate_lowest", "estimate_highest"]].isna().all(axis=None)
    assert not any("ratio" in text for text in found.sentences)


def test_without_a_value_beyond_a_limit_it_says_so():
    found = limit_sensitivity(table([[1, 2], [3, 5], [2, 3]]), rm.Plan(), root=1)
    assert found.frame.empty
    assert found.steps.empty
    assert found.sentences == ("No value that is compared lies beyond a limit.",)
    assert found.to_dict()["frame"] == []


# ── as a part of the whole ────────────────────────────────────────────────────────────────


def three(seed: int, n: int = 9) -> rm.OccasionTable:
    rng = np.random.default_rng(seed)
    values = np.round(np.exp(rng.normal(1, 0.8, (n, 3))), 1) + 0.2
    below, above = values < 1.2, values > 9
    values = np.where(below, 1.2, np.where(above, 9.0, values))
    values[0, 2] = np.nan
    return rm.OccasionTable.from_array(
        values, occasions=["a", "b", "c"], below=below & ~np.isnan(values), above=above
        & ~np.isnan(values), lower_limit=1.2, upper_limit=9.0,
    )  # fmt: skip


PLANS = [
    rm.Plan(contrasts="all"),
    rm.Plan(pair="sign_test", omnibus="aligned_ranks", companions=()),
    rm.Plan(pair="sign_flip", adjust="closed", companions=()),
    rm.Plan(pair="nemenyi", adjust="single-step", companions=()),
    rm.Plan(scale="raw", contrasts="successive", sides=1, direction="less", missing="complete"),
    rm.Plan(pair="trimmed_difference", adjust="none", substitute="limit", companions=()),
]


@pytest.mark.parametrize("plan", PLANS, ids=[f"{p.pair} {p.adjust} {p.scale}" for p in PLANS])
def test_every_kind_of_plan_gives_ends_around_the_planned_result(plan: rm.Plan):
    found = limit_sensitivity(three(1), plan, root=1)
    frame = found.frame
    own = frame[(frame.role == "primary") & frame.varied.isin(["one substitute"])]
    assert own.empty == (plan.pair in ("sign_test", "nemenyi"))
    known = frame[frame.varied == "one substitute"]
    for p in ("p", "p_adjusted", "estimate"):
        part = known[known[p].notna()]
        assert (part[f"{p}_lowest"] <= part[p]).all()
        assert (part[p] <= part[f"{p}_highest"]).all()
    assert (frame.p_lowest.dropna() > 0).all()
    json.dumps(found.to_dict(), allow_nan=False)
    said = [*found.sentences, *map(str, found.notes)]
    assert [(match, text) for text in said for match in matches(text)] == []


def test_the_order_and_the_names_of_the_rows_play_no_part():
    tested = three(2)
    order = np.random.default_rng(1).permutation(tested.n_subjects)
    moved = tested.select(subjects=[tested.subjects[i] for i in order])
    one, other = (limit_sensitivity(t, rm.Plan(companions=()), root=1) for t in (tested, moved))
    pd.testing.assert_frame_equal(one.frame, other.frame)
    assert one.sentences == other.sentences


@pytest.mark.parametrize("n", [1, 2, 3])
def test_very_few_subjects_are_no_fault(n: int):
    rows: Rows = [["<1", 2, "<1"], [2, "<1", 3], [3, 2, "<1"]]
    found = limit_sensitivity(table(rows[:n]), rm.Plan(), root=1)
    assert len(found.sentences) > 1
    json.dumps(found.to_dict(), allow_nan=False)


def test_a_limit_of_zero_has_no_shares():
    rows: Rows = [["<0", 2], [2, 1], [3, 2], [4, 1], [5, 2]]
    found = limit_sensitivity(table(rows), rm.Plan(scale="raw"), root=1)
    assert found.notes[0].code == "limit not positive"
    assert set(found.frame.varied) <= {
        "any value beyond its own limit", "any order", "no substitute",
        "any order, values beyond one limit tied",
    }  # fmt: skip
