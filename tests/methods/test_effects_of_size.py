"""Effect sizes that need the size of a difference: location, and units of spread."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

import robustrm as rm
from robustrm.methods.effects import (
    NOT_GIVEN,
    Effect,
    geometric_mean_ratio,
    median_difference,
    percent_change,
    robust_standardized_difference,
    standardized_mean_difference,
)
from robustrm.results import note_codes
from tests.methods.tables import PAIR, measured, pair_of, present, raw

TEN = (-30, 3, 0, -1, -2, -3, -4, -5, -7, -9)


def limits(effect: Effect) -> tuple[float, float]:
    return present(effect.estimate.low), present(effect.estimate.high)


def codes(effect: Effect) -> tuple[str, ...]:
    return note_codes(effect.estimate.notes)


# ── location ──────────────────────────────────────────────────────────────────────────────────


def test_the_median_difference_of_six_by_hand():
    """Levels .96875 and .78125; I = .1, lambda = 5 · .1/(1 + 4 · .1) = .35714.

    −32 + .35714 · 16 = −26.286 and −1 − .35714 = −1.357.
    """
    effect = median_difference(pair_of([-1, -2, -4, -8, -16, -32]), *PAIR)
    assert (effect.estimate.name, effect.estimate.value) == ("median difference", -6)
    assert limits(effect) == pytest.approx((-26.286, -1.357), abs=5e-4)
    assert effect.remark == "95% by interpolation between exact 96.9% and 78.1%"
    assert (effect.estimate.unit, effect.scale) == ("µg/L", "raw")


def test_on_logs_it_is_the_median_ratio_back_transformed():
    rows = [[2, 1], [4, 1], [8, 1], [16, 1], [32, 1], [64, 1]]
    effect = median_difference(raw(rows).log(), *PAIR)
    # as above in units of −log 2: log₂ differences −1 ... −6
    low, high = (math.log2(v) for v in limits(effect))
    assert effect.estimate.name == "median ratio"
    assert math.log2(effect.estimate.value) == pytest.approx(-3.5)
    assert (low, high) == pytest.approx((-6 + 0.35714, -1 - 0.35714), abs=1e-4)
    assert effect.estimate.neutral == 1


def test_five_differences_have_no_median_interval_at_95_percent():
    effect = median_difference(pair_of([1, 2, 3, 4, 5]), *PAIR)
    assert (effect.estimate.value, effect.estimate.low, effect.estimate.level) == (3, None, None)
    assert codes(effect) == ("no interval",)
    assert "5 differences no interval reaches 95%" in str(effect.estimate.notes[0])
    attained = median_difference(pair_of([1, 2, 3, 4, 5]), *PAIR, level=0.9375)
    assert limits(attained) == (1, 5)
    assert attained.remark == "attains 93.8% exactly"


def test_the_ratio_of_geometric_means_by_hand():
    """log₂ ratios −1, 0, 1, −2: mean −.5, SD 1.29099; t₃ = 3.18245, margin 2.05426."""
    effect = geometric_mean_ratio(raw([[8, 4], [6, 6], [4, 8], [8, 2]]), *PAIR)
    assert effect.estimate.value == pytest.approx(2**-0.5)
    assert limits(effect) == pytest.approx((2**-2.55426, 2**1.55426), rel=1e-5)
    percent = percent_change(raw([[8, 4], [6, 6], [4, 8], [8, 2]]), *PAIR)
    assert percent.estimate.value == pytest.approx(100 * (2**-0.5 - 1))
    assert limits(percent) == pytest.approx([100 * (v - 1) for v in limits(effect)])
    assert (percent.estimate.unit, percent.estimate.neutral) == ("%", 0)


@pytest.mark.reference
@pytest.mark.property
@given(measured(k=st.just(2)))
def test_the_ratio_is_scipys_t_interval_of_the_logs(rows):
    d = np.log([b / a for a, b in rows])
    effect = geometric_mean_ratio(raw(rows), *PAIR, level=0.9)
    if np.ptp(d) < 1e-9:
        assert effect.estimate.low is None
        assert codes(effect) == ("no variation",)
        return
    expected = stats.ttest_1samp(d, 0).confidence_interval(0.9)
    assert math.log(effect.estimate.value) == pytest.approx(d.mean(), abs=1e-9)
    assert np.log(limits(effect)) == pytest.approx([expected.low, expected.high], abs=1e-7)


def test_a_zero_has_no_ratio():
    with pytest.raises(rm.DataError, match="zero"):
        geometric_mean_ratio(raw([[0, 1], [2, 3], [4, 5]]), *PAIR)


# ── standardized ──────────────────────────────────────────────────────────────────────────────


def test_the_robust_standardized_difference_by_hand():
    # worked in tests/kernels/test_effect_sizes.py
    effect = robust_standardized_difference(pair_of(TEN), *PAIR, rng=1)
    expected = -0.6419398 * (11 / 3) / math.sqrt(59.6 / 9)
    assert effect.estimate.value == pytest.approx(expected, abs=1e-6)
    assert effect.remark == "2 of 10 cut at each end, factor 0.642"
    assert effect.estimate.kind == "percentile bootstrap"


@pytest.mark.reference
def test_its_interval_is_scipys_percentile_bootstrap():
    d = np.round(np.random.default_rng(8).normal(0.6, 1, 24), 3)
    effect = robust_standardized_difference(pair_of(d.tolist()), *PAIR, draws=19_999, rng=2)

    def statistic(x, axis):
        ordered = np.sort(x, axis=axis)
        winsorized = np.clip(x, ordered[..., 4:5], ordered[..., 19:20])
        mean = stats.trim_mean(x, 0.2, axis=axis)
        return mean / np.std(winsorized, axis=axis, ddof=1)

    found = stats.bootstrap(
        (d,), statistic, n_resamples=19_999, method="percentile", random_state=3
    ).confidence_interval
    factor = effect.estimate.value / statistic(d[None], -1)[0]
    # Monte Carlo error of a 2.5% quantile of 19,999 draws is near .01 here
    assert limits(effect) == pytest.approx([factor * found.low, factor * found.high], abs=0.05)


def test_below_ten_subjects_it_is_not_given_and_says_why():
    effect = robust_standardized_difference(pair_of(TEN[:9]), *PAIR)
    assert not effect.is_given
    assert math.isnan(effect.estimate.value)
    assert (effect.estimate.low, effect.estimate.kind) == (None, NOT_GIVEN)
    assert codes(effect) == ("too few subjects",)
    assert "from 10 subjects, not 9" in str(effect)


def test_without_winsorized_spread_it_is_not_given():
    effect = robust_standardized_difference(pair_of([5] * 8 + [-90, 400]), *PAIR)
    assert codes(effect) == ("no variation",)


def test_when_many_resamples_lack_spread_there_is_no_interval():
    d = [0, 0, 0, 0, 0, 0, 0, 1, 1, 1]
    effect = robust_standardized_difference(pair_of(d), *PAIR, draws=999, rng=1)
    assert effect.is_given
    assert (effect.estimate.low, effect.estimate.level) == (None, None)
    assert codes(effect) == ("no interval",)


def test_cohens_d_by_hand_with_its_interval():
    """Differences −2, −1, 0, −1: mean −1, SD √(2/3). The limits invert scipy.stats.nct."""
    table = raw([[9, 7], [4, 3], [12, 12], [6, 5]])
    effect = standardized_mean_difference(table, *PAIR)
    assert (effect.estimate.name, effect.group) == ("Cohen's d_z", "parametric")
    assert effect.estimate.value == pytest.approx(-math.sqrt(1.5))
    assert limits(effect) == pytest.approx((-2.53350, 0.17025), abs=1e-5)


def test_cohens_d_av_by_hand():
    # worked in tests/kernels/test_effect_sizes.py: 2/√10, error √.3; z = 1.959964
    table = raw([[2, 2], [4, 6], [6, 10]])
    effect = standardized_mean_difference(table, *PAIR, standardizer="occasions")
    middle, margin = 2 / math.sqrt(10), 1.959964 * math.sqrt(0.3)
    assert effect.estimate.name == "Cohen's d_av"
    assert effect.estimate.value == pytest.approx(middle)
    assert limits(effect) == pytest.approx((middle - margin, middle + margin), abs=1e-6)


@pytest.mark.parametrize("scale", [1e-200, 1e200])
def test_cohens_d_has_no_unit_however_large(scale):
    rows = np.array([[9.0, 7], [4, 3], [12, 12], [6, 5]])
    for standardizer in ("differences", "occasions"):
        one, other = (
            standardized_mean_difference(raw(r), *PAIR, standardizer=standardizer)
            for r in (rows, rows * scale)
        )
        assert other.estimate.value == pytest.approx(one.estimate.value)
        assert limits(other) == pytest.approx(limits(one))


@pytest.mark.parametrize("standardizer", ["differences", "occasions"])
def test_cohens_d_needs_two_subjects_and_spread(standardizer):
    one = standardized_mean_difference(raw([[1, 2]]), *PAIR, standardizer=standardizer)
    assert codes(one) == ("too few subjects",)
    flat = standardized_mean_difference(raw([[1, 2]] * 3), *PAIR, standardizer=standardizer)
    assert codes(flat) == ("no variation",)
