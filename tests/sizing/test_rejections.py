"""P values on many data sets against SciPy, and against the methods on single tables."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from scipy import stats

import robustrm as rm
from robustrm.plan import Plan
from robustrm.sizing.rejections import (
    PAIR_P,
    family_p,
    overall_p,
    raw_p,
    sign_flip_p,
    uncorrected_p,
)
from robustrm.trials.families import closed_p

ALTERNATIVES = ("two-sided", "greater", "less")


def pairs_of(seed: int, sets: int = 40, n: int = 9) -> np.ndarray:
    rng = np.random.default_rng(seed)
    return rng.standard_normal((sets, n, 2)) + np.array([0.0, 0.4])


@pytest.mark.reference
@pytest.mark.parametrize("alternative", ALTERNATIVES)
def test_signed_rank_without_ties_is_that_of_scipy(alternative: Any):
    pairs = pairs_of(1)
    expected = [
        stats.wilcoxon(p[:, 1], p[:, 0], alternative=alternative, method="exact").pvalue
        for p in pairs
    ]
    np.testing.assert_allclose(PAIR_P["signed_rank"](pairs, alternative, "pratt"), expected)


@pytest.mark.reference
@pytest.mark.parametrize("alternative", ALTERNATIVES)
def test_sign_test_and_paired_t_are_those_of_scipy(alternative: Any):
    pairs = pairs_of(2)
    pairs[::3, :2, 1] = pairs[::3, :2, 0]  # no change
    gaps = pairs[..., 1] - pairs[..., 0]
    # SciPy's binomial test doubles no tail, so its two-sided p is made from the one-sided ones
    tails = {
        side: np.array(
            [
                stats.binomtest(int((g > 0).sum()), int((g != 0).sum()), alternative=side).pvalue
                for g in gaps
            ]
        )
        for side in ("greater", "less")
    }
    tails["two-sided"] = np.minimum(1, 2 * np.minimum(tails["greater"], tails["less"]))
    found = PAIR_P["sign_test"](pairs, alternative, "pratt")
    np.testing.assert_allclose(found, tails[alternative])
    expected = stats.ttest_rel(pairs[..., 1], pairs[..., 0], axis=1, alternative=alternative)
    np.testing.assert_allclose(PAIR_P["paired_t"](pairs, alternative, "pratt"), expected.pvalue)


@pytest.mark.parametrize("zeros", ["pratt", "drop"])
@pytest.mark.parametrize("alternative", ALTERNATIVES)
def test_signed_rank_with_values_below_a_limit_is_that_of_the_method(alternative: Any, zeros: str):
    # half of 1 enters for what lies below 1: pairs of such values are zero differences
    raw = np.exp(pairs_of(3, sets=12, n=8))
    below = raw < 1
    found = PAIR_P["signed_rank"](np.log(np.where(below, 0.5, raw)), alternative, zeros)
    for values, hidden, p_value in zip(raw, below, found, strict=True):
        table = rm.OccasionTable.from_array(
            np.where(hidden, 1.0, values), occasions=["a", "b"], below=hidden, lower_limit=1.0
        )
        expected = rm.signed_rank(table.log(), "a", "b", alternative=alternative, zeros=zeros)
        assert p_value == pytest.approx(expected.p_value)


@pytest.mark.parametrize("name", ["trimmed_difference", "trimmed_pair"])
def test_trimmed_means_are_those_of_the_methods(name: str):
    pairs = pairs_of(4, sets=5, n=11)
    found = PAIR_P[name](pairs, "greater", "pratt")
    for values, p_value in zip(pairs, found, strict=True):
        table = rm.OccasionTable.from_array(values, occasions=["a", "b"])
        expected = getattr(rm, name)(table, "a", "b", alternative="greater").p_value
        assert p_value == pytest.approx(expected)


def test_the_sign_flip_draws_near_its_exact_p_value():
    pairs = pairs_of(5, sets=20)
    for alternative in ALTERNATIVES:
        found = sign_flip_p(pairs, alternative, np.random.default_rng(1))
        for values, p_value in zip(pairs, found, strict=True):
            table = rm.OccasionTable.from_array(values, occasions=["a", "b"])
            exact = rm.sign_flip(table, "a", "b", alternative=alternative).p_value
            # 5 standard errors of 999 draws
            assert abs(p_value - exact) < 5 * (exact * (1 - exact) / 999) ** 0.5 + 0.002


@pytest.mark.reference
def test_the_uncorrected_f_is_that_of_the_parametric_row():
    values = np.random.default_rng(6).standard_normal((4, 7, 3))
    for each, p_value in zip(values, uncorrected_p(values), strict=True):
        blocks = each - each.mean(axis=1, keepdims=True)
        # SciPy's one-way F with the subjects taken out has 14 + 6 error df for 12
        f = stats.f_oneway(*blocks.T).statistic * 12 / 18
        assert p_value == pytest.approx(stats.f.sf(f, 2, 12))


def gaps_in(values: np.ndarray) -> np.ndarray:
    present = np.ones(values.shape, dtype=bool)
    present[0, 2:4, 2] = present[1, 0, 1] = present[1, 0, 2] = False
    present[2, 1:, 1:] = False
    return present


@pytest.mark.parametrize("missing", ["available", "complete"])
def test_a_comparison_uses_who_has_both_occasions_or_all(missing: Any):
    values = np.random.default_rng(7).standard_normal((3, 8, 3))
    present = gaps_in(values)
    plan = Plan(missing=missing, scale="raw")
    found = raw_p(values, present, [(0, 1), (0, 2)], "signed_rank", plan, np.random.default_rng(0))
    for each, there, p_values in zip(values[:2], present, found, strict=False):
        table = rm.OccasionTable.from_array(
            np.where(there, each, np.nan), occasions=["a", "b", "c"]
        )
        used = table.complete() if missing == "complete" else table
        for second, p_value in zip("bc", p_values, strict=True):
            assert p_value == pytest.approx(rm.signed_rank(used, "a", second).p_value)
    # one subject tests nothing
    assert found[2].tolist() == [1.0, 1.0]


def test_the_planned_family_is_adjusted_as_follow_up_does():
    values = np.random.default_rng(8).standard_normal((6, 8, 3)) + np.array([0, 0.8, 0.5])
    whole = np.ones(values.shape, dtype=bool)
    for adjust in ("holm", "hommel", "bh"):
        plan = Plan(scale="raw", contrasts="all", adjust=adjust)
        found = family_p(values, whole, [(0, 1), (0, 2), (1, 2)], plan, np.random.default_rng(0))
        for each, p_values in zip(values, found, strict=True):
            table = rm.OccasionTable.from_array(each, occasions=["a", "b", "c"])
            family = rm.follow_up(table, family="all", adjust=adjust)
            np.testing.assert_allclose(p_values, [c.p_adjusted for c in family])


def test_closed_testing_is_that_of_the_level_tables():
    values = np.random.default_rng(9).standard_normal((2, 8, 3)) + np.array([0, 0.8, 0.5])
    plan = Plan(scale="raw", contrasts="all", adjust="closed", pair="sign_flip")
    whole = np.ones(values.shape, dtype=bool)
    found = family_p(values, whole, [(0, 1), (0, 2), (1, 2)], plan, np.random.default_rng(0))
    centred = values - values.mean(axis=-1, keepdims=True)
    expected = [closed_p(each[None], 999, np.random.default_rng(3))[0] for each in centred]
    # both draw 999 rearrangements
    np.testing.assert_allclose(found, expected, atol=0.08)


def test_overall_tests_use_complete_subjects():
    values = np.random.default_rng(10).standard_normal((3, 8, 3))
    present = gaps_in(values)
    for name, method in (("friedman", rm.friedman), ("anova", rm.anova)):
        found = overall_p(values, present, name, tied=False, rng=np.random.default_rng(0))
        for each, there, p_value in zip(values[:2], present, found, strict=False):
            table = rm.OccasionTable.from_array(
                np.where(there, each, np.nan), occasions=["a", "b", "c"]
            )
            assert p_value == pytest.approx(method(table).p_value)
        assert found[2] == 1.0
