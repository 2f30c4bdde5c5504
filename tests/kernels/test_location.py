"""Location and spread against SciPy, over many samples at once."""

from __future__ import annotations

import functools

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from robustrm.kernels import location

SAMPLES = st.lists(st.floats(0.01, 1e4), min_size=3, max_size=25)
TRIMS = st.sampled_from([0.0, 0.1, 0.2, 0.25, 0.4])


@pytest.mark.reference
@pytest.mark.property
@given(SAMPLES, TRIMS)
def test_trimmed_mean_and_winsorized_variance_agree_with_scipy(values, trim):
    y = np.array(values)
    g = location.cut(y.size, trim)
    fraction = (g + 0.5) / y.size  # which SciPy cuts down to g values, free of rounding
    expected = stats.mstats.winsorize(y, (fraction, fraction))
    assert location.trimmed_mean(y, trim) == pytest.approx(np.sort(y)[g : y.size - g].mean())
    assert location.trimmed_mean(y, trim) == pytest.approx(stats.trim_mean(y, trim + 1e-12))
    variance = np.asarray(expected).var(ddof=1)
    assert location.winsorized_variance(y, trim) == pytest.approx(variance, rel=1e-9, abs=1e-9)


@pytest.mark.reference
@pytest.mark.property
@given(SAMPLES)
def test_madn_and_skewness_agree_with_scipy(values):
    y = np.array(values)
    expected = stats.median_abs_deviation(y, scale="normal")
    assert location.madn(y) == pytest.approx(expected, rel=1e-10, abs=1e-12)
    if np.ptp(y) > 1e-3 * y.max():
        assert location.skewness(y) == pytest.approx(stats.skew(y, bias=False), rel=1e-8, abs=1e-8)


@pytest.mark.parametrize(
    ("n", "trim", "g"), [(15, 0.2, 3), (19, 0.2, 3), (10, 0.1, 1), (9, 0.1, 0), (30, 0.1, 3)]
)
def test_the_number_cut_is_the_whole_part(n, trim, g):
    assert location.cut(n, trim) == g


def test_winsorizing_keeps_the_order_of_the_sample():
    y = np.array([9.0, 1.0, 5.0, 3.0, 100.0])
    np.testing.assert_array_equal(location.winsorized(y, 0.2), [9, 3, 5, 3, 9])


@pytest.mark.parametrize(
    "kernel",
    [
        functools.partial(location.trimmed_mean, trim=0.2),
        functools.partial(location.winsorized_variance, trim=0.2),
        location.madn,
        location.skewness,
    ],
    ids=["trimmed mean", "Winsorized variance", "MADN", "skewness"],
)
def test_one_call_does_many_samples_and_changes_none(kernel):
    y = np.random.default_rng(1).lognormal(size=(3, 4, 11))
    before = y.copy()
    found = kernel(y)
    assert found.shape == (3, 4)
    assert found[2, 3] == pytest.approx(float(kernel(y[2, 3])), rel=1e-14)
    np.testing.assert_array_equal(y, before)


def test_the_skewness_of_a_constant_is_nan_without_a_warning():
    assert np.isnan(location.skewness(np.full(5, 2.0)))
