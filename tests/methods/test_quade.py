"""Quade's test against enumeration, its formula, and its published example."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy import stats

import robustrm as rm
from tests.methods.enumeration import (
    FIVE_BY_FOUR,
    SMALL,
    TABLES,
    both_scales,
    check_upper,
    five_by_four,
    spread,
    values_by_definition,
    values_by_sums,
)
from tests.methods.tables import raw, tables, twice_ranks


def ranges(rows, scale):
    """Largest less smallest value of each subject, or their ratio, exactly."""
    if scale == "log":
        return [Fraction(max(row), min(row)) for row in rows]
    return [max(row) - min(row) for row in rows]


def scores(rows, scale):
    """Four times q (r − (k+1)/2), Quade (1979): whole numbers."""
    k = len(rows[0])
    weights = twice_ranks(ranges(rows, scale))
    return [
        [q * (rank - (k + 1)) for rank in twice_ranks(row)]
        for q, row in zip(weights, rows, strict=True)
    ]


def f_of(rows, scale):
    """F = (n−1) B / (A − B), A = ΣΣ S², B = Σ_j S_j² / n (Conover 1999, section 5.8)."""
    n = len(rows)
    table = scores(rows, scale)
    a = sum(cell**2 for row in table for cell in row)
    b = Fraction(sum(sum(column) ** 2 for column in zip(*table, strict=True)), n)
    if a == 0:
        return math.nan
    return math.inf if a == b else (n - 1) * b / (a - b)


@both_scales
@pytest.mark.property
@given(rows=TABLES)
def test_p_equals_the_enumeration_of_all_arrangements(scale, rows):
    values = values_by_sums(scores(rows, scale), spread)
    check_upper(rm.quade(raw(rows).on_scale(scale)), values)


@both_scales
@pytest.mark.property
@given(rows=SMALL)
def test_p_equals_the_enumeration_of_f_computed_anew(scale, rows):
    assume(any(len(set(row)) > 1 for row in rows))
    values = values_by_definition(rows, lambda arranged: f_of(arranged, scale))
    check_upper(rm.quade(raw(rows).on_scale(scale)), values)


@pytest.mark.slow
@both_scales
@five_by_four
def test_p_equals_the_enumeration_of_five_by_four(scale, name):
    rows = FIVE_BY_FOUR[name]
    values = values_by_sums(scores(rows, scale), spread)
    check_upper(rm.quade(raw(rows).on_scale(scale)), values)


@both_scales
@pytest.mark.property
@given(rows=tables(st.integers(1, 8), st.integers(2, 4)))
def test_statistic_is_f_of_the_formula_and_its_p_that_of_scipy(scale, rows):
    n, k = len(rows), len(rows[0])
    result = rm.quade(raw(rows).on_scale(scale), draws=99, rng=1)
    expected: float = f_of(rows, scale)
    assert result.statistic == pytest.approx(float(expected), rel=1e-10, nan_ok=True)
    assert list(result.df) == [k - 1, (n - 1) * (k - 1)]
    assert result.details["f_df"] == result.df
    sums = [sum(column) / 4 for column in zip(*scores(rows, scale), strict=True)]
    assert result.details["weighted_sums"] == pytest.approx(sums, rel=1e-12)
    if math.isfinite(expected) and n > 1:
        p = stats.f.sf(float(expected), *result.df)
        assert result.details["p_f"] == pytest.approx(p, rel=1e-9)


@pytest.mark.property
@given(n=st.integers(2, 8), k=st.integers(2, 4), widening=st.integers(0, 3))
def test_subjects_who_all_rank_alike_have_the_smallest_p(n, k, widening):
    """p = (1/k!)^(n−1); A = B, and F infinite, only where all ranges are alike too."""
    rows = [[(1 + widening * i) * j * j for j in range(1, k + 1)] for i in range(n)]
    result = rm.quade(raw(rows))
    assert result.p_value == pytest.approx(math.factorial(k) ** (1 - n), rel=1e-12)
    assert result.details["smallest_p"] == pytest.approx(result.p_value, rel=1e-12)
    assert (result.statistic == math.inf) == (widening == 0)
    if widening == 0:
        assert result.details["p_f"] == pytest.approx(result.p_value, rel=1e-12)


@pytest.mark.property
@given(rows=tables(st.integers(2, 6), st.integers(2, 3)))
def test_equal_ranges_give_friedmans_test(rows):
    """With one weight for all subjects the scores are the centred ranks."""
    stretched = [[20 * rank for rank in twice_ranks(row)] for row in rows]
    assume(len({max(row) - min(row) for row in stretched}) == 1)
    assert rm.quade(raw(stretched)).p_value == rm.friedman(raw(stretched)).p_value


def test_the_scale_decides_which_subjects_weigh_most():
    rows = [[100, 90, 95], [1, 4, 2], [3, 12, 5]]
    heaviest = {
        scale: np.argmax([max(map(abs, row)) for row in scores(rows, scale)])
        for scale in ("raw", "log")
    }
    assert heaviest == {"raw": 0, "log": 1}
    raw_p, log_p = (rm.quade(raw(rows).on_scale(scale)).p_value for scale in ("raw", "log"))
    assert raw_p != log_p


def test_half_the_limit_enters_a_range_and_the_rank_stays_lowest():
    values = [[0.4, 1.0, 0.8], [2.0, 1.4, 1.2], [0.9, 0.6, 1.1]]
    below = [[True, False, False], [False] * 3, [False] * 3]
    table = raw(values, below=below, lower_limit=0.4)
    entered = [[0.2, *values[0][1:]], *values[1:]]
    assert rm.quade(table).statistic == pytest.approx(rm.quade(raw(entered)).statistic, rel=1e-12)
    at_limit = rm.quade(table, substitute="limit").statistic
    assert at_limit == pytest.approx(rm.quade(raw(values)).statistic, rel=1e-12)


def test_a_table_without_a_complete_subject_is_refused():
    with pytest.raises(rm.TooFewError, match="Quade's test needs at least 1 subject with all 2"):
        rm.quade(raw([[1.0, np.nan], [np.nan, 2.0]]))
