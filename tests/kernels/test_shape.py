"""Positions, lines and distances that the figures of the diagnostics draw."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from robustrm.kernels import shape


@pytest.mark.parametrize("n", [1, 2, 7, 40])
def test_positions_are_those_of_statsmodels(n):
    """(i − a) / (n + 1 − 2a) with a = 3/8, and the normal quantiles of SciPy."""
    from statsmodels.graphics.gofplots import plotting_pos

    expected = stats.norm.ppf(plotting_pos(n, a=0.375))
    np.testing.assert_allclose(shape.normal_positions(n), expected, atol=1e-14)


def test_no_values_have_no_positions():
    assert shape.normal_positions(0).shape == (0,)


@pytest.mark.parametrize("seed", range(5))
def test_slope_and_intercept_are_those_of_scipy(seed):
    """`theilslopes` with method "joint": the intercept is the median of the residuals."""
    rng = np.random.default_rng(seed)
    level, spread = np.exp(rng.normal(size=(2, 9 + seed)))
    expected = stats.theilslopes(np.log(spread), np.log(level), method="joint")  # type: ignore[call-overload]  # the stubs lack it
    slope = shape.spread_level_slope(level, spread)
    assert slope == pytest.approx(expected.slope, abs=1e-12)
    found = shape.spread_level_intercept(level, spread, slope)
    assert found == pytest.approx(expected.intercept, abs=1e-12)


def test_the_intercept_leaves_out_whom_the_slope_leaves_out():
    level, spread = np.array([1.0, 2.0, 4.0, 0.0, 9.0]), np.array([0.5, 1.0, 2.0, 3.0, 0.0])
    assert shape.spread_level_slope(level, spread) == pytest.approx(1.0)
    assert shape.spread_level_intercept(level, spread, 1.0) == pytest.approx(np.log(0.5))


def test_the_quartile_line_of_a_normal_law_is_its_mean_and_sd():
    y = 3.0 + 2.0 * stats.norm.ppf((np.arange(10_001) + 0.5) / 10_001)
    assert shape.quartile_line(y) == pytest.approx((3.0, 2.0), rel=1e-3)


def test_far_tails_do_not_move_the_quartile_line():
    y = np.arange(20.0)
    far = np.concatenate([[-1e6], y[1:-1], [1e6]])
    assert shape.quartile_line(far) == shape.quartile_line(y)


@pytest.mark.parametrize(
    ("ordered", "below", "above"),
    [
        ([1, 2, 4, 9], [2, 1], [6, 1]),  # median 3, by hand
        ([1, 2, 4, 5, 9], [3, 2], [5, 1]),  # the median itself is in no pair
        ([7], [], []),
        ([], [], []),
    ],
)
def test_mirrored_distances_by_hand(ordered, below, above):
    found = shape.mirrored_distances(np.array(ordered, dtype=float))
    assert [part.tolist() for part in found] == [below, above]


def test_a_sample_turned_about_exchanges_its_distances():
    ordered = np.sort(np.random.default_rng(2).lognormal(size=11))
    below, above = shape.mirrored_distances(ordered)
    turned = shape.mirrored_distances(-ordered[::-1])
    np.testing.assert_array_equal(turned, [above, below])
