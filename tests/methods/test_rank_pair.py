"""The paired Brunner-Munzel test against every swap of a table, in plain loops from the paper."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy import special, stats

import robustrm as rm
from robustrm.kernels.rank_model import logit_interval
from robustrm.kernels.rank_pair import effect_of, error_of, swap_columns
from robustrm.results import note_codes
from tests.methods.tables import PAIR, present, raw, tables

ALTERNATIVES = ("two-sided", "greater", "less")
alternatives = pytest.mark.parametrize("alternative", ALTERNATIVES)
PAIRS = tables(st.integers(2, 7), st.just(2), most=9)


def rank(value, values):
    """Mid-rank of a value among values, by counting."""
    return (
        sum(other < value for other in values) + (sum(other == value for other in values) + 1) / 2
    )


def definition(rows):
    """p, standard deviation of the placements and T by ranks (Munzel & Brunner 2002)."""
    n = len(rows)
    first, second = [row[0] for row in rows], [row[1] for row in rows]
    z = [
        (rank(y, first + second) - rank(y, second) - rank(x, first + second) + rank(x, first)) / n
        for x, y in rows
    ]
    p = (sum(rank(y, first + second) for y in second) / n - (n + 1) / 2) / n
    mean = sum(z) / n
    sd = math.sqrt(sum((value - mean) ** 2 for value in z) / (n - 1))
    if abs(p - 0.5) < 1e-12:
        t = 0.0
    elif sd < 1e-9:
        t = math.copysign(math.inf, p - 0.5)
    else:
        t = math.sqrt(n) * (p - 0.5) / sd
    return p, sd, t


def all_swaps(rows):
    """T of every way to swap the two values of subjects, the data as they are first."""
    arranged = itertools.product(*([row, row[::-1]] for row in rows))
    return np.array([definition(list(swapped))[2] for swapped in arranged])


def tails(values, value):
    slack = 1e-9 if math.isfinite(value) else 0.0
    return (values >= value - slack).mean(), (values <= value + slack).mean()


def p_of(values, value, alternative):
    upper, lower = tails(values, value)
    both = min(1.0, 2 * min(upper, lower))
    return {"two-sided": both, "greater": upper, "less": lower}[alternative]


# ── the p value ───────────────────────────────────────────────────────────────────────────────


@alternatives
@pytest.mark.property
@given(rows=PAIRS)
def test_t_and_p_equal_the_enumeration_of_all_swaps(alternative, rows):
    values = all_swaps(rows)
    result = rm.rank_pair(raw(rows), *PAIR, alternative=alternative)
    assert result.null == "exact"
    assert result.arrangements == 2 ** len(rows)
    assert result.statistic == pytest.approx(values[0], abs=1e-9)
    assert result.p_value == pytest.approx(p_of(values, values[0], alternative), rel=1e-12)
    smallest = min(p_of(values, value, alternative) for value in values)
    assert result.details["smallest_p"] == pytest.approx(smallest, rel=1e-12)


@pytest.mark.slow
@pytest.mark.parametrize("n", [10, 12])
def test_p_equals_the_enumeration_of_more_subjects(n):
    rows = np.random.default_rng(n).lognormal(1, 1, size=(n, 2)).round(1) * [1, 1.6]
    values = all_swaps(rows.tolist())
    result = rm.rank_pair(raw(rows), *PAIR)
    assert result.p_value == pytest.approx(p_of(values, values[0], "two-sided"), rel=1e-12)


def test_a_clean_separation_has_the_smallest_p_there_is():
    result = rm.rank_pair(raw([[i, 100 + i * i] for i in range(1, 9)]), *PAIR)
    assert result.p_value == result.details["smallest_p"] == 2 / 2**8
    assert result.statistic == math.inf
    assert math.isnan(result.details["p_t"])
    estimate = present(result.estimate)
    assert (estimate.value, estimate.low, estimate.high) == (1.0, None, None)
    assert note_codes(result.notes) == ("zero variance",)
    assert "All values of one occasion lie above" in str(result.notes[0])


def test_subjects_in_step_have_an_infinite_statistic_and_an_exact_p():
    result = rm.rank_pair(raw([[10 * i, 10 * i + 1] for i in range(1, 7)]), *PAIR)
    assert result.statistic == math.inf
    # of the 64 patterns of signs only "all rose" and "all fell" are as far out
    assert result.p_value == 2 / 64
    assert present(result.estimate).value == pytest.approx(0.5 + 1 / 12)
    assert "stand in the same place" in str(result.notes[0])


def test_no_change_has_p_1_and_a_note():
    result = rm.rank_pair(raw([[3, 3], [5, 5], [9, 9]]), *PAIR)
    assert (result.statistic, result.p_value, result.details["smallest_p"]) == (0, 1, 1)
    assert note_codes(result.notes) == ("all tied",)


@pytest.mark.reference
@pytest.mark.property
@alternatives
@given(rows=PAIRS)
def test_t_approximation_has_n_minus_1_degrees_of_freedom(alternative, rows):
    result = rm.rank_pair(raw(rows), *PAIR, alternative=alternative)
    assume(math.isfinite(result.statistic))
    t, df = result.statistic, len(rows) - 1
    expected = {
        "two-sided": 2 * stats.t.sf(abs(t), df),
        "greater": stats.t.sf(t, df),
        "less": stats.t.cdf(t, df),
    }
    assert result.details["p_t"] == pytest.approx(expected[alternative], rel=1e-9)


def test_beyond_the_budget_swaps_are_drawn_and_exact_is_refused():
    rows = np.random.default_rng(3).lognormal(size=(40, 2)).round(3)
    result = rm.rank_pair(raw(rows), *PAIR, draws=999, rng=1)
    assert (result.null, result.draws) == ("monte carlo", 999)
    assert result.arrangements == 2**40
    assert "monte carlo" in note_codes(result.notes)
    with pytest.raises(rm.BudgetError, match=r"`null` must be 'auto' or 'monte carlo'.*budget"):
        rm.rank_pair(raw(rows), *PAIR, null="exact")


def test_drawn_p_agrees_with_the_t_approximation_for_many_subjects():
    rng = np.random.default_rng(3)
    level = rng.normal(size=(150, 1))
    rows = np.exp(level + rng.normal(size=(150, 2)) + [0, 0.1]).round(3)
    result = rm.rank_pair(raw(rows), *PAIR, draws=9_999, rng=1)
    low, high = present(result.p_interval)
    assert low <= result.details["p_t"] <= high
    assert high < 0.05


@pytest.mark.slow
def test_the_level_holds_at_a_half_with_unequal_spread():
    """p = 1/2 without exchangeable occasions: the case for which T is studentized."""
    rng = np.random.default_rng(5)
    size, n = 1500, 12
    rejected = 0
    for _ in range(size):
        level = rng.normal(size=(n, 1))
        rows = 100 + (0.6 * level + 0.8 * rng.normal(size=(n, 2))) * [1.0, 3.0]
        rejected += rm.rank_pair(raw(rows), *PAIR).p_value <= 0.05
    # three standard errors of .06 at 1,500 tables: approximate here, exact when exchangeable
    assert 0.03 < rejected / size < 0.079


# ── the estimate ──────────────────────────────────────────────────────────────────────────────


@pytest.mark.property
@given(rows=PAIRS)
def test_the_estimate_is_the_share_of_pairs_of_values_and_not_of_subjects(rows):
    result = rm.rank_pair(raw(rows), *PAIR)
    pairs = [(y > x) + (y == x) / 2 for x, _ in rows for _, y in rows]
    own = [(y > x) + (y == x) / 2 for x, y in rows]
    estimate = present(result.estimate)
    assert estimate.value == pytest.approx(sum(pairs) / len(pairs))
    assert result.details["share_rose"] == pytest.approx(sum(own) / len(own))
    assert estimate.no_change == 0.5


@pytest.mark.reference
def test_the_estimate_is_the_mann_whitney_share_of_scipy():
    rows = np.random.default_rng(6).integers(1, 12, size=(15, 2))
    u = stats.mannwhitneyu(rows[:, 1], rows[:, 0]).statistic
    assert present(rm.rank_pair(raw(rows), *PAIR).estimate).value == pytest.approx(u / 15**2)


@pytest.mark.property
@given(rows=PAIRS, level=st.sampled_from([0.8, 0.95, 0.99]))
def test_the_interval_is_that_of_the_logit_with_t_of_n_minus_1(rows, level):
    p, sd, _ = definition(rows)
    estimate = present(rm.rank_pair(raw(rows), *PAIR, level=level).estimate)
    if sd < 1e-9:
        assert estimate.low is None
        return
    n = len(rows)
    margin = stats.t.ppf((1 + level) / 2, n - 1) * sd / math.sqrt(n) / (p * (1 - p))
    expected = special.expit([special.logit(p) - margin, special.logit(p) + margin])
    assert (estimate.low, estimate.high) == pytest.approx(tuple(expected), abs=1e-9)
    assert estimate.level == level
    assert rm.rank_pair(raw(rows), *PAIR).details["standard_error"] == pytest.approx(
        sd / math.sqrt(n)
    )


@pytest.mark.slow
@pytest.mark.parametrize("n", [8, 20])
def test_the_interval_covers_the_probability_of_a_larger_value(n):
    """Normal marginals N(0, 1), N(1, 4): p = Φ(1/√5). No interval counts as a miss."""
    truth = stats.norm.cdf(1 / math.sqrt(5))
    size, rng = 4000, np.random.default_rng(n)
    first, other = rng.normal(size=(2, size, n))
    second = 1 + 2 * (0.5 * first + math.sqrt(0.75) * other)
    placements = swap_columns(np.stack([first, second], axis=-1)).sum(axis=-1)
    quantile = stats.t.ppf(0.975, n - 1)
    low, high = logit_interval(effect_of(placements), error_of(placements), quantile)
    covered = float(np.mean((low <= truth) & (truth <= high)))
    # three standard errors of .95 at 4,000 tables
    assert covered > 0.9397


def test_a_disagreement_of_interval_and_p_is_said():
    found = set()
    for seed in range(300):
        rows = np.random.default_rng(seed).integers(1, 30, size=(6, 2))
        result = rm.rank_pair(raw(rows), *PAIR)
        estimate = present(result.estimate)
        if estimate.low is not None:
            excludes = not estimate.low <= 0.5 <= present(estimate.high)
            disagree = excludes != (result.p_value <= 0.05)
            assert ("interval and p disagree" in note_codes(result.notes)) == disagree
            found.add(disagree)
    assert found == {True, False}


# ── limits ────────────────────────────────────────────────────────────────────────────────────


def test_two_values_below_the_limit_count_half_and_the_range_is_said():
    values = [[0.5, 0.5], [0.5, 2.0], [1.0, 0.5], [3.0, 1.5]]
    below = np.array(values) == 0.5
    result = rm.rank_pair(raw(values, below=below, lower_limit=0.5), *PAIR)
    estimate = present(result.estimate)
    # by hand: of 16 comparisons 4 are of two values below, 6 are rises, 6 are falls
    assert estimate.value == pytest.approx((6 + 4 / 2) / 16)
    note = next(note for note in result.notes if note.code == "order unknown")
    assert "4 of the 16 comparisons" in note.fact
    assert "0.375 to 0.625" in note.consequence
    # the same table with an actual value under all others, tied
    tied = rm.rank_pair(raw(np.where(below, 0.1, values)), *PAIR)
    assert tied.p_value == result.p_value
    assert "order unknown" not in note_codes(tied.notes)


def test_mostly_beyond_a_limit_the_order_still_stands():
    values = [[0.3, 2.0 + i] for i in range(5)] + [[1.0 + i, 3.5 + i] for i in range(3)]
    below = np.array(values) == 0.3
    result = rm.rank_pair(raw(values, below=below, lower_limit=0.3), *PAIR)
    assert result.estimate is not None


def test_one_subject_is_refused_in_words():
    with pytest.raises(rm.TooFewError, match="needs at least 2 subjects with both, got 1"):
        rm.rank_pair(raw([[3, 4]]), *PAIR)


def test_an_unknown_null_is_refused():
    with pytest.raises(rm.ArgumentError, match="`null` must be one of"):
        rm.rank_pair(raw([[3, 4], [1, 2]]), *PAIR, null="asymptotic")
