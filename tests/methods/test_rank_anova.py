"""The rank ANOVA-type test: the identity with statsmodels, its intervals, and what it says."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy import stats

import robustrm as rm
from robustrm.kernels.rank_model import anova_type, overall_midranks
from robustrm.results import note_codes
from tests.methods.enumeration import anova_f
from tests.methods.tables import PAIR, measured, present, raw, tables

pytestmark = pytest.mark.reference

TABLES = tables(st.integers(3, 9), st.integers(3, 5), most=9)


def in_step(rows):
    """Whether the overall ranks of all subjects change by the same amounts."""
    ranks = stats.rankdata(np.ravel(rows)).reshape(np.shape(rows))
    return bool(np.ptp(ranks - ranks[:, :1], axis=0).max() == 0)


@pytest.mark.property
@given(rows=TABLES)
def test_f_is_that_of_the_analysis_of_variance_of_the_ranks_by_statsmodels(rows):
    assume(not in_step(rows))
    result = rm.rank_anova(raw(rows))
    ranks = stats.rankdata(np.ravel(rows)).reshape(np.shape(rows))
    expected, _, _ = anova_f(ranks)
    assert result.statistic == pytest.approx(expected, rel=1e-8, abs=1e-9)


@pytest.mark.property
@given(rows=TABLES)
def test_p_is_that_of_chi_square_over_its_degrees_of_freedom(rows):
    """F on df1 and infinitely many degrees of freedom is χ² on df1 over df1."""
    assume(not in_step(rows))
    result = rm.rank_anova(raw(rows))
    df1, df2 = result.df
    assert math.isinf(df2)
    assert 1 - 1e-9 <= df1 <= len(rows[0]) - 1 + 1e-9
    expected = stats.chi2.sf(df1 * result.statistic, df1)
    assert result.p_value == pytest.approx(max(expected, 2.3e-308), rel=1e-8)
    assert result.details["f_df"] == pytest.approx((df1, (len(rows) - 1) * df1))
    finite = stats.f.sf(result.statistic, *result.details["f_df"])
    assert result.details["p_f"] == pytest.approx(finite, rel=1e-8)


def test_df_are_those_of_greenhouse_and_geisser_on_the_ranks():
    rows = np.random.default_rng(4).lognormal(2, 0.5, size=(9, 4)).round(2)
    ranks = stats.rankdata(rows).reshape(rows.shape)
    result, anova = rm.rank_anova(raw(rows)), rm.anova(raw(ranks))
    assert result.df[0] == pytest.approx(3 * anova.details["epsilon_gg"])
    assert result.details["p_f"] == pytest.approx(anova.p_value)


@pytest.mark.property
@given(rows=measured(n=st.integers(4, 10), k=st.integers(3, 4)))
def test_the_wald_type_statistic_is_hotelling_of_the_ranks(rows):
    ranks = stats.rankdata(np.ravel(rows)).reshape(np.shape(rows))
    result, hotelling = rm.rank_anova(raw(rows)), rm.hotelling(raw(ranks))
    assume(math.isfinite(hotelling.statistic) and hotelling.statistic < 1e6)
    wald = result.details["wald"]
    assert wald == pytest.approx(hotelling.details["t_squared"], rel=1e-6)
    assert result.details["wald_df"] == len(rows[0]) - 1
    expected = stats.chi2.sf(wald, len(rows[0]) - 1)
    assert result.details["p_wald"] == pytest.approx(max(expected, 2.3e-308), rel=1e-6)


@pytest.mark.property
@given(
    rows=tables(st.integers(3, 9), st.just(2), most=30), level=st.sampled_from([0.8, 0.95, 0.99])
)
def test_with_two_occasions_effects_and_intervals_are_those_of_the_paired_test(rows, level):
    details = rm.rank_anova(raw(rows), level=level).details
    estimate = present(rm.rank_pair(raw(rows), *PAIR, level=level).estimate)
    # p_2 = P(Z < X_2) with Z from both occasions: 1/4 + p/2
    assert details["relative_effects"][1] == pytest.approx(0.25 + estimate.value / 2)
    interval = details["relative_effect_intervals"][1]
    if estimate.low is None:
        assert interval is None
    else:
        expected = (0.25 + estimate.low / 2, 0.25 + present(estimate.high) / 2)
        assert interval == pytest.approx(expected, abs=1e-9)


def test_an_occasion_apart_from_all_others_has_no_interval():
    rows = [[1, 11, 14], [2, 15, 12], [3, 13, 19], [4, 18, 16]]
    details = rm.rank_anova(raw(rows)).details
    assert details["relative_effects"][0] == pytest.approx(1 / 6)
    assert details["relative_effect_intervals"][0] is None
    for j in (1, 2):
        low, high = details["relative_effect_intervals"][j]
        assert 1 / 6 < low < details["relative_effects"][j] < high < 5 / 6


def test_below_twenty_subjects_p_with_finite_degrees_of_freedom_is_said():
    rows = np.random.default_rng(4).lognormal(2, 0.5, size=(20, 3)).round(2)
    result = rm.rank_anova(raw(rows[:19]))
    assert note_codes(result.notes) == ("few subjects",)
    assert f"P = {result.details['p_f']:.3f}" in str(result.notes[0])
    assert result.p_value < result.details["p_f"]
    assert note_codes(rm.rank_anova(raw(rows)).notes) == ()


@pytest.mark.parametrize("rows", [[[1, 2, 3]] * 4, [[5, 5, 5], [7, 7, 7]]])
def test_ranks_that_change_alike_give_no_p(rows):
    result = rm.rank_anova(raw(rows))
    assert math.isnan(result.statistic)
    assert math.isnan(result.p_value)
    assert note_codes(result.notes) == ("zero variance",)


def test_values_below_the_common_limit_are_tied_under_all_others_over_the_whole_table():
    values = [[0.5, 0.5, 2.0], [0.9, 0.5, 0.7], [3.0, 0.8, 0.6], [0.5, 4.0, 0.9]]
    below = np.array(values) == 0.5
    found = rm.rank_anova(raw(values, below=below, lower_limit=0.5))
    ordered = rm.rank_anova(raw(np.where(below, 0.1, values)))
    assert found.statistic == ordered.statistic
    assert found.details["relative_effects"] == ordered.details["relative_effects"]


def test_values_above_a_limit_are_tied_over_all_others():
    values = [[9.0, 5.0, 2.0], [9.0, 9.0, 7.0], [3.0, 8.0, 6.0], [5.0, 4.0, 9.0]]
    above = np.array(values) == 9
    found = rm.rank_anova(raw(values, above=above, upper_limit=9))
    assert found.statistic == rm.rank_anova(raw(np.where(above, 50.0, values))).statistic


def rejected(sds):
    """Share of 6,000 tables that the finite degrees of freedom reject: equal means, AR(1) .8."""
    rng = np.random.default_rng(12)
    steps = rng.normal(size=(6000, 30, 4))
    for j in range(1, 4):
        steps[..., j] = 0.8 * steps[..., j - 1] + 0.6 * steps[..., j]
    f, df = anova_type(overall_midranks(steps * sds))
    return float(np.mean(stats.f.sf(f, df, 29 * df) <= 0.05))


@pytest.mark.slow
def test_unequal_correlation_is_within_the_null_and_unequal_spread_is_not():
    # three standard errors of .05 at 6,000 tables
    assert rejected([1, 1, 1, 1]) == pytest.approx(0.05, abs=0.0085)
    assert rejected([1, 1, 2, 4]) > 0.1


def test_one_subject_is_refused_in_words():
    with pytest.raises(
        rm.TooFewError, match="needs at least 2 subjects with all 3 occasions, got 1"
    ):
        rm.rank_anova(raw([[1, 2, 4]]))


def test_a_level_out_of_bounds_is_refused():
    with pytest.raises(rm.ArgumentError, match="`level` must be in"):
        rm.rank_anova(raw([[1, 2, 4], [2, 1, 5]]), level=95)
