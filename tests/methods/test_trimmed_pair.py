"""Yuen's comparison of dependent trimmed means against loops and SciPy."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy import stats

import robustrm as rm
from robustrm.results import note_codes
from tests.methods import trimming_by_loops as loops
from tests.methods.tables import PAIR, measured, pair_of, present, raw

PAIRS = measured(n=st.integers(2, 15), k=st.just(2))
TRIMS = st.sampled_from([0.0, 0.1, 0.2, 0.25, 0.3])
SIDES = ["two-sided", "greater", "less"]
# Concentrations of aluminium in 13 poplar clones: Laureysens et al. (2004), as in
# tests/reference/yuen_paired_poplar.json.
AUGUST = [18.3, 13.3, 16.5, 12.6, 9.5, 13.6, 8.1, 8.9, 10.0, 8.3, 7.9, 8.1, 13.4]
NOVEMBER = [12.7, 11.1, 15.3, 12.7, 10.5, 15.6, 11.2, 14.2, 16.3, 15.5, 19.9, 20.4, 36.8]
POPLAR = list(zip(AUGUST, NOVEMBER, strict=True))


@pytest.mark.property
@pytest.mark.parametrize("alternative", SIDES)
@given(rows=PAIRS, trim=TRIMS, level=st.sampled_from([0.8, 0.95, 0.99]))
def test_t_p_and_interval_agree_with_plain_loops(alternative, rows, trim, level):
    assume(len(rows) - 2 * loops.cut(len(rows), trim) >= 2)
    first, second = np.transpose(rows).tolist()
    expected = loops.trimmed_pair(first, second, trim)
    assume(expected.error > 1e-5 * np.max(rows))
    result = rm.trimmed_pair(raw(rows), *PAIR, trim=trim, alternative=alternative, level=level)
    reference = stats.t(expected.df)
    t = expected.value / expected.error
    tails = {
        "two-sided": 2 * reference.sf(abs(t)),
        "greater": reference.sf(t),
        "less": reference.cdf(t),
    }
    assert result.statistic == pytest.approx(t, rel=1e-5, abs=1e-8)
    assert result.p_value == pytest.approx(tails[alternative], rel=1e-4)
    assert result.df[0] == expected.df
    estimate = present(result.estimate)
    half = reference.ppf((1 + level) / 2) * expected.error
    assert estimate.value == pytest.approx(expected.value, rel=1e-9, abs=1e-9)
    assert estimate.low == pytest.approx(expected.value - half, rel=1e-5, abs=1e-5 * half)
    assert estimate.high == pytest.approx(expected.value + half, rel=1e-5, abs=1e-5 * half)
    assert (estimate.level, estimate.unit) == (level, "µg/L")
    assert result.details["standard_error"] == pytest.approx(expected.error, rel=1e-5)


@pytest.mark.reference
@pytest.mark.property
@pytest.mark.parametrize("alternative", SIDES)
@pytest.mark.parametrize("scale", ["raw", "log"])
@given(rows=PAIRS)
def test_without_trimming_it_is_the_paired_t_of_scipy(scale, alternative, rows):
    values = np.log(rows) if scale == "log" else np.array(rows)
    gaps = values[:, 1] - values[:, 0]
    assume(np.ptp(gaps) > 1e-3 and np.std(gaps) > 1e-3 * np.max(np.abs(values)))
    table = raw(rows).on_scale(scale)
    result = rm.trimmed_pair(table, *PAIR, trim=0, alternative=alternative)
    expected = stats.ttest_rel(values[:, 1], values[:, 0], alternative=alternative)
    assert result.statistic == pytest.approx(expected.statistic, rel=1e-10, abs=1e-11)
    assert result.p_value == pytest.approx(expected.pvalue, rel=1e-9)
    usual = rm.paired_t(table, *PAIR, alternative=alternative)
    assert present(result.estimate).low == pytest.approx(present(usual.estimate).low, rel=1e-9)


def test_on_logs_the_estimate_is_the_ratio_of_trimmed_geometric_means():
    estimate = present(rm.trimmed_pair(raw(POPLAR).log(), *PAIR).estimate)
    first, second = (
        stats.gmean(np.sort(sample)[2:-2]) for sample in np.transpose(POPLAR)
    )  # two of 13 cut at each end
    assert estimate.name == "ratio of 20% trimmed geometric means"
    assert estimate.value == pytest.approx(second / first, rel=1e-12)
    assert estimate.unit is None
    logs = np.log(POPLAR).T.tolist()
    error = loops.trimmed_pair(logs[0], logs[1], 0.2).error
    high = second / first * math.exp(stats.t(8).ppf(0.975) * error)
    assert estimate.high == pytest.approx(high, rel=1e-9)


def test_it_is_not_the_trimmed_mean_of_the_differences():
    pair = rm.trimmed_pair(raw(POPLAR), *PAIR)
    differences = rm.trimmed_difference(raw(POPLAR), *PAIR)
    assert pair.estimand == "difference of 20% trimmed means"
    assert differences.estimand == "20% trimmed mean of the differences"
    # 3.967 and 3.978: recomputed from the data by independent code
    assert present(pair.estimate).value == pytest.approx(3.9666666666666686)
    assert present(differences.estimate).value == pytest.approx(3.9777777777777774)


def test_the_extremes_of_each_occasion_do_not_count():
    expected = rm.trimmed_pair(raw(POPLAR), *PAIR)
    rows = [list(row) for row in POPLAR]
    rows[-1][1] = 9000.0  # November's largest
    rows[0][0] = 700.0  # August's largest
    found = rm.trimmed_pair(raw(rows), *PAIR)
    assert found.statistic == pytest.approx(expected.statistic, rel=1e-9)
    assert rm.paired_t(raw(rows), *PAIR).p_value > 0.3


@pytest.mark.parametrize("rows", [[[0.1, 0.3], [0.2, 0.4], [0.4, 0.6]], [[1, 2]] * 4])
@pytest.mark.parametrize("scale", ["raw", "log"])
def test_equal_values_give_no_p_and_no_interval_but_the_difference(rows, scale):
    rows = rows if scale == "raw" else [[a, 2 * a] for a, _ in rows]
    result = rm.trimmed_pair(raw(rows).on_scale(scale), *PAIR)
    assert math.isnan(result.p_value)
    assert note_codes(result.notes)[0] == "no variation"
    estimate = present(result.estimate)
    expected = rows[0][1] - rows[0][0] if scale == "raw" else 2
    assert estimate.value == pytest.approx(expected)
    assert (estimate.low, estimate.level) == (None, None)


def test_equal_differences_of_unequal_subjects_give_no_p():
    result = rm.trimmed_pair(pair_of([3, 3, 3, 3, 90, -80]), *PAIR)
    assert math.isnan(result.p_value)
    assert "no variation" in note_codes(result.notes)


def test_too_few_subjects_are_refused_in_words():
    with pytest.raises(rm.TooFewError, match="needs at least 2 subjects with both, got 1"):
        rm.trimmed_pair(pair_of([3]), *PAIR)
    with pytest.raises(rm.TooFewError, match="at least 2 subjects left after the cut, got 1"):
        rm.trimmed_pair(raw(POPLAR[:3]), *PAIR, trim=0.4)


def test_options_that_are_not_known_are_refused():
    with pytest.raises(rm.ArgumentError, match=r"`trim` must be in \[0, 0.5\), got 0.5"):
        rm.trimmed_pair(raw(POPLAR), *PAIR, trim=0.5)
    with pytest.raises(rm.ArgumentError, match=r"`level` must be in \(0, 1\), got 95"):
        rm.trimmed_pair(raw(POPLAR), *PAIR, level=95)


def test_a_cut_of_nobody_and_few_who_are_left_are_told():
    assert note_codes(rm.trimmed_pair(raw(POPLAR[:4]), *PAIR).notes) == (
        "nothing trimmed",
        "few left",
    )
    assert note_codes(rm.trimmed_pair(raw(POPLAR[:8]), *PAIR).notes) == ()


def test_mostly_beyond_the_limit_no_shift_is_estimated_and_p_is_given():
    result = rm.trimmed_pair(raw(POPLAR, lower_limit=11.5), *PAIR)
    assert result.estimate is None
    assert note_codes(result.notes) == ("mostly beyond the limit",)
    assert 0 < result.p_value < 1
