"""Hotelling's test: statsmodels, the paired t, and what is refused."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy import stats
from statsmodels.stats.multivariate import test_mvmean as mean_vector

import robustrm as rm
from robustrm.results import note_codes
from tests.methods.enumeration import both_scales
from tests.methods.tables import PAIR, measured, raw

pytestmark = pytest.mark.reference


@both_scales
@pytest.mark.property
@given(rows=measured(n=st.integers(6, 12), k=st.integers(3, 5)))
def test_f_and_p_agree_with_statsmodels_on_successive_differences(scale, rows):
    values = np.log(rows) if scale == "log" else np.array(rows)
    gaps = np.diff(values, axis=1)
    assume(np.linalg.cond(np.cov(gaps.T)) < 1e6)
    expected = mean_vector(gaps, np.zeros(gaps.shape[1]))
    result = rm.hotelling(raw(rows).on_scale(scale))
    assert result.details["t_squared"] == pytest.approx(expected.t2, rel=1e-7, abs=1e-12)
    assert result.statistic == pytest.approx(expected.statistic, rel=1e-7, abs=1e-12)
    assert result.p_value == pytest.approx(expected.pvalue, rel=1e-6)
    assert result.df == tuple(expected.df)


@both_scales
@pytest.mark.property
@given(rows=measured(n=st.integers(3, 12), k=st.just(2)))
def test_with_two_occasions_f_is_the_square_of_the_paired_t(scale, rows):
    values = np.log(rows) if scale == "log" else np.array(rows)
    gaps = np.diff(values, axis=1).ravel()
    assume(np.ptp(gaps) > 1e-6 * np.abs(values).max())
    expected = stats.ttest_1samp(gaps, 0)
    result = rm.hotelling(raw(rows).on_scale(scale))
    assert result.statistic == pytest.approx(expected.statistic**2, rel=1e-7, abs=1e-12)
    assert result.p_value == pytest.approx(expected.pvalue, rel=1e-6)
    t = rm.paired_t(raw(rows).on_scale(scale), *PAIR)
    assert result.statistic == pytest.approx(t.statistic**2, rel=1e-7, abs=1e-12)


@pytest.mark.parametrize(
    "rows",
    [
        [[1, 2, 3], [4, 5, 6], [10, 11, 12]],
        [[0.1, 0.3, 0.5], [0.2, 0.4, 0.9], [0.4, 0.6, 0.7]],
        [[5, 5, 5], [7, 7, 7], [8, 8, 8]],
    ],
)
def test_a_contrast_without_spread_gives_no_p_and_a_note_says_why(rows):
    result = rm.hotelling(raw(rows))
    assert math.isnan(result.statistic)
    assert math.isnan(result.p_value)
    assert note_codes(result.notes) == ("zero variance",)


def test_fewer_subjects_than_occasions_are_refused_with_the_numbers():
    message = "needs at least 4 subjects with all 4 occasions, as many as occasions, got 3"
    with pytest.raises(rm.TooFewError, match=message):
        rm.hotelling(raw([[1, 2, 4, 5], [2, 9, 1, 3], [5, 5, 2, 8]]))


def test_as_many_subjects_as_occasions_leave_one_degree_of_freedom():
    result = rm.hotelling(raw([[1, 2, 4], [2, 9, 1], [5, 5, 2]]))
    assert list(result.df) == [2, 1]
    assert 0 < result.p_value <= 1


def test_half_the_limit_enters():
    values = [[0.4, 1.0, 2.2], [2.0, 1.4, 0.9], [0.9, 0.6, 3.1], [1.1, 1.9, 2.0]]
    below = np.array(values) == 0.4
    found = rm.hotelling(raw(values, below=below, lower_limit=0.4))
    entered = rm.hotelling(raw(np.where(below, 0.2, values)))
    assert found.statistic == pytest.approx(entered.statistic, rel=1e-12)


def test_the_estimand_follows_the_scale():
    table = raw([[1, 2, 4], [2, 3, 9], [4, 5, 7]])
    assert rm.hotelling(table).estimand == "arithmetic means"
    assert rm.hotelling(table.log()).estimand == "geometric means"


def test_a_vanishing_p_is_small_but_not_zero():
    rng = np.random.default_rng(1)
    rows = (100 * np.arange(1, 4) + rng.normal(0, 1e-7, size=(60, 3))).round(9)
    assert rm.hotelling(raw(rows)).p_value > 0
