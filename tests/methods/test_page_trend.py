"""Page's trend test against enumeration, SciPy, and Page's formulas (1963)."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy import stats

import robustrm as rm
from robustrm.results import note_codes
from tests.methods.enumeration import (
    FIVE_BY_FOUR,
    SMALL,
    TABLES,
    both_scales,
    check_tails,
    five_by_four,
    values_by_definition,
    values_by_sums,
)
from tests.methods.tables import LABELS, raw, tables, twice_ranks

ALTERNATIVES = ("two-sided", "greater", "less")
WEIGHTS = {2: [0.0, 1.5], 3: [0.0, 0.5, 4.0], 4: [-1.0, 0.25, 0.25, 7.0]}
alternatives = pytest.mark.parametrize("alternative", ALTERNATIVES)


def page(rows, **options):
    """The test in the order of the columns."""
    table = raw(rows)
    return rm.page_trend(table, order=table.occasions, **options)


def statistic(rows, weights=None):
    """L = Σ_j c_j R_j, with the occasions' numbers for c by default."""
    k = len(rows[0])
    weights = range(1, k + 1) if weights is None else weights
    sums = [sum(column) / 2 for column in zip(*map(twice_ranks, rows), strict=True)]
    return sum(c * total for c, total in zip(weights, sums, strict=True))


untied = st.integers(2, 5).flatmap(
    lambda k: st.lists(st.permutations(range(1, k + 1)), min_size=2, max_size=8)
)


@alternatives
@pytest.mark.property
@given(rows=TABLES, weighted=st.booleans())
def test_p_equals_the_enumeration_of_all_arrangements(alternative, rows, weighted):
    k = len(rows[0])
    scores = WEIGHTS[k] if weighted else None
    c = np.array(scores or range(1, k + 1))
    values = values_by_sums([twice_ranks(row) for row in rows], lambda sums: sums @ c)
    check_tails(page(rows, scores=scores, alternative=alternative), values)


@alternatives
@both_scales
@pytest.mark.property
@given(rows=SMALL)
def test_p_equals_the_enumeration_of_the_statistic_computed_anew(scale, alternative, rows):
    table = raw(rows).on_scale(scale)
    result = rm.page_trend(table, order=table.occasions, alternative=alternative)
    check_tails(result, values_by_definition(rows, statistic))


@pytest.mark.slow
@alternatives
@five_by_four
def test_p_equals_the_enumeration_of_five_by_four(alternative, name):
    rows = FIVE_BY_FOUR[name]
    c = np.arange(1, 5)
    values = values_by_sums([twice_ranks(row) for row in rows], lambda sums: sums @ c)
    check_tails(page(rows, alternative=alternative), values)


@pytest.mark.reference
@pytest.mark.property
@given(rows=untied)
def test_statistic_and_exact_p_agree_with_scipy_page_trend_test_without_ties(rows):
    assume(len(rows[0]) >= 3)
    expected = stats.page_trend_test(rows, method="exact")
    result = page(rows, alternative="greater")
    assert result.statistic == expected.statistic
    assert result.p_value == pytest.approx(expected.pvalue, rel=1e-10)


@pytest.mark.reference
@pytest.mark.property
@given(rows=untied)
def test_normal_approximation_is_that_of_scipy_without_ties(rows):
    assume(len(rows[0]) >= 3)
    expected = stats.page_trend_test(rows, method="asymptotic")
    details = page(rows, alternative="greater").details
    assert details["p_normal"] == pytest.approx(expected.pvalue, rel=1e-9)


@pytest.mark.property
@given(rows=untied)
def test_z_uses_the_mean_and_variance_of_page_without_ties(rows):
    """Mean nk(k+1)²/4, variance n k²(k+1)²(k−1)/144."""
    n, k = len(rows), len(rows[0])
    mean, variance = n * k * (k + 1) ** 2 / 4, n * k**2 * (k + 1) ** 2 * (k - 1) / 144
    result = page(rows)
    z = (result.statistic - mean) / math.sqrt(variance)
    assert result.details["z"] == pytest.approx(z, rel=1e-10, abs=1e-12)
    two_sided = 2 * stats.norm.sf(abs(z))
    assert result.details["p_normal"] == pytest.approx(two_sided, rel=1e-10)
    less = page(rows, alternative="less").details["p_normal"]
    assert less == pytest.approx(stats.norm.cdf(z), rel=1e-10)


@pytest.mark.property
@given(rows=TABLES, weighted=st.booleans())
def test_z_uses_the_mean_and_variance_over_all_arrangements_with_ties(rows, weighted):
    k = len(rows[0])
    c = np.array(WEIGHTS[k]) if weighted else np.arange(1.0, k + 1)
    values = values_by_sums([twice_ranks(row) for row in rows], lambda sums: sums @ c / 2)
    result = page(rows, scores=c.tolist())
    assert result.statistic == pytest.approx(values[0], rel=1e-12)
    if np.ptp(values) < 1e-9:
        assert math.isnan(result.details["z"])
        assert result.details["p_normal"] == 1
    else:
        z = (values[0] - values.mean()) / values.std()
        assert result.details["z"] == pytest.approx(z, rel=1e-9, abs=1e-9)


@pytest.mark.property
@given(rows=untied)
def test_mean_spearman_is_the_average_rank_correlation_with_the_order(rows):
    k = len(rows[0])
    correlations = [stats.spearmanr(range(k), row).statistic for row in rows]
    details = page(rows).details
    assert details["mean_spearman"] == pytest.approx(np.mean(correlations), rel=1e-9, abs=1e-9)
    assert "mean_spearman" not in page(rows, scores=list(range(k))).details


@pytest.mark.property
@given(rows=tables(st.integers(1, 5), st.integers(2, 4)))
def test_the_reverse_order_exchanges_the_directions(rows):
    table = raw(rows)
    up = rm.page_trend(table, order=table.occasions, alternative="greater")
    down = rm.page_trend(table, order=table.occasions[::-1], alternative="less")
    assert up.p_value == pytest.approx(down.p_value, rel=1e-12)
    both = [rm.page_trend(table, order=o).p_value for o in (table.occasions, table.occasions[::-1])]
    assert both[0] == pytest.approx(both[1], rel=1e-12)


def test_the_order_names_the_columns_and_need_not_be_theirs():
    rows = [[3, 1, 2], [9, 4, 5], [6, 2, 7], [8, 3, 5]]
    moved = [[row[1], row[2], row[0]] for row in rows]
    found = rm.page_trend(raw(rows), order=["week 2", "week 6", "week 0"], alternative="greater")
    expected = page(moved, alternative="greater")
    assert (found.statistic, found.p_value) == (expected.statistic, expected.p_value)
    assert found.estimand == "trend of the ranks in the order week 2, week 6, week 0"
    assert found.details["rank_sums"] == expected.details["rank_sums"]


def test_an_order_of_some_occasions_leaves_the_others_out():
    rows = np.array([[3, 1, 2], [9, np.nan, 5], [6, 2, 7], [8, 3, 5]])
    found = rm.page_trend(raw(rows), order=["week 6", "week 0"])
    assert (found.n_subjects, found.n_occasions) == (4, 2)


def test_moving_and_stretching_the_scores_changes_no_p():
    rows = [[3, 1, 2, 4], [1, 4, 5, 9], [6, 2, 7, 8]]
    plain = page(rows)
    other = page(rows, scores=[10 + 2.5 * j for j in range(4)])
    assert other.p_value == pytest.approx(plain.p_value, rel=1e-12)
    assert other.details["z"] == pytest.approx(plain.details["z"], rel=1e-12)


def test_the_order_is_required():
    with pytest.raises(TypeError, match="order"):
        rm.page_trend(raw([[1, 2], [3, 4]]))  # type: ignore[call-arg]


@pytest.mark.parametrize(
    ("options", "message"),
    [
        (
            {"order": ["week 0", "week 3"]},
            "`order` must name one of 'week 0', 'week 2', 'week 6', got 'week 3'.",
        ),
        ({"order": ["week 0"]}, "`order` must hold at least 2 names, got 1."),
        ({"order": "week 0"}, "`order` must be a list of names, got the single text 'week 0'."),
        (
            {"order": ["week 0", "week 2", "week 0"]},
            "`order` must not repeat a name, got 'week 0' twice.",
        ),
        (
            {"order": LABELS[:3], "scores": [3, 2, 1]},
            "`scores` must rise in the stated order, got [3, 2, 1].",
        ),
        (
            {"order": LABELS[:3], "scores": [1, 1, 1]},
            "`scores` must rise in the stated order, got [1, 1, 1].",
        ),
        (
            {"order": LABELS[:3], "scores": [1, 2]},
            "`scores` must hold one finite number for each of the 3 occasions of `order`, "
            "got [1, 2].",
        ),
        (
            {"order": LABELS[:3], "scores": [1, 2, math.inf]},
            "`scores` must hold one finite number for each of the 3 occasions of `order`, "
            "got [1, 2, inf].",
        ),
    ],
)
def test_an_order_or_scores_that_do_not_fit_are_refused(options, message):
    with pytest.raises(rm.ArgumentError) as refused:
        rm.page_trend(raw([[1, 2, 3], [3, 4, 6]]), **options)
    assert str(refused.value).startswith(message)


def test_a_table_without_any_change_has_p_1_and_says_why():
    result = page(np.full((4, 3), 7.5))
    assert (result.p_value, result.details["p_normal"]) == (1, 1)
    assert math.isnan(result.details["z"])
    assert note_codes(result.notes) == ("all tied",)


def test_all_rising_reaches_the_smallest_p():
    for n, k in itertools.product((1, 3, 6), (2, 3, 4)):
        result = page(np.add.outer(np.arange(n), np.arange(k)), alternative="greater")
        assert result.p_value == pytest.approx(math.factorial(k) ** -n, rel=1e-12)
        assert result.details["smallest_p"] == pytest.approx(result.p_value, rel=1e-12)
        assert result.details["mean_spearman"] == pytest.approx(1)
