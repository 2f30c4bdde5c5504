"""Friedman's test against enumeration, SciPy, statsmodels and exact identities."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy import stats
from statsmodels.stats.anova import AnovaRM

import robustrm as rm
from robustrm.results import note_codes
from tests.methods.tables import measured, present, raw, row_orders, share, tables, twice_ranks


def enumerated_p(rows):
    """p by listing all (k!)^n arrangements and counting those at least as far from balance."""
    ranks = [twice_ranks(row) for row in rows]
    centre = len(rows) * (len(rows[0]) + 1)
    sums = np.zeros((1, len(rows[0])), dtype=np.int16)
    for row in ranks:
        sums = (sums[:, None] + row_orders(row)[None]).reshape(-1, len(row))
    far = ((sums - centre) ** 2).sum(axis=1, dtype=np.int64)
    observed = sum((sum(column) - centre) ** 2 for column in zip(*ranks, strict=True))
    return share((far >= observed).sum(), far.size)


SHAPES = st.one_of(
    st.tuples(st.integers(1, 5), st.integers(2, 3)), st.tuples(st.integers(1, 3), st.just(4))
)


@pytest.mark.property
@given(SHAPES.flatmap(lambda shape: tables(st.just(shape[0]), st.just(shape[1]), most=5)))
def test_p_equals_the_enumeration_of_all_arrangements(rows):
    result = rm.friedman(raw(rows))
    assert result.null == "exact"
    assert result.p_value == pytest.approx(enumerated_p(rows), rel=1e-12)
    assert result.arrangements == math.factorial(len(rows[0])) ** len(rows)


@pytest.mark.parametrize("n", [4, pytest.param(5, marks=pytest.mark.slow)])
@pytest.mark.parametrize("most", [3, 1000])
def test_p_equals_the_enumeration_with_four_occasions(n, most):
    rows = np.random.default_rng(n + most).integers(0, most, size=(n, 4)).tolist()
    assert rm.friedman(raw(rows)).p_value == pytest.approx(enumerated_p(rows), rel=1e-12)


@pytest.mark.reference
@pytest.mark.property
@given(tables(n=st.integers(3, 9), k=st.integers(3, 4)))
def test_statistic_and_chi_square_p_agree_with_scipy_friedmanchisquare(rows):
    assume(any(len(set(row)) > 1 for row in rows))
    result = rm.friedman(raw(rows))
    expected = stats.friedmanchisquare(*np.transpose(rows))
    assert result.statistic == pytest.approx(expected.statistic, rel=1e-10, abs=1e-12)
    assert result.details["p_chi2"] == pytest.approx(expected.pvalue, rel=1e-10)


@pytest.mark.reference
@pytest.mark.property
@given(measured(n=st.integers(3, 8), k=st.integers(3, 4)))
def test_iman_davenport_f_is_the_anova_of_within_subject_ranks_of_statsmodels(rows):
    ranks = np.array([stats.rankdata(row) for row in rows])
    assume(np.ptp(ranks - ranks.mean(axis=0)) > 0)
    n, k = ranks.shape
    frame = pd.DataFrame(
        {
            "subject": np.repeat(range(n), k),
            "occasion": np.tile(range(k), n),
            "rank": ranks.ravel(),
        }
    )
    expected = AnovaRM(frame, "rank", "subject", within=["occasion"]).fit().anova_table.iloc[0]
    details = rm.friedman(raw(rows)).details
    assert details["iman_davenport_f"] == pytest.approx(expected["F Value"], rel=1e-10, abs=1e-10)
    assert details["p_iman_davenport"] == pytest.approx(expected["Pr > F"], rel=1e-10)
    assert details["iman_davenport_df"] == (expected["Num DF"], expected["Den DF"])


@pytest.mark.property
@given(tables(n=st.integers(1, 12), k=st.just(2)))
def test_with_two_occasions_it_is_the_exact_sign_test_of_scipy_binomtest(rows):
    rises = sum(b > a for a, b in rows)
    moved = sum(b != a for a, b in rows)
    expected = stats.binomtest(rises, moved).pvalue if moved else 1.0
    assert rm.friedman(raw(rows)).p_value == pytest.approx(expected, rel=1e-12)


@pytest.mark.property
@given(st.integers(1, 12), st.integers(2, 4))
def test_subjects_who_all_rank_alike_reach_the_smallest_p(n, k):
    result = rm.friedman(raw([[10 * i + j * j for j in range(1, k + 1)] for i in range(n)]))
    assert result.p_value == pytest.approx(math.factorial(k) ** (1 - n), rel=1e-12)
    assert result.details["smallest_p"] == pytest.approx(result.p_value, rel=1e-12)
    assert result.details["kendall_w"] == pytest.approx(1, rel=1e-12)
    assert result.details["iman_davenport_f"] == math.inf
    assert result.details["p_iman_davenport"] == result.p_value


@pytest.mark.property
@given(tables(n=st.integers(1, 5), k=st.integers(2, 3), most=4))
def test_no_arrangement_of_the_table_has_a_p_below_the_smallest_p_stated(rows):
    result = rm.friedman(raw(rows))
    smallest = rm.friedman(raw([sorted(row) for row in rows]))
    assert result.details["smallest_p"] == pytest.approx(smallest.p_value, rel=1e-12)
    assert result.p_value >= smallest.p_value * (1 - 1e-12)


@pytest.mark.property
@given(tables(n=st.integers(1, 6), k=st.integers(2, 4)))
def test_kendalls_w_lies_between_0_and_1_and_rank_sums_add_up(rows):
    result = rm.friedman(raw(rows))
    n, k = np.shape(rows)
    assert sum(result.details["rank_sums"]) == n * k * (k + 1) / 2
    w = result.details["kendall_w"]
    assert math.isnan(w) or -1e-12 <= w <= 1 + 1e-12


@pytest.mark.parametrize("shape", [(1, 2), (1, 4), (5, 3), (12, 2)])
def test_a_table_without_any_change_has_p_1_and_says_why(shape):
    result = rm.friedman(raw(np.full(shape, 7.5)))
    assert result.p_value == 1
    assert math.isnan(result.statistic)
    assert note_codes(result.notes) == ("all tied",)


def test_the_level_of_the_exact_test_is_kept_at_every_attainable_p():
    """The null law of p itself: P(p <= a) <= a, here with ties, by enumeration."""
    rows = [[1, 1, 2], [1, 2, 3], [2, 1, 1], [3, 2, 1]]
    arrangements = [row_orders(row).tolist() for row in rows]
    found = [
        rm.friedman(raw([rows[0], b, c, d])).p_value
        for b in arrangements[1]
        for c in arrangements[2]
        for d in arrangements[3]
    ]
    for a in set(found):
        assert np.mean(np.array(found) <= a * (1 + 1e-12)) == pytest.approx(a, rel=1e-9)


def test_monte_carlo_has_an_interval_around_the_exact_p_and_its_number_of_draws():
    rows = np.random.default_rng(3).integers(1, 9, size=(9, 3))
    exact = rm.friedman(raw(rows))
    drawn = rm.friedman(raw(rows), null="monte carlo", draws=9999, rng=5)
    low, high = present(drawn.p_interval)
    assert low <= exact.p_value <= high
    assert drawn.null == "monte carlo"
    assert drawn.draws == 9999
    assert round(drawn.p_value * 10_000) / 10_000 == pytest.approx(drawn.p_value, abs=1e-15)
    assert exact.p_interval is None
    assert "monte carlo" in note_codes(drawn.notes)


def test_draws_go_on_while_the_p_value_is_not_resolved_against_a_threshold():
    rows = np.random.default_rng(3).integers(1, 9, size=(9, 3))
    p = rm.friedman(raw(rows)).p_value
    clear = rm.friedman(
        raw(rows), null="monte carlo", draws=(99, 999), thresholds=(p / 1000,), rng=5
    )
    doubt = rm.friedman(raw(rows), null="monte carlo", draws=(99, 999), thresholds=(p,), rng=5)
    assert (clear.draws, doubt.draws) == (99, 999)
    assert any("not resolved" in str(note) for note in doubt.notes)


def test_an_exact_answer_beyond_the_budget_is_refused_with_its_cost():
    rows = np.random.default_rng(1).normal(size=(40, 6)).round(3)
    with pytest.raises(
        rm.BudgetError, match=r"`null` must be 'auto' or 'monte carlo'.*exact would"
    ):
        rm.friedman(raw(rows), null="exact")


def test_values_beyond_a_limit_rank_alike_and_the_common_limit_is_used():
    table = raw(
        [[0.3, 0.8, 0.5], [0.9, 0.3, 0.7], [1.0, 2.0, 3.0]],
        below=[[True, False, False], [False, True, False], [False] * 3],
        lower_limit=[0.3, 0.3, 0.6],
    )
    # 0.5 was measured, but on the third occasion nothing under 0.6 can be told apart
    assert rm.friedman(table).details["rank_sums"] == (1.5 + 3 + 1, 3 + 1 + 2, 1.5 + 2 + 3)
