"""The aligned-ranks test against enumeration and the formula of Hodges and Lehmann (1962)."""

from __future__ import annotations

import math
from fractions import Fraction

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
    check_upper,
    five_by_four,
    spread,
    values_by_definition,
    values_by_sums,
)
from tests.methods.tables import measured, raw, tables, twice_ranks


def aligned(rows, scale):
    """Values in the order of the subject-centred ones, exactly: k y − Σ y, or y^k / Π y."""
    k = len(rows[0])
    if scale == "log":
        return [[Fraction(cell**k, math.prod(row)) for cell in row] for row in rows]
    return [[k * cell - sum(row) for cell in row] for row in rows]


def doubled_ranks(rows, scale):
    """Twice the mid-rank of each aligned value among all nk."""
    k = len(rows[0])
    ranks = twice_ranks([cell for row in aligned(rows, scale) for cell in row])
    return [ranks[i : i + k] for i in range(0, len(ranks), k)]


def scores(rows, scale):
    """2k times the ranks less their subject's mean rank: whole numbers."""
    k = len(rows[0])
    return [[k * rank - sum(row) for rank in row] for row in doubled_ranks(rows, scale)]


def statistic(rows, scale):
    """(k−1) Σ_j (R_j − mean)² / Σ v², v the rank less its subject's mean rank, exactly."""
    n, k = len(rows), len(rows[0])
    ranks = [[Fraction(rank, 2) for rank in row] for row in doubled_ranks(rows, scale)]
    middle = Fraction(n * (n * k + 1), 2)
    between = sum((sum(column) - middle) ** 2 for column in zip(*ranks, strict=True))
    within = sum((rank - sum(row) / k) ** 2 for row in ranks for rank in row)
    return (k - 1) * between / within if within else math.nan


@both_scales
@pytest.mark.property
@given(rows=TABLES)
def test_p_equals_the_enumeration_of_all_arrangements(scale, rows):
    values = values_by_sums(scores(rows, scale), spread)
    check_upper(rm.aligned_ranks(raw(rows).on_scale(scale)), values)


@both_scales
@pytest.mark.property
@given(rows=SMALL)
def test_p_equals_the_enumeration_of_the_statistic_computed_anew(scale, rows):
    assume(any(len(set(row)) > 1 for row in rows))
    values = values_by_definition(rows, lambda arranged: statistic(arranged, scale))
    check_upper(rm.aligned_ranks(raw(rows).on_scale(scale)), values)


@pytest.mark.slow
@both_scales
@five_by_four
def test_p_equals_the_enumeration_of_five_by_four(scale, name):
    rows = FIVE_BY_FOUR[name]
    values = values_by_sums(scores(rows, scale), spread)
    check_upper(rm.aligned_ranks(raw(rows).on_scale(scale)), values)


@both_scales
@pytest.mark.property
@given(rows=tables(st.integers(1, 8), st.integers(2, 4)))
def test_statistic_is_that_of_the_definition_and_its_p_chi_square(scale, rows):
    k = len(rows[0])
    result = rm.aligned_ranks(raw(rows).on_scale(scale), draws=99, rng=1)
    expected = float(statistic(rows, scale))
    assert result.statistic == pytest.approx(expected, rel=1e-10, nan_ok=True)
    sums = [sum(column) / 2 for column in zip(*doubled_ranks(rows, scale), strict=True)]
    assert result.details["rank_sums"] == pytest.approx(sums, rel=1e-12)
    if not math.isnan(expected):
        p = stats.chi2.sf(expected, k - 1)
        assert result.details["p_chi2"] == pytest.approx(p, rel=1e-10)


@both_scales
@pytest.mark.property
@given(rows=measured(n=st.integers(2, 6), k=st.integers(2, 4)))
def test_without_ties_it_is_the_closed_form(scale, rows):
    """(k−1)[Σ R_j² − kn²(kn+1)²/4] / [kn(kn+1)(2kn+1)/6 − Σ R_i²/k], Hodges & Lehmann."""
    values = np.log(rows) if scale == "log" else np.array(rows)
    n, k = values.shape
    centred = (values - values.mean(axis=1, keepdims=True)).ravel()
    assume(np.diff(np.sort(centred)).min() > 1e-6)
    ranks = stats.rankdata(centred).reshape(n, k)
    whole = k * n * (k * n + 1)
    above = (ranks.sum(axis=0) ** 2).sum() - k * n**2 * (k * n + 1) ** 2 / 4
    below = whole * (2 * k * n + 1) / 6 - (ranks.sum(axis=1) ** 2).sum() / k
    result = rm.aligned_ranks(raw(rows).on_scale(scale), draws=99, rng=1)
    assert result.statistic == pytest.approx((k - 1) * above / below, rel=1e-10)


def test_equal_ratios_are_tied_on_the_log_scale():
    """0.1 : 0.2 and 0.3 : 0.6 are one ratio, though their logarithms differ in the last bits."""
    rows = [[0.1, 0.2, 0.4], [0.3, 0.6, 1.2], [0.7, 1.4, 2.8]]
    result = rm.aligned_ranks(raw(rows).log())
    assert result.details["rank_sums"] == (6, 15, 24)
    whole = rm.aligned_ranks(raw([[1, 2, 4], [3, 6, 12], [7, 14, 28]]).log())
    assert result.p_value == whole.p_value


def test_adding_a_constant_to_a_subject_changes_nothing():
    rows = np.array([[91, 72, 60], [40, 31, 25], [120, 125, 80], [66, 50, 59]])
    moved = rows + np.array([[0], [500], [12], [3]])
    first, second = rm.aligned_ranks(raw(rows)), rm.aligned_ranks(raw(moved))
    assert (first.statistic, first.p_value) == (second.statistic, second.p_value)


def test_half_the_limit_enters():
    values = [[0.4, 1.0, 0.8], [2.0, 1.4, 1.2], [0.9, 0.6, 1.1]]
    below = [[True, False, False], [False] * 3, [False] * 3]
    entered = [[0.2, *values[0][1:]], *values[1:]]
    found = rm.aligned_ranks(raw(values, below=below, lower_limit=0.4))
    assert found.details["rank_sums"] == rm.aligned_ranks(raw(entered)).details["rank_sums"]
    assert found.p_value == rm.aligned_ranks(raw(entered)).p_value


def test_a_table_without_any_change_has_p_1_and_says_why():
    result = rm.aligned_ranks(raw(np.full((4, 3), 7.5)))
    assert result.p_value == 1
    assert math.isnan(result.statistic)
    assert note_codes(result.notes) == ("all tied",)
