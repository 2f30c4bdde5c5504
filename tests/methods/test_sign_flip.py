"""The sign-flip test and its interval against enumeration, SciPy, and each other."""

from __future__ import annotations

import itertools
import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy import stats

import robustrm as rm
from robustrm.kernels.null.engine import tail
from robustrm.kernels.null.forms import linear
from robustrm.kernels.null.tables import sign_tables
from robustrm.results import note_codes
from tests.methods.enumeration import both_scales, check_tails, mirrored, values_by_definition
from tests.methods.tables import PAIR, differences, pair_of, present, raw

ALTERNATIVES = ("two-sided", "greater", "less")
alternatives = pytest.mark.parametrize("alternative", ALTERNATIVES)
levels = st.sampled_from([0.5, 0.75, 0.9, 0.9375, 0.95, 0.99])


def flip(d, **options):
    return rm.sign_flip(pair_of(d), *PAIR, **options)


def changes(d, scale):
    """Differences, or log ratios on values of about 1000, one a subject."""
    return [[math.log((1000 + x) / 1000) if scale == "log" else x] for x in d]


def total(rows):
    return sum(row[0] for row in rows)


def subset_means(d):
    """Means of all 2ⁿ − 1 non-empty subsets, exact and ascending."""
    subsets = itertools.product((False, True), repeat=len(d))
    chosen = ([x for x, kept in zip(d, subset, strict=True) if kept] for subset in subsets)
    return sorted(Fraction(sum(some), len(some)) for some in chosen if some)


def rank_of(n, level):
    """Largest whole c with 1 − 2c/2ⁿ ≥ level, 0 if there is none."""
    return max(c for c in range(2 ** (n - 1)) if 1 - 2 * c / 2**n >= level or c == 0)


# ── the p value ───────────────────────────────────────────────────────────────────────────────


@both_scales
@alternatives
@pytest.mark.property
@given(d=differences(most_n=10))
def test_p_equals_the_enumeration_of_all_sign_patterns(alternative, scale, d):
    values = values_by_definition(changes(d, scale), total, mirrored)
    result = rm.sign_flip(pair_of(d).on_scale(scale), *PAIR, alternative=alternative)
    check_tails(result, values)
    assert result.statistic == pytest.approx(values[0] / len(d), rel=1e-10, abs=1e-15)


@pytest.mark.slow
@both_scales
@alternatives
@pytest.mark.parametrize(("n", "size"), [(14, 3), (15, 20), (16, 900)])
def test_p_equals_the_enumeration_of_more_subjects(alternative, scale, n, size):
    d = np.random.default_rng(n).integers(-size // 2, size, size=n).tolist()
    values = values_by_definition(changes(d, scale), total, mirrored)
    check_tails(rm.sign_flip(pair_of(d).on_scale(scale), *PAIR, alternative=alternative), values)


@pytest.mark.reference
@alternatives
@pytest.mark.property
@given(d=differences(least_n=2, most_n=10, size=30))
def test_p_agrees_with_scipy_permutation_test(alternative, d):
    expected = stats.permutation_test(
        (np.array(d, dtype=float),),
        lambda x, axis: x.sum(axis=axis),
        permutation_type="samples",
        alternative=alternative,
        vectorized=True,
        n_resamples=2**10,  # at least as many as there are: all of them, each once
    )
    assert flip(d, alternative=alternative).p_value == pytest.approx(expected.pvalue, rel=1e-10)


@pytest.mark.property
@given(d=differences(most_n=12))
def test_normal_approximation_divides_by_the_root_of_the_sum_of_squares(d):
    """Under the flips the sum has mean 0 and variance Σ d²."""
    deviation = math.sqrt(sum(x * x for x in d))
    expected = 2 * stats.norm.sf(abs(sum(d)) / deviation) if deviation else 1
    assert flip(d).details["p_normal"] == pytest.approx(expected, rel=1e-10)


@pytest.mark.property
@given(d=differences(most_n=12))
def test_swapping_the_occasions_mirrors_the_result(d):
    up = flip(d, alternative="greater")
    down = rm.sign_flip(pair_of(d), *PAIR[::-1], alternative="less")
    assert up.p_value == down.p_value
    assert up.statistic == -down.statistic
    one, other = present(up.estimate), present(down.estimate)
    if one.low is not None:
        assert one.low == pytest.approx(-present(other.high), abs=1e-9)
        assert one.high == pytest.approx(-present(other.low), abs=1e-9)


# ── the interval ──────────────────────────────────────────────────────────────────────────────


@pytest.mark.property
@given(d=differences(most_n=12, size=40), level=levels)
def test_interval_runs_between_order_statistics_of_the_subset_means(d, level):
    rank = rank_of(len(d), level)
    estimate = present(flip(d, level=level).estimate)
    assert estimate.value == pytest.approx(sum(d) / len(d), abs=1e-12)
    if not rank:
        assert (estimate.low, estimate.high) == (None, None)
        return
    means = subset_means(d)
    assert estimate.low == pytest.approx(float(means[rank - 1]), rel=1e-9, abs=1e-9)
    assert estimate.high == pytest.approx(float(means[-rank]), rel=1e-9, abs=1e-9)
    assert estimate.level == 1 - 2 * rank / 2 ** len(d)
    assert estimate.kind == "exact"


@pytest.mark.property
@given(d=differences(least_n=6, most_n=11, size=40), level=st.sampled_from([0.75, 0.9, 0.95]))
def test_interval_holds_just_the_shifts_that_the_test_does_not_reject(d, level):
    """Duality: the test of d − θ at 1 − attained rejects just outside and not just inside."""
    estimate = present(flip(d, level=level).estimate)
    assume(estimate.low is not None)
    alpha = 1 - present(estimate.level)
    low, high = present(estimate.low), present(estimate.high)
    # two subset means of whole numbers are either equal or at least 1/110 apart
    step = 1e-4

    def p_at(theta):
        return flip([x - theta for x in d]).p_value

    assert p_at(low - step) <= alpha * (1 + 1e-9)
    assert p_at(high + step) <= alpha * (1 + 1e-9)
    if high - low > 2 * step:
        assert p_at(low + step) > alpha * (1 + 1e-9)
        assert p_at(high - step) > alpha * (1 + 1e-9)


@pytest.mark.parametrize("n", range(1, 9))
def test_none_at_95_percent_exists_below_six_subjects(n):
    result = flip([3 * i + 1 for i in range(n)])
    estimate = present(result.estimate)
    assert (estimate.low is None) == (n < 6)
    assert ("no interval" in note_codes(result.notes)) == (n < 6)
    if n < 6:
        assert "no exact interval reaches 95%" in str(result.notes[-1])


def test_interval_is_back_transformed_to_a_ratio_on_logs():
    rows = [[9.1, 7.2], [4.0, 3.1], [12.0, 12.5], [6.6, 5.0], [3.3, 2.1], [47.5, 26.0]]
    result = rm.sign_flip(raw(rows).log(), *PAIR)
    logs = [math.log(b / a) for a, b in rows]
    estimate = present(result.estimate)
    assert estimate.name == "ratio of geometric means"
    assert estimate.value == pytest.approx(math.exp(np.mean(logs)))
    subsets = [s for r in range(1, 7) for s in itertools.combinations(logs, r)]
    means = sorted(float(np.mean(s)) for s in subsets)
    assert estimate.low == pytest.approx(math.exp(means[0]))
    assert estimate.high == pytest.approx(math.exp(means[-1]))


# ── many subjects ─────────────────────────────────────────────────────────────────────────────


def skewed(n):
    return (np.random.default_rng(n).standard_gamma(2, size=n) - 1.5).round(3).tolist()


@pytest.mark.slow
def test_forty_subjects_are_exact():
    d = skewed(40)
    result = flip(d)
    assert result.null == "exact"
    assert result.arrangements == 2**40
    estimate = present(result.estimate)
    assert estimate.kind == "exact"
    assert estimate.level == pytest.approx(0.95, abs=1e-9)
    assert estimate.level >= 0.95
    low, high = present(estimate.low), present(estimate.high)
    assert low < estimate.value < high
    # duality, by the test itself: an independent count of the same 2^40 patterns
    for shift, is_rejected in ((-1e-3, True), (1e-3, False)):
        moved = np.array(d) - low - shift
        test = tail(sign_tables(moved), moved.sum(), linear(1))
        assert (test.p_value <= 0.05) == is_rejected


def test_beyond_forty_subjects_the_interval_is_of_random_subsets():
    d = skewed(45)
    result, again = (flip(d, null="monte carlo", draws=999, rng=7) for _ in range(2))
    estimate = present(result.estimate)
    assert estimate.kind == "random subsets"
    assert estimate.level == 1 - 2 * 2500 / 100_000
    assert (estimate.low, estimate.high) == (
        present(again.estimate).low,
        present(again.estimate).high,
    )
    other = present(flip(d, null="monte carlo", draws=999, rng=8).estimate)
    deviation = np.std(d, ddof=1) / math.sqrt(45)
    for limit, near, normal in zip(
        (estimate.low, estimate.high),
        (other.low, other.high),
        (np.mean(d) - 1.96 * deviation, np.mean(d) + 1.96 * deviation),
        strict=True,
    ):
        assert limit != near
        assert limit == pytest.approx(near, abs=0.05 * deviation)
        assert limit == pytest.approx(normal, abs=0.5 * deviation)


def test_whole_differences_stay_exact_for_more_than_forty_subjects():
    d = np.random.default_rng(2).integers(-9, 15, size=60).tolist()
    result = flip(d)
    assert result.null == "exact"
    ways = {0: 1}
    for x in d:
        longer: dict[int, int] = {}
        for sums, count in ways.items():
            for moved in (sums + x, sums - x):
                longer[moved] = longer.get(moved, 0) + count
        ways = longer
    upper = sum(count for sums, count in ways.items() if sums >= sum(d))
    lower = sum(count for sums, count in ways.items() if sums <= sum(d))
    expected = min(1.0, float(Fraction(2 * min(upper, lower), 2**60)))
    assert result.p_value == pytest.approx(expected, rel=1e-10)


def test_half_the_limit_enters():
    values = [[0.4, 1.0], [2.0, 1.4], [0.9, 0.6]]
    table = raw(values, below=[[True, False], [False] * 2, [False] * 2], lower_limit=0.4)
    entered = raw([[0.2, 1.0], *values[1:]])
    found, expected = rm.sign_flip(table, *PAIR), rm.sign_flip(entered, *PAIR)
    assert found.statistic == pytest.approx(expected.statistic, rel=1e-12)
    assert found.p_value == expected.p_value


def test_a_pair_that_nobody_has_is_refused():
    with pytest.raises(rm.TooFewError, match="The sign flip of 'week 2' against 'week 0' needs"):
        rm.sign_flip(raw([[1, np.nan], [np.nan, 2]]), *PAIR)
