"""The normal-scores test against enumeration, its formula, and Friedman's test."""

from __future__ import annotations

import math
from statistics import NormalDist

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
from tests.methods.tables import raw, tables, twice_ranks


def scores(rows):
    """Φ⁻¹(r/(k+1)) of the mid-ranks, less the subject's mean (Conover 1999, section 5.10)."""
    k = len(rows[0])
    table = []
    for row in rows:
        quantiles = [NormalDist().inv_cdf(rank / 2 / (k + 1)) for rank in twice_ranks(row)]
        table.append([quantile - sum(quantiles) / k for quantile in quantiles])
    return table


def statistic(rows):
    """(k−1) Σ_j (Σ_i a_ij)² / ΣΣ a_ij²."""
    table = scores(rows)
    whole = sum(cell**2 for row in table for cell in row)
    between = sum(sum(column) ** 2 for column in zip(*table, strict=True))
    return (len(rows[0]) - 1) * between / whole if whole > 1e-20 else math.nan


@pytest.mark.property
@given(rows=TABLES)
def test_p_equals_the_enumeration_of_all_arrangements(rows):
    check_upper(rm.normal_scores(raw(rows)), values_by_sums(scores(rows), spread))


@both_scales
@pytest.mark.property
@given(rows=SMALL)
def test_p_equals_the_enumeration_of_the_statistic_computed_anew(scale, rows):
    assume(any(len(set(row)) > 1 for row in rows))
    values = values_by_definition(rows, statistic)
    check_upper(rm.normal_scores(raw(rows).on_scale(scale)), values)


@pytest.mark.slow
@five_by_four
def test_p_equals_the_enumeration_of_five_by_four(name):
    rows = FIVE_BY_FOUR[name]
    check_upper(rm.normal_scores(raw(rows)), values_by_sums(scores(rows), spread))


@pytest.mark.property
@given(rows=tables(st.integers(1, 8), st.integers(2, 5)))
def test_statistic_is_that_of_the_definition_and_its_p_chi_square(rows):
    k = len(rows[0])
    result = rm.normal_scores(raw(rows), draws=99, rng=1)
    expected = statistic(rows)
    assert result.statistic == pytest.approx(expected, rel=1e-10, nan_ok=True, abs=1e-12)
    sums = [sum(column) for column in zip(*scores(rows), strict=True)]
    assert result.details["score_sums"] == pytest.approx(sums, rel=1e-10, abs=1e-12)
    if not math.isnan(expected):
        p = stats.chi2.sf(expected, k - 1)
        assert result.details["p_chi2"] == pytest.approx(p, rel=1e-10)


@pytest.mark.property
@given(
    st.lists(st.permutations([1, 2, 3]), min_size=1, max_size=10),
    st.lists(st.permutations([1, 2]), min_size=1, max_size=10),
)
def test_with_two_or_three_occasions_and_no_ties_it_is_friedmans_test(threes, twos):
    """The scores are then proportional to the centred ranks."""
    for rows in (threes, twos):
        found, friedman = rm.normal_scores(raw(rows)), rm.friedman(raw(rows))
        assert found.statistic == pytest.approx(friedman.statistic, rel=1e-10, abs=1e-12)
        assert found.p_value == pytest.approx(friedman.p_value, rel=1e-12)


def test_the_scale_plays_no_part():
    rows = [[9, 7, 6, 5], [4, 3, 2, 1], [12, 8, 10, 5]]
    found, on_logs = rm.normal_scores(raw(rows)), rm.normal_scores(raw(rows).log())
    assert (found.statistic, found.p_value) == (on_logs.statistic, on_logs.p_value)


def test_a_table_without_any_change_has_p_1_and_says_why():
    result = rm.normal_scores(raw(np.full((4, 3), 7.5)))
    assert result.p_value == 1
    assert math.isnan(result.statistic)
    assert note_codes(result.notes) == ("all tied",)
