"""Limits of the noncentrality against SciPy and against quadrature."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import integrate, optimize, stats

from robustrm.kernels.noncentral_t import noncentrality_limits


def below(t: float, df: float, shift: float) -> float:
    """P(T <= t) as P(Z <= t √(χ²/df) − δ), by quadrature over χ²: no noncentral t anywhere."""
    cuts = stats.chi2.ppf([1e-12, 0.01, 0.1, 0.5, 0.9, 0.99, 1 - 1e-12], df)
    edges = np.concatenate([[0], cuts])
    return sum(
        integrate.quad(
            lambda x: stats.norm.cdf(t * math.sqrt(x / df) - shift) * stats.chi2.pdf(x, df),
            a,
            b,
            epsabs=1e-12,
        )[0]
        for a, b in itertools.pairwise(edges)
    )


@pytest.mark.reference
@pytest.mark.parametrize("df", [1, 4, 13, 29])
@pytest.mark.parametrize("t", [-7.5, -2.45, -0.4, 0.0, 1.0, 3.2, 40.0])
@pytest.mark.parametrize("level", [0.5, 0.95])
def test_the_limits_put_t_at_the_tails(df, t, level):
    low, high = (float(limit) for limit in noncentrality_limits(t, df, level))
    tail = (1 - level) / 2
    assert below(t, df, low) == pytest.approx(1 - tail, abs=1e-8)
    assert below(t, df, high) == pytest.approx(tail, abs=1e-8)


@pytest.mark.reference
@pytest.mark.parametrize(("t", "df"), [(-2.449490, 3), (-1.5, 13), (2.0, 9), (0.3, 29)])
def test_the_limits_are_those_of_inverting_scipys_noncentral_t(t, df):
    low, high = noncentrality_limits(t, df, 0.95)
    for limit, p in ((low, 0.975), (high, 0.025)):
        found = optimize.brentq(lambda shift, p=p: stats.nct.cdf(t, df, shift) - p, -8, 8)
        assert float(limit) == pytest.approx(found, abs=1e-7)


def test_at_zero_only_the_normal_part_is_left():
    # P(T <= 0) = P(Z <= −δ)
    low, high = noncentrality_limits(0.0, 5, 0.95)
    assert (float(low), float(high)) == pytest.approx((-1.959964, 1.959964), abs=1e-6)


@pytest.mark.property
@given(st.floats(-50, 50), st.integers(1, 60), st.floats(0.3, 0.99))
def test_limits_are_ordered_and_turn_with_the_sign(t, df, level):
    low, high = noncentrality_limits(t, df, level)
    assert low <= high
    mirrored = noncentrality_limits(-t, df, level)
    assert (float(-mirrored[1]), float(-mirrored[0])) == pytest.approx((float(low), float(high)))


def test_far_out_the_limits_go_on_without_a_step():
    near, far = (noncentrality_limits(t, 7, 0.95) for t in (999.0, 1_001.0))
    assert float(near[0]) / 999 == pytest.approx(float(far[0]) / 1_001, rel=1e-4)
    assert float(near[1]) / 999 == pytest.approx(float(far[1]) / 1_001, rel=1e-4)
    assert np.isfinite(noncentrality_limits(1e12, 7, 0.95)).all()


def test_one_call_does_many_and_nan_stays_nan():
    t = np.array([[0.5, -2.0], [math.nan, 3.0]])
    low, high = noncentrality_limits(t, 9, 0.9)
    assert low.shape == high.shape == (2, 2)
    assert np.isnan([low[1, 0], high[1, 0]]).all()
    assert float(low[0, 1]) == float(noncentrality_limits(-2.0, 9, 0.9)[0])
