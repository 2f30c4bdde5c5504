"""Interpolated sign intervals: by hand, by exact fractions, and by their coverage."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from robustrm.kernels.order_intervals import interpolated_limits, interpolation, order_level


def tail(n: int, k: int) -> Fraction:
    """P(B <= k - 1) for B binomial with n trials and probability 1/2."""
    return Fraction(sum(math.comb(n, i) for i in range(k)), 2**n)


@pytest.mark.reference
def test_a_sample_of_nineteen_by_hand():
    """Data: self-awareness scores, Wilcox, Introduction to Robust Estimation (from memory).

    Binomial coefficients by hand: P(B <= 4) = 5036/524288, P(B <= 5) = 16664/524288, so the
    levels are .98079 and .93643; I = .69427, lambda = 14 · .69427/(5 + 9 · .69427) = .86402;
    151 + .86402 · 59 = 201.98 and 428 - .86402 · 52 = 383.07.
    """
    d = np.array([77, 87, 88, 114, 151, 210, 219, 246, 253, 262, 296, 299, 306, 376, 428, 515,
                  666, 1310, 2611.0])  # fmt: skip
    found = interpolation(19, 0.95)
    assert found is not None
    assert found.rank == 5
    assert (found.outer, found.inner) == pytest.approx((1 - 10072 / 2**19, 1 - 33328 / 2**19))
    assert found.inward == pytest.approx(0.86402, abs=5e-6)
    low, high = interpolated_limits(d, found)
    assert (float(low), float(high)) == pytest.approx((201.98, 383.07), abs=0.005)


@pytest.mark.property
@given(st.integers(1, 40), st.fractions(Fraction(1, 100), Fraction(99, 100)))
def test_rank_and_weight_are_those_of_exact_fractions(n, level):
    found = interpolation(n, float(level))
    levels = [1 - 2 * tail(n, k) for k in range(1, n // 2 + 1)]
    fits = [k for k, attained in enumerate(levels, 1) if attained >= level]
    if not fits:
        assert found is None
        return
    assert found is not None
    k = fits[-1]
    outer, inner = 1 - 2 * tail(n, k), 1 - 2 * tail(n, k + 1)
    share = (outer - level) / (outer - inner)
    assert found.rank == k
    assert found.inward == pytest.approx(float((n - k) * share / (k + (n - 2 * k) * share)))
    assert order_level(n, k) == pytest.approx(float(outer))


@pytest.mark.parametrize("n", [1, 2, 3, 4, 5])
def test_below_six_nothing_reaches_95_percent(n):
    assert interpolation(n, 0.95) is None


def test_a_level_that_is_attained_is_not_interpolated():
    found = interpolation(6, 0.96875)
    assert found is not None
    assert (found.rank, found.inward) == (1, 0)


@pytest.mark.parametrize(("n", "level"), [(6, 0.95), (9, 0.9), (14, 0.95), (19, 0.8)])
def test_the_weights_are_right_for_a_double_exponential_law(n, level):
    # the law for which Hettmansperger & Sheather (1986) derive them; three standard errors
    found = interpolation(n, level)
    assert found is not None
    draws = 100_000
    low, high = interpolated_limits(np.random.default_rng(7).laplace(size=(draws, n)), found)
    covered = float(np.mean((low <= 0) & (high >= 0)))
    assert covered == pytest.approx(level, abs=3 * math.sqrt(level * (1 - level) / draws))


@pytest.mark.property
@given(
    st.lists(st.floats(-1e6, 1e6), min_size=2, max_size=20), st.floats(0.01, 0.8),
    st.floats(0.01, 0.19),
)  # fmt: skip
def test_intervals_hold_the_median_and_grow_with_the_level(d, level, more):
    y = np.array(d)
    found, wider = interpolation(y.size, level), interpolation(y.size, level + more)
    if found is None or wider is None:
        return
    (low, high), (lower, higher) = interpolated_limits(y, found), interpolated_limits(y, wider)
    slack = 1e-9 * np.abs(y).max()
    assert low <= np.median(y) + slack
    assert high >= np.median(y) - slack
    assert lower <= low + slack
    assert higher >= high - slack


def test_one_call_does_many_samples_and_equal_values_stay_exact():
    found = interpolation(9, 0.95)
    assert found is not None
    d = np.random.default_rng(1).normal(size=(2, 3, 9))
    low, high = interpolated_limits(d, found)
    assert low.shape == high.shape == (2, 3)
    assert float(low[1, 2]) == float(interpolated_limits(d[1, 2], found)[0])
    low, high = interpolated_limits(np.full(9, 0.1), found)
    assert (float(low), float(high)) == (0.1, 0.1)
