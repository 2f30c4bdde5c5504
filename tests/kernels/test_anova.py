"""Sphericity kernels against eigenvalues, statsmodels and invariances."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats
from statsmodels.stats.multivariate import test_cov_spherical as sphericity

from robustrm.kernels.anova import (
    contrast_covariance,
    epsilon_greenhouse_geisser,
    epsilon_huynh_feldt,
    f_tail,
    mauchly,
    sums_of_squares,
    to_contrasts,
)
from robustrm.kernels.contrasts import helmert

SEEDS = st.integers(0, 10**6)
SIZES = st.integers(3, 6)


def sample(seed, k, n=9):
    rng = np.random.default_rng(seed)
    return rng.lognormal(size=(n, k)) @ rng.normal(size=(k, k))


@pytest.mark.parametrize("k", range(2, 9))
def test_contrasts_are_orthonormal_and_sum_to_zero(k):
    rows = helmert(k)
    np.testing.assert_allclose(rows @ rows.T, np.eye(k - 1), atol=1e-14)
    np.testing.assert_allclose(rows.sum(axis=1), 0, atol=1e-14)


@pytest.mark.reference
@pytest.mark.property
@given(SEEDS, SIZES)
def test_mauchly_agrees_with_statsmodels_test_cov_spherical(seed, k):
    y = sample(seed, k)
    contrasts = contrast_covariance(y)
    w, chi2, p, df = mauchly(contrasts, len(y) - 1)
    # statsmodels takes the number of rows and the same Box factor with n − 1
    expected = sphericity(contrasts, len(y))
    assert chi2 == pytest.approx(expected.statistic, rel=1e-9)
    assert p == pytest.approx(expected.pvalue, rel=1e-8)
    assert df == expected.df
    determinant, trace = np.linalg.det(contrasts), np.trace(contrasts)
    assert w == pytest.approx(determinant / (trace / (k - 1)) ** (k - 1), rel=1e-8)


@pytest.mark.property
@given(SEEDS, SIZES)
def test_box_epsilon_is_the_spread_of_the_eigenvalues_of_the_centred_covariance(seed, k):
    """(Σλ)² / ((k − 1) Σλ²) over the eigenvalues of the double-centred covariance (Box 1954)."""
    y = sample(seed, k)
    centring = np.eye(k) - 1 / k
    values = np.linalg.eigvalsh(centring @ np.cov(y.T) @ centring)
    expected = values.sum() ** 2 / ((k - 1) * (values**2).sum())
    assert epsilon_greenhouse_geisser(contrast_covariance(y)) == pytest.approx(expected, rel=1e-10)


@pytest.mark.property
@given(SEEDS, SIZES)
def test_epsilon_and_mauchly_do_not_depend_on_the_order_of_the_occasions(seed, k):
    y = sample(seed, k)
    swapped = y[:, np.random.default_rng(seed).permutation(k)]
    one, other = contrast_covariance(y), contrast_covariance(swapped)
    assert epsilon_greenhouse_geisser(one) == pytest.approx(epsilon_greenhouse_geisser(other))
    assert mauchly(one, 8)[0] == pytest.approx(mauchly(other, 8)[0], rel=1e-7)


def test_compound_symmetry_has_epsilon_1_and_w_1():
    covariance = 2.0 * np.eye(4) + 3.0
    contrasts = to_contrasts(covariance)
    assert epsilon_greenhouse_geisser(contrasts) == pytest.approx(1)
    assert mauchly(contrasts, 20)[0] == pytest.approx(1)
    assert epsilon_huynh_feldt(np.array(1.0), 4, 20) == 1


def test_one_moving_contrast_has_the_lower_bound():
    direction = np.array([1.0, -1.0, 0.0, 0.0])
    contrasts = to_contrasts(np.outer(direction, direction))
    assert epsilon_greenhouse_geisser(contrasts) == pytest.approx(1 / 3)


def test_contrast_covariance_is_that_of_the_occasions_rotated():
    y = sample(3, 4)
    np.testing.assert_allclose(contrast_covariance(y), to_contrasts(np.cov(y.T)), rtol=1e-12)


def test_one_call_does_many_tables_and_nothing_warns():
    y = np.stack([sample(seed, 4) for seed in range(5)] + [np.ones((9, 4))])
    squares = sums_of_squares(y)
    contrasts = contrast_covariance(y)
    epsilon = epsilon_greenhouse_geisser(contrasts)
    w, chi2, p, _ = mauchly(contrasts, 8)
    assert squares.f_ratio(9, 4).shape == epsilon.shape == w.shape == chi2.shape == p.shape == (6,)
    assert squares.f_ratio(9, 4)[2] == sums_of_squares(y[2]).f_ratio(9, 4)
    assert w[2] == pytest.approx(mauchly(contrasts[2], 8)[0], rel=1e-14)
    for result in (squares.f_ratio(9, 4), epsilon, w, p):
        assert np.isnan(result[-1])
        assert np.isfinite(result[:-1]).all()


def test_mauchly_is_not_defined_below_as_many_degrees_of_freedom_as_contrasts():
    w, _, p, _ = mauchly(contrast_covariance(sample(1, 5, n=4)), 3)
    assert np.isnan(w)
    assert np.isnan(p)


@pytest.mark.reference
def test_f_tail_agrees_with_scipy_at_fractional_degrees_of_freedom():
    for f, df1, df2 in [(3.1, 1.9, 21.4), (0.2, 0.7, 3.3), (120.0, 2.0, 16.0)]:
        assert f_tail(np.array(f), df1, df2) == pytest.approx(stats.f.sf(f, df1, df2), rel=1e-12)
