"""Summaries of an occasion against SciPy, and what limits do to them."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy import stats

from robustrm.methods.summary import summarize
from tests.methods.tables import measured, raw


@pytest.mark.reference
@pytest.mark.property
@given(rows=measured(n=st.integers(3, 25), k=st.just(2)))
def test_moments_and_order_statistics_agree_with_scipy_and_numpy(rows):
    sample = np.array(rows)[:, 0]
    assume(np.ptp(sample) > 0.01 * sample.max())
    found = summarize(raw(rows))[0]
    expected = {
        "mean": sample.mean(),
        "sd": sample.std(ddof=1),
        "trimmed_mean": stats.trim_mean(sample, 0.2),
        "winsorized_sd": np.std(stats.mstats.winsorize(sample, (0.2, 0.2)), ddof=1),
        "geometric_mean": stats.gmean(sample),
        "geometric_sd": stats.gstd(sample),
        "madn": stats.median_abs_deviation(sample, scale="normal"),
        "skewness": stats.skew(sample, bias=False),
        "median": np.median(sample),
        "q1": np.quantile(sample, 0.25),
        "q3": np.quantile(sample, 0.75),
        "smallest": sample.min(),
        "largest": sample.max(),
    }
    for name, value in expected.items():
        assert getattr(found, name) == pytest.approx(value, rel=1e-9, abs=1e-9), name


def test_a_quantile_among_values_below_the_limit_is_not_a_number():
    rows = [[0.3, 1.0], [0.3, 2.0], [0.7, 3.0], [1.5, 4.0], [2.0, 5.0]]
    below = [[True, False], [True, False], *[[False] * 2] * 3]
    found = summarize(raw(rows, below=below, lower_limit=0.3))[0]
    assert (found.n, found.n_below) == (5, 2)
    assert (found.smallest, found.q1) == (None, None)
    assert (found.median, found.q3, found.largest) == (0.7, 1.5, 2.0)
    assert found.mean == pytest.approx((2 * 0.15 + 0.7 + 1.5 + 2.0) / 5)


def test_mostly_beyond_the_limit_leaves_no_moments():
    rows = [[0.3, 1.0], [0.3, 2.0], [0.7, 3.0]]
    below = [[True, False], [True, False], [False, False]]
    first, second = summarize(raw(rows, below=below, lower_limit=0.3))
    assert (first.mean, first.sd, first.geometric_mean, first.madn) == (None, None, None, None)
    assert first.largest == 0.7
    assert second.mean == 2


def test_missing_cells_are_counted_and_not_entered():
    found = summarize(raw([[1.0, math.nan], [3.0, math.nan], [math.nan, math.nan], [5.0, 2.0]]))
    assert [(s.n, s.n_missing) for s in found] == [(3, 1), (1, 3)]
    assert (found[0].mean, found[1].mean, found[1].sd) == (3.0, 2.0, None)


def test_zero_and_negative_values_have_no_geometric_mean():
    found = summarize(raw([[0.0, -1.0], [2.0, 3.0], [1.0, 2.0]]))
    assert [s.geometric_mean for s in found] == [None, None]
