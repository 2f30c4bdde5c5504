"""The exact binomial interval against SciPy and its definition."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from robustrm.kernels.binomial import clopper_pearson

COUNTS = st.integers(1, 60).flatmap(lambda n: st.tuples(st.integers(0, n), st.just(n)))


@pytest.mark.reference
@pytest.mark.property
@given(COUNTS, st.sampled_from([0.8, 0.95, 0.99, 0.999]))
def test_agrees_with_scipy_binomtest(counts, level):
    x, n = counts
    expected = stats.binomtest(x, n).proportion_ci(level, method="exact")
    low, high = clopper_pearson(x, n, level)
    assert low == pytest.approx(expected.low, rel=1e-9, abs=1e-12)
    assert high == pytest.approx(expected.high, rel=1e-9, abs=1e-12)


@pytest.mark.property
@given(COUNTS)
def test_each_limit_has_half_of_the_rest_in_its_tail(counts):
    x, n = counts
    low, high = clopper_pearson(x, n, 0.9)
    if x > 0:
        assert stats.binom.sf(x - 1, n, low) == pytest.approx(0.05, rel=1e-7)
    if x < n:
        assert stats.binom.cdf(x, n, high) == pytest.approx(0.05, rel=1e-7)


def test_no_and_all_successes_reach_the_ends():
    low, high = clopper_pearson([0, 7], 7, 0.95)
    assert (low[0], high[1]) == (0, 1)
    assert high[0] == pytest.approx(1 - 0.025 ** (1 / 7))
    assert low[1] == pytest.approx(0.025 ** (1 / 7))


def test_one_call_does_many_counts():
    low, high = clopper_pearson(np.arange(6), 5, 0.95)
    assert low.shape == high.shape == (6,)
    assert (np.diff(low) > 0).all()
    np.testing.assert_allclose(low, 1 - high[::-1], atol=1e-12)
