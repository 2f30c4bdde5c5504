"""Limits for the share of a rank sum, by listing every sign pattern."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from robustrm.kernels.signed_rank_share import LARGEST_SUM, share_limits, sum_law
from robustrm.kernels.walsh import signed_rank_law


def at_least(weights: list[int], total: int, share: float) -> float:
    """P(Σ w B >= total) by enumeration."""
    return sum(
        share ** sum(signs) * (1 - share) ** (len(weights) - sum(signs))
        for signs in itertools.product((0, 1), repeat=len(weights))
        if sum(w for w, up in zip(weights, signs, strict=True) if up) >= total
    )


@pytest.mark.property
@given(
    st.lists(st.integers(1, 9), min_size=1, max_size=8), st.floats(0, 1),
    st.floats(0.3, 0.99),
)  # fmt: skip
def test_at_the_limits_the_observed_sum_is_as_rare_as_the_tail(weights, part, level):
    whole = sum(weights)
    total = round(part * whole)
    tail = (1 - level) / 2
    low, high = (float(v) for v in share_limits(np.array(weights), total, total, level))
    assert 0 <= low <= high <= 1
    if total > 0:
        assert at_least(weights, total, low) == pytest.approx(tail, abs=1e-9)
    else:
        assert low == 0
    if total < whole:
        # as many falls or more, each with probability 1 − π
        assert at_least(weights, whole - total, 1 - high) == pytest.approx(tail, abs=1e-9)
    else:
        assert high == 1


@pytest.mark.reference
@pytest.mark.parametrize(("rises", "n"), [(0, 5), (3, 8), (7, 8), (12, 12)])
def test_with_equal_weights_the_interval_is_clopper_pearson_of_scipy(rises, n):
    found = share_limits(np.full(n, 1), rises, rises, 0.9)
    expected = stats.binomtest(rises, n).proportion_ci(0.9, method="exact")
    assert [float(v) for v in found] == pytest.approx([expected.low, expected.high], abs=1e-9)


@pytest.mark.reference
@pytest.mark.parametrize("rises", [0, 9_000, 16_500])
def test_beyond_the_exact_sums_equal_weights_give_scipys_wilson_interval(rises):
    n = LARGEST_SUM + 116
    found = share_limits(np.full(n, 1), rises, rises, 0.95)
    expected = stats.binomtest(rises, n).proportion_ci(0.95, method="wilson")
    assert [float(v) for v in found] == pytest.approx([expected.low, expected.high], abs=1e-9)


@pytest.mark.parametrize("n", [5, 6, 14])
def test_when_all_rise_the_lower_limit_is_a_root_of_the_tail(n):
    weights = np.arange(1, n + 1)
    low, high = share_limits(weights, weights.sum(), weights.sum(), 0.95)
    assert float(low) == pytest.approx(0.025 ** (1 / n), abs=1e-12)
    assert float(high) == 1


@pytest.mark.parametrize("n", [1, 4, 11])
def test_at_one_half_the_law_is_that_of_the_signed_rank_test(n):
    np.testing.assert_allclose(sum_law(np.arange(1, n + 1), np.array(0.5)), signed_rank_law(n))


def test_the_law_is_one_and_has_the_mean_of_the_share():
    share = np.array([[0.0, 0.2], [0.7, 1.0]])
    weights = np.array([2, 3, 3, 8])
    law = sum_law(weights, share)
    assert law.shape == (2, 2, 17)
    np.testing.assert_allclose(law.sum(axis=-1), 1)
    np.testing.assert_allclose(law @ np.arange(17), 16 * share)


def test_one_call_does_many_totals():
    weights = np.arange(1, 8)
    totals = np.arange(29).reshape(1, 29)
    low, high = share_limits(weights, totals, totals, 0.95)
    assert low.shape == high.shape == (1, 29)
    assert (np.diff(low) >= 0).all()
    np.testing.assert_allclose(low, 1 - high[:, ::-1], atol=1e-12)


def test_undecided_ranks_widen_the_interval():
    weights = np.arange(1, 9)
    decided = share_limits(weights, 20, 20, 0.95)
    open_ranks = share_limits(weights, 17, 20, 0.95)
    assert open_ranks[0] < decided[0]
    assert open_ranks[1] == decided[1]


@pytest.mark.parametrize("n", [6, 10, 20])
@pytest.mark.parametrize("shift", [0.0, 0.5, 1.2])
def test_after_a_shift_of_a_normal_law_the_level_is_held(n, shift):
    """The target is the mean of the coefficient itself, found from the same draws.

    10,000 data sets: three standard errors of the share covered are .0065.
    """
    d = np.random.default_rng(11).normal(size=(10_000, n)) + shift
    ranks = stats.rankdata(np.abs(d), axis=-1)
    totals = ((d > 0) * ranks).sum(axis=-1).astype(int)
    weights = np.arange(1, n + 1)
    every = np.arange(weights.sum() + 1)
    low, high = share_limits(weights, every, every, 0.95)
    target = totals.mean() / weights.sum()
    covered = np.mean((low[totals] <= target) & (target <= high[totals]))
    assert covered >= 0.95 - 3 * math.sqrt(0.95 * 0.05 / 10_000)
