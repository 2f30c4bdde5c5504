"""The sign test against SciPy's binomial test, enumeration, and statsmodels."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

import robustrm as rm
from robustrm.results import note_codes
from tests.methods.enumeration import both_scales, check_tails, mirrored, values_by_definition
from tests.methods.tables import PAIR, differences, pair_of, raw

ALTERNATIVES = ("two-sided", "greater", "less")
alternatives = pytest.mark.parametrize("alternative", ALTERNATIVES)


def signs(d):
    """1 for a rise, −1 for a fall, 0 for no change, one a subject."""
    return [[(x > 0) - (x < 0)] for x in d]


def rises(rows):
    return sum(row[0] > 0 for row in rows)


@both_scales
@alternatives
@pytest.mark.property
@given(d=differences(most_n=10))
def test_p_equals_the_enumeration_of_all_sign_patterns(alternative, scale, d):
    values = values_by_definition(signs(d), rises, mirrored)
    result = rm.sign_test(pair_of(d).on_scale(scale), *PAIR, alternative=alternative)
    assert result.statistic == values[0]
    # a subject without a change is its own mirror image: it doubles every count and no share
    check_share(result, values)


def check_share(result, values):
    moved = result.details["n_rose"] + result.details["n_fell"]
    assert result.arrangements == 2**result.n_subjects == values.size
    assert sorted(set(values)) == list(range(moved + 1))
    check_tails(result, values)


@pytest.mark.slow
@alternatives
@pytest.mark.parametrize("n", [14, 15, 16])
def test_p_equals_the_enumeration_of_more_subjects(alternative, n):
    d = np.random.default_rng(n).integers(-2, 4, size=n).tolist()
    values = values_by_definition(signs(d), rises, mirrored)
    check_tails(rm.sign_test(pair_of(d), *PAIR, alternative=alternative), values)


@pytest.mark.reference
@alternatives
@pytest.mark.property
@given(d=differences(most_n=60, size=3))
def test_p_agrees_with_scipy_binomtest_of_those_who_moved(alternative, d):
    rose, fell = sum(x > 0 for x in d), sum(x < 0 for x in d)
    result = rm.sign_test(pair_of(d), *PAIR, alternative=alternative)
    expected = (
        stats.binomtest(rose, rose + fell, alternative=alternative).pvalue if rose + fell else 1
    )
    assert result.p_value == pytest.approx(expected, rel=1e-10)
    assert (result.details["n_rose"], result.details["n_fell"]) == (rose, fell)
    assert result.statistic == rose


@pytest.mark.parametrize("n", [100, 500, 1000])
def test_p_stays_exact_for_many_subjects(n):
    d = [1] * (n // 2 + n // 10) + [-1] * (n - n // 2 - n // 10)
    result = rm.sign_test(pair_of(d), *PAIR)
    assert result.null == "exact"
    expected = stats.binomtest(n // 2 + n // 10, n).pvalue
    assert result.p_value == pytest.approx(expected, rel=1e-10)


@pytest.mark.property
@given(d=differences(most_n=20))
def test_normal_approximation_and_smallest_p(d):
    """z = (rises − falls)/√m, and 2^(1−m) for m changes."""
    rose, fell = sum(x > 0 for x in d), sum(x < 0 for x in d)
    details = rm.sign_test(pair_of(d), *PAIR).details
    if rose + fell:
        z = abs(rose - fell) / math.sqrt(rose + fell)
        assert details["p_normal"] == pytest.approx(2 * stats.norm.sf(z), rel=1e-10)
    else:
        assert details["p_normal"] == 1
    assert details["smallest_p"] == pytest.approx(min(1, 2.0 ** (1 - rose - fell)), rel=1e-12)


@pytest.mark.property
@given(d=differences(most_n=12), level=st.sampled_from([0.9, 0.95, 0.99]))
def test_estimate_counts_no_change_half_and_its_interval_either_way(d, level):
    """Clopper & Pearson (1934): limits by the beta distribution, from SciPy."""
    n, fell, still = len(d), sum(x < 0 for x in d), sum(x == 0 for x in d)
    estimate = rm.sign_test(pair_of(d), *PAIR, level=level).estimate
    assert estimate is not None
    assert estimate.value == pytest.approx((fell + still / 2) / n)
    low = stats.beta.ppf((1 - level) / 2, fell, n - fell + 1) if fell else 0
    high = (
        stats.beta.isf((1 - level) / 2, fell + still + 1, n - fell - still)
        if fell + still < n
        else 1
    )
    assert estimate.low == pytest.approx(low, abs=1e-12)
    assert estimate.high == pytest.approx(high)
    assert estimate.level == level


@pytest.mark.property
@given(d=differences(most_n=12))
def test_swapping_the_occasions_exchanges_rises_and_falls(d):
    up = rm.sign_test(pair_of(d), *PAIR, alternative="greater")
    down = rm.sign_test(pair_of(d), *PAIR[::-1], alternative="less")
    assert up.p_value == down.p_value
    assert up.details["n_rose"] == down.details["n_fell"]


def test_subjects_without_a_direction_are_left_out_and_counted():
    values = [[0.3, 0.3], [0.3, 0.9], [1.0, 1.0], [1.2, 0.8], [2.0, 0.3]]
    below = [[True, True], [True, False], [False] * 2, [False] * 2, [False, True]]
    result = rm.sign_test(raw(values, below=below), *PAIR)
    counts = [result.details[name] for name in ("n_rose", "n_fell", "n_unchanged", "n_unknown")]
    assert counts == [1, 2, 1, 1]
    assert note_codes(result.notes) == ("no direction",)
    assert str(result.notes[0]).startswith(
        "2 subjects of 5 left out of the test: 1 without a change, 1 with both values beyond"
    )


def test_the_size_of_a_change_plays_no_part():
    for d in itertools.product((-1, 1), repeat=4):
        small, large = pair_of(d), pair_of([x * 10 ** (i % 3) for i, x in enumerate(d)])
        assert rm.sign_test(small, *PAIR).p_value == rm.sign_test(large, *PAIR).p_value


def test_a_pair_that_nobody_has_is_refused():
    with pytest.raises(rm.TooFewError, match="The sign test of 'week 2' against 'week 0' needs"):
        rm.sign_test(raw([[1, np.nan], [np.nan, 2]]), *PAIR)
