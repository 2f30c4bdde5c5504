"""The paired t test against SciPy."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy import stats

import robustrm as rm
from robustrm.results import note_codes
from tests.methods.tables import PAIR, measured, pair_of, present, raw

pytestmark = pytest.mark.reference

PAIRS = measured(n=st.integers(2, 15), k=st.just(2))


@pytest.mark.property
@pytest.mark.parametrize("alternative", ["two-sided", "greater", "less"])
@given(rows=PAIRS)
def test_t_and_p_agree_with_scipy_ttest_rel(alternative, rows):
    first, second = np.transpose(rows)
    assume(len({round(float(b - a), 3) for a, b in rows}) > 1)
    expected = stats.ttest_rel(second, first, alternative=alternative)
    result = rm.paired_t(raw(rows), *PAIR, alternative=alternative)
    assert result.statistic == pytest.approx(expected.statistic, rel=1e-8, abs=1e-10)
    assert result.p_value == pytest.approx(expected.pvalue, rel=1e-8)
    assert result.df == (expected.df,)


@pytest.mark.property
@given(rows=PAIRS, level=st.sampled_from([0.8, 0.95, 0.99]))
def test_the_interval_agrees_with_scipy_on_both_scales(rows, level):
    assume(len({round(float(b - a), 3) for a, b in rows}) > 1)
    ratios = np.log(rows)[:, 1] - np.log(rows)[:, 0]
    assume(np.ptp(ratios) > 1e-6)
    for table, d, back in (
        (raw(rows), np.diff(rows).ravel(), float),
        (raw(rows).log(), ratios, math.exp),
    ):
        expected = stats.ttest_1samp(d, 0).confidence_interval(level)
        estimate = present(rm.paired_t(table, *PAIR, level=level).estimate)
        if (
            abs(float(expected.low)) < 700 and abs(float(expected.high)) < 700
        ):  # beyond, a ratio overflows
            assert estimate.value == pytest.approx(back(d.mean()), rel=1e-8, abs=1e-9)
            assert estimate.low == pytest.approx(back(expected.low), rel=1e-7, abs=1e-7)
            assert estimate.high == pytest.approx(back(expected.high), rel=1e-7, abs=1e-7)
        assert estimate.level == level


def test_on_logs_the_estimate_is_the_ratio_of_geometric_means():
    rows = [[2.0, 3.0], [4.0, 4.5], [8.0, 20.0], [1.5, 1.2]]
    estimate = present(rm.paired_t(raw(rows).log(), *PAIR).estimate)
    means = stats.gmean(rows, axis=0)
    assert estimate.name == "ratio of geometric means"
    assert estimate.value == pytest.approx(means[1] / means[0], rel=1e-12)


def test_equal_differences_give_no_p_and_no_interval_but_the_difference():
    result = rm.paired_t(pair_of([3, 3, 3, 3]), *PAIR)
    assert math.isnan(result.p_value)
    estimate = present(result.estimate)
    assert (estimate.value, estimate.low) == (3, None)
    assert note_codes(result.notes) == ("no variation",)


def test_one_pair_is_refused_in_words():
    with pytest.raises(rm.TooFewError, match="needs at least 2 subjects with both, got 1"):
        rm.paired_t(pair_of([3]), *PAIR)
