"""Relative effects, their variance and the ANOVA-type statistic against plain definitions."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from robustrm.kernels.rank_model import (
    anova_type,
    effect_errors,
    effect_influence,
    effect_intervals,
    logit_interval,
    overall_midranks,
    relative_effects,
)
from tests.methods.tables import tables

TABLES = tables(st.integers(2, 6), st.integers(2, 4), most=7)


def above(x, y):
    """1 if x lies above y, a half if they are equal."""
    return (x > y) + (x == y) / 2


def weighted_effect(rows, j, weights):
    """P(Z < X_j) + P(Z = X_j)/2 with subjects weighted, Z from the mean over the occasions."""
    k = len(rows[0])
    return sum(
        weights[i] * weights[m] * above(rows[i][j], rows[m][s]) / k
        for i in range(len(rows))
        for m in range(len(rows))
        for s in range(k)
    )


@pytest.mark.reference
@pytest.mark.property
@given(rows=TABLES)
def test_ranks_go_over_all_cells_as_in_scipy_rankdata(rows):
    values = np.array(rows, dtype=float)
    expected = stats.rankdata(values.ravel()).reshape(values.shape)
    np.testing.assert_array_equal(overall_midranks(values), expected)


@pytest.mark.property
@given(rows=TABLES)
def test_relative_effects_are_the_probabilities_that_define_them(rows):
    effects = relative_effects(overall_midranks(np.array(rows, dtype=float)))
    equal = [1 / len(rows)] * len(rows)
    expected = [weighted_effect(rows, j, equal) for j in range(len(rows[0]))]
    np.testing.assert_allclose(effects, expected, rtol=1e-12)
    assert effects.mean() == pytest.approx(0.5)


@pytest.mark.property
@given(rows=TABLES)
def test_influence_is_the_derivative_of_the_effect_in_the_weight_of_a_subject(rows):
    """Hampel (1974): the effect is quadratic in the weights, so the central difference is exact."""
    influence = effect_influence(np.array(rows, dtype=float))
    n, k = len(rows), len(rows[0])
    step = 0.01
    for i in range(n):
        for j in range(k):
            ends = []
            for e in (step, -step):
                weights = [(1 - e) / n + (e if m == i else 0) for m in range(n)]
                ends.append(weighted_effect(rows, j, weights))
            derivative = (ends[0] - ends[1]) / (2 * step)
            centred = influence[i, j] - influence[:, j].mean()
            assert centred == pytest.approx(derivative, abs=1e-10)


def test_errors_are_the_standard_deviation_of_the_influence_over_root_n():
    values = np.random.default_rng(1).lognormal(size=(9, 3))
    influence = effect_influence(values)
    expected = [stats.sem(influence[:, j]) for j in range(3)]
    np.testing.assert_allclose(effect_errors(values), expected, rtol=1e-12)


def by_definition(ranks):
    """F and df1 in matrices, as Brunner, Domhof & Langer (2002) write them."""
    n, k = ranks.shape
    p = (ranks.mean(axis=0) - 0.5) / (n * k)
    v = np.cov(ranks.T) / (n * k) ** 2
    t = np.eye(k) - np.ones((k, k)) / k
    trace = np.trace(t @ v)
    return n * p @ t @ p / trace, trace**2 / np.trace(t @ v @ t @ v)


@pytest.mark.property
@given(rows=TABLES)
def test_the_statistic_is_that_of_the_matrices_and_not_defined_without_spread(rows):
    ranks = overall_midranks(np.array(rows, dtype=float))
    f, df = anova_type(ranks)
    steps = ranks - ranks[:, :1]
    if (steps == steps[0]).all():
        assert math.isnan(f)
        assert math.isnan(df)
    else:
        expected = by_definition(ranks)
        assert (f, df) == pytest.approx(expected, rel=1e-9, abs=1e-12)


def test_many_tables_at_once_are_the_tables_one_by_one():
    values = np.random.default_rng(3).integers(1, 9, size=(2, 3, 7, 4)).astype(float)
    values[0, 0] = 5.0  # not defined, and no warning
    f, df = anova_type(overall_midranks(values))
    errors = effect_errors(values)
    assert f.shape == df.shape == (2, 3)
    assert math.isnan(f[0, 0])
    one, one_df = anova_type(overall_midranks(values[1, 2]))
    assert (f[1, 2], df[1, 2]) == (pytest.approx(one), pytest.approx(one_df))
    np.testing.assert_allclose(errors[1, 2], effect_errors(values[1, 2]))
    assert (errors[0, 0] == 0).all()


def test_a_logit_interval_by_hand():
    # logit(0.8) = ln 4; 0.1 / (0.8 · 0.2) = 0.625; limits at ln 4 ∓ 2 · 0.625
    low, high = logit_interval(np.array(0.8), np.array(0.1), 2.0)
    for limit, place in ((low, math.log(4) - 1.25), (high, math.log(4) + 1.25)):
        assert limit == pytest.approx(1 / (1 + math.exp(-place)))


@pytest.mark.parametrize(("probability", "error"), [(0.0, 0.0), (1.0, 0.0), (0.6, 0.0)])
def test_no_logit_interval_at_an_end_or_without_an_error(probability, error):
    low, high = logit_interval(np.array(probability), np.array(error), 2.0)
    assert math.isnan(low)
    assert math.isnan(high)


@pytest.mark.parametrize("k", [2, 3, 5])
def test_intervals_of_effects_keep_to_what_an_effect_can_be(k):
    effects = np.linspace(0.5 / k + 0.01, 1 - 0.5 / k - 0.01, k)
    low, high = effect_intervals(effects, np.full(k, 0.2), 3.0)
    assert (low >= 0.5 / k).all()
    assert (high <= 1 - 0.5 / k).all()
    assert ((low < effects) & (effects < high)).all()


@pytest.mark.slow
@pytest.mark.parametrize("spread", [1.0, 3.0])
def test_errors_are_the_spread_of_the_effects_over_many_samples(spread):
    """Unequal means and spread, correlated occasions: far from the null hypothesis."""
    rng = np.random.default_rng(8)
    shape = (4000, 40)
    level = rng.normal(size=(*shape, 1))
    values = level + rng.normal(size=(*shape, 3)) * [1.0, 1.0, spread] + [0.0, 0.7, 1.4]
    errors = effect_errors(values)
    effects = relative_effects(overall_midranks(values))
    np.testing.assert_allclose(errors.mean(axis=0), effects.std(axis=0), rtol=0.04)
