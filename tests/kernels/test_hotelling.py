"""Hotelling's T²: against statsmodels, any contrasts, any unit, and where it is not defined."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from statsmodels.stats.multivariate import test_mvmean as mean_vector

from robustrm.kernels.hotelling import t_squared, to_f

SEEDS = st.integers(0, 10**6)
SIZES = st.integers(2, 6)


def sample(seed, k, n=9):
    rng = np.random.default_rng(seed)
    return rng.lognormal(size=(n, k)) @ rng.normal(size=(k, k))


@pytest.mark.reference
@pytest.mark.property
@given(SEEDS, st.integers(3, 6))
def test_t_squared_f_agree_with_statsmodels_on_successive_differences(seed, k):
    y = sample(seed, k)
    expected = mean_vector(np.diff(y, axis=1), np.zeros(k - 1))
    t2 = t_squared(y)
    assert t2 == pytest.approx(expected.t2, rel=1e-6)
    assert to_f(t2, len(y), k) == pytest.approx(expected.statistic, rel=1e-6)
    assert (k - 1, len(y) - k + 1) == tuple(expected.df)


@pytest.mark.property
@given(SEEDS, SIZES)
def test_any_full_set_of_contrasts_gives_the_same_value(seed, k):
    y = sample(seed, k)
    rng = np.random.default_rng(seed)
    contrasts = rng.normal(size=(k - 1, k))
    contrasts -= contrasts.mean(axis=1, keepdims=True)
    scores = y @ contrasts.T
    mean, covariance = scores.mean(axis=0), np.atleast_2d(np.cov(scores.T))
    if np.linalg.cond(covariance) < 1e8:
        expected = len(y) * mean @ np.linalg.solve(covariance, mean)
        assert t_squared(y) == pytest.approx(expected, rel=1e-6)


@pytest.mark.property
@given(SEEDS, SIZES, st.sampled_from([2.0**-900, 2.0**-30, 8.0, 2.0**400]))
def test_neither_the_unit_nor_the_level_of_a_subject_matters(seed, k, unit):
    y = sample(seed, k)
    moved = y + np.random.default_rng(seed).normal(size=(len(y), 1))
    assert t_squared(y * unit) == pytest.approx(t_squared(y), rel=1e-9)
    assert t_squared(moved) == pytest.approx(t_squared(y), rel=1e-6)


SINGULAR = {
    "one contrast without spread": [[1, 2, 5], [2, 3, 9], [4, 5, 1], [7, 8, 8]],
    "the same with decimals": [[0.1, 0.3, 5], [0.2, 0.4, 9], [0.7, 0.9, 1], [1.1, 1.3, 8]],
    "two contrasts in proportion": [[0, 1, 2], [0, 2, 4], [0, 3, 6], [0, 5, 10]],
    "no change": [[3, 3, 3], [3, 3, 3], [5, 5, 5], [7, 7, 7]],
    "zero": [[0, 0, 0]] * 4,
    "fewer subjects than occasions": [[1, 2, 5], [2, 7, 9]],
}


@pytest.mark.parametrize("name", SINGULAR)
def test_a_singular_covariance_gives_no_value_and_no_warning(name):
    assert math.isnan(t_squared(np.array(SINGULAR[name], dtype=float)))


def test_as_many_subjects_as_occasions_are_enough():
    assert math.isfinite(t_squared(np.array([[1.0, 2, 5], [2, 7, 9], [4, 5, 1]])))


def test_many_tables_at_once_are_the_tables_one_by_one():
    y = np.stack([sample(seed, 4) for seed in range(5)] + [np.ones((9, 4))])
    found = t_squared(y)
    assert found.shape == (6,)
    assert math.isnan(found[-1])
    assert found[3] == pytest.approx(t_squared(y[3]), rel=1e-12)
