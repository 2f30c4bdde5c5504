"""The Tukey-McLaughlin test of a trimmed mean difference against loops and SciPy."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy import stats

import robustrm as rm
from robustrm.kernels import trimmed as kernel
from robustrm.results import note_codes
from tests.methods import trimming_by_loops as loops
from tests.methods.tables import PAIR, measured, pair_of, present, raw

PAIRS = measured(n=st.integers(2, 15), k=st.just(2))
TRIMS = st.sampled_from([0.0, 0.1, 0.2, 0.25, 0.3])
SIDES = ["two-sided", "greater", "less"]
TEN = [-23.4, -12.3, -12.0, -7.2, -6.3, -5.3, -3.1, -2.0, 1.2, 5.6]


@pytest.mark.property
@pytest.mark.parametrize("alternative", SIDES)
@pytest.mark.parametrize("scale", ["raw", "log"])
@given(rows=PAIRS, trim=TRIMS, level=st.sampled_from([0.8, 0.95, 0.99]))
def test_t_p_and_interval_agree_with_plain_loops(scale, alternative, rows, trim, level):
    assume(len(rows) - 2 * loops.cut(len(rows), trim) >= 2)
    values = np.log(rows) if scale == "log" else np.array(rows)
    expected = loops.one_sample((values[:, 1] - values[:, 0]).tolist(), trim)
    assume(expected.error > 1e-5 * np.max(np.abs(values)))
    table = raw(rows).on_scale(scale)
    result = rm.trimmed_difference(table, *PAIR, trim=trim, alternative=alternative, level=level)
    reference = stats.t(expected.df)
    t = expected.value / expected.error
    tails = {
        "two-sided": 2 * reference.sf(abs(t)),
        "greater": reference.sf(t),
        "less": reference.cdf(t),
    }
    assert result.statistic == pytest.approx(t, rel=1e-6, abs=1e-8)
    assert result.p_value == pytest.approx(tails[alternative], rel=1e-5)
    assert result.df[0] == expected.df
    assert result.details["standard_error"] == pytest.approx(expected.error, rel=1e-7)
    half = reference.ppf((1 + level) / 2) * expected.error
    assume(abs(expected.value) + half < 600)  # beyond, a ratio overflows
    estimate = present(result.estimate)
    low, high = expected.value - half, expected.value + half
    if scale == "log":
        low, high = math.exp(low), math.exp(high)
    assert estimate.low == pytest.approx(low, rel=1e-5, abs=1e-6 * half)
    assert estimate.high == pytest.approx(high, rel=1e-5, abs=1e-6 * half)
    assert estimate.level == level


@pytest.mark.reference
@pytest.mark.property
@pytest.mark.parametrize("alternative", SIDES)
@given(rows=PAIRS)
def test_without_trimming_it_is_the_paired_t_of_scipy(alternative, rows):
    values = np.array(rows)
    assume(len({round(float(b - a), 3) for a, b in rows}) > 1)
    assume(np.std(values[:, 1] - values[:, 0]) > 1e-3 * np.max(values))
    result = rm.trimmed_difference(raw(rows), *PAIR, trim=0, alternative=alternative)
    expected = stats.ttest_rel(values[:, 1], values[:, 0], alternative=alternative)
    assert result.statistic == pytest.approx(expected.statistic, rel=1e-10, abs=1e-11)
    assert result.p_value == pytest.approx(expected.pvalue, rel=1e-9)
    details = result.details
    assert details["standard_error"] == pytest.approx(details["standard_error_nominal"], rel=1e-10)


def test_the_two_standard_errors_are_kept_apart():
    """n = 10 has γn = 2 whole: ours is s_w √(9/30), the other s_w/(0.6 √10); n = 9 has g = 1."""
    for n, ours, nominal in ((10, math.sqrt(9 / 30), 0.6), (9, math.sqrt(8 / 42), 0.6)):
        result = rm.trimmed_difference(pair_of(TEN[:n]), *PAIR)
        spread = np.std(loops.winsorized(TEN[:n], 0.2), ddof=1)
        details = result.details
        assert details["winsorized_sd"] == pytest.approx(spread)
        assert details["standard_error"] == pytest.approx(spread * ours)
        assert details["standard_error_nominal"] == pytest.approx(spread / (nominal * math.sqrt(n)))
        shift = present(result.estimate)
        assert result.statistic == pytest.approx(shift.value / details["standard_error"])
        quantile = stats.t(result.df[0]).ppf(0.975)
        assert shift.high == pytest.approx(shift.value + quantile * details["standard_error"])


def test_the_level_of_each_standard_error_by_simulation():
    """Normal differences, n = 9, 20,000 samples, standard error of a rate 0.0015.

    The larger standard error is conservative, the matched one is not: .053 to .055 and .023 to
    .033 over n = 8, 9, 14 and 19 (simulated for this project).
    """
    samples = np.random.default_rng(1).normal(size=(20_000, 9))
    critical = stats.t(6).ppf(0.975)
    shift = kernel.difference_trimmed_mean(samples, 0.2)
    ours = np.mean(np.abs(shift.value) > critical * shift.standard_error)
    nominal = kernel.nominal_standard_error(samples, 0.2)
    theirs = np.mean(np.abs(shift.value) > critical * nominal)
    assert 0.045 < ours < 0.06
    assert 0.017 < theirs < 0.03


def test_on_logs_the_estimate_is_the_trimmed_geometric_mean_of_the_ratios():
    rows = [[2.0, 3.0], [4.0, 4.5], [8.0, 20.0], [1.5, 1.2], [3.0, 30.0], [5.0, 0.4]]
    ratios = np.sort([b / a for a, b in rows])
    estimate = present(rm.trimmed_difference(raw(rows).log(), *PAIR).estimate)
    assert estimate.name == "20% trimmed geometric mean of the ratios"
    assert estimate.value == pytest.approx(stats.gmean(ratios[1:-1]), rel=1e-12)


def test_the_extreme_differences_do_not_count():
    expected = rm.trimmed_difference(pair_of(TEN), *PAIR)
    found = rm.trimmed_difference(pair_of([-900, *TEN[1:-1], 800]), *PAIR)
    assert found.statistic == pytest.approx(expected.statistic, rel=1e-10)


@pytest.mark.parametrize("differences", [[3, 3, 3, 3], [3, 3, 3, 3, 3, 90], [0, 0, 0]])
def test_equal_differences_give_no_p_and_no_interval_but_the_difference(differences):
    result = rm.trimmed_difference(pair_of(differences), *PAIR)
    assert math.isnan(result.p_value)
    estimate = present(result.estimate)
    assert (estimate.value, estimate.low) == (differences[0], None)
    assert note_codes(result.notes)[0] == "no variation"


def test_an_extreme_difference_does_not_hide_the_variation_of_the_others():
    """The size of what was cut is no yardstick for what is left: 10⁶ beside 0.001."""
    rows = [[1.0, 1.001], [1.0, 1.003], [1.0, 1.002], [1.0, 1.004], [1.0, 1e8]]
    result = rm.trimmed_difference(raw(rows), *PAIR)
    expected = loops.one_sample([0.001, 0.003, 0.002, 0.004, 1e8], 0.2)
    assert result.statistic == pytest.approx(expected.value / expected.error, rel=1e-6)


def test_too_few_subjects_are_refused_in_words():
    with pytest.raises(rm.TooFewError, match="needs at least 2 subjects with both, got 1"):
        rm.trimmed_difference(pair_of([3]), *PAIR)
    with pytest.raises(rm.TooFewError, match="at least 2 subjects left after the cut, got 1"):
        rm.trimmed_difference(pair_of([1, 2, 3]), *PAIR, trim=0.4)


def test_options_that_are_not_known_are_refused():
    with pytest.raises(rm.ArgumentError, match=r"`trim` must be in \[0, 0.5\), got -0.1"):
        rm.trimmed_difference(pair_of(TEN), *PAIR, trim=-0.1)
    with pytest.raises(rm.ArgumentError, match="`alternative` must be one of"):
        rm.trimmed_difference(pair_of(TEN), *PAIR, alternative="more")


def test_a_cut_of_nobody_and_few_who_are_left_are_told():
    assert note_codes(rm.trimmed_difference(pair_of(TEN[:4]), *PAIR).notes) == (
        "nothing trimmed",
        "few left",
    )
    assert note_codes(rm.trimmed_difference(pair_of(TEN), *PAIR).notes) == ()


def test_mostly_beyond_the_limit_no_shift_is_estimated_and_p_is_given():
    rows = [[5.0, 2.0], [6.0, 1.5], [3.0, 1.0], [7.0, 4.0], [9.0, 2.5], [4.0, 3.5]]
    result = rm.trimmed_difference(raw(rows, lower_limit=3.0), *PAIR)
    assert result.estimate is None
    assert "mostly beyond the limit" in note_codes(result.notes)
    assert 0 < result.p_value < 1
