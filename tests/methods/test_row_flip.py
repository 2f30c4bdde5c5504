"""The whole-row sign flip against enumeration and the ANOVA of statsmodels."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

import robustrm as rm
from robustrm.results import note_codes
from tests.methods.enumeration import (
    anova_f,
    both_scales,
    check_upper,
    mirrored,
    share_of_variation,
    spread,
    values_by_definition,
    values_by_sums,
)
from tests.methods.tables import differences, measured, pair_of, raw, tables

TEN = tables(st.integers(1, 10), st.integers(2, 4), most=6)


def scores(rows, scale):
    """Subject-centred values or logarithms, times k."""
    if scale == "log":
        rows = [[math.log(cell) for cell in row] for row in rows]
    return [[len(row) * cell - sum(row) for cell in row] for row in rows]


@both_scales
@pytest.mark.property
@given(rows=TEN)
def test_p_equals_the_enumeration_of_all_mirror_images(scale, rows):
    values = values_by_sums(scores(rows, scale), spread, mirrored)
    check_upper(rm.row_flip(raw(rows).on_scale(scale)), values)


@both_scales
@pytest.mark.property
@given(rows=tables(st.integers(1, 7), st.integers(2, 4), most=6))
def test_p_equals_the_enumeration_of_the_variation_computed_anew(scale, rows):
    values = values_by_definition(scores(rows, scale), share_of_variation, mirrored)
    check_upper(rm.row_flip(raw(rows).on_scale(scale)), values)


@pytest.mark.slow
@both_scales
@pytest.mark.parametrize(("n", "most"), [(16, 3), (17, 9), (18, 1000)])
def test_p_equals_the_enumeration_of_many_subjects(scale, n, most):
    rows = np.random.default_rng(n).integers(1, most + 1, size=(n, 4)).tolist()
    values = values_by_sums(scores(rows, scale), spread, mirrored)
    check_upper(rm.row_flip(raw(rows).on_scale(scale)), values)


@pytest.mark.reference
@both_scales
@pytest.mark.property
@given(rows=measured(n=st.integers(3, 8), k=st.integers(3, 4)))
def test_statistic_is_f_of_statsmodels_anova(scale, rows):
    values = np.log(rows) if scale == "log" else np.array(rows)
    share = share_of_variation(values.tolist())
    assume(1e-8 < share < 1 - 1e-8)
    f, p, df = anova_f(values)
    result = rm.row_flip(raw(rows).on_scale(scale))
    assert result.statistic == pytest.approx(f, rel=1e-10 / min(share, 1 - share) ** 0.5)
    assert result.details["p_f"] == pytest.approx(p, rel=1e-8)
    assert result.df == df


@pytest.mark.property
@given(d=differences(most_n=10))
def test_with_two_occasions_it_is_the_two_sided_sign_flip(d):
    found, pair = rm.row_flip(pair_of(d)), rm.sign_flip(pair_of(d), "week 0", "week 2")
    assert found.p_value == pytest.approx(pair.p_value, rel=1e-12)


@pytest.mark.parametrize("n", [1, 2, 8, 12])
def test_the_smallest_p_halves_with_every_subject(n):
    """2^(1−n): all subjects alike, or all mirrored."""
    result = rm.row_flip(raw([[10 * i, 10 * i + 3, 10 * i + 1] for i in range(1, n + 1)]))
    assert result.p_value == result.details["smallest_p"] == 2.0 ** (1 - n)


def test_mirroring_a_subject_is_another_group_than_permuting_it():
    """No order of a row with unequal steps is its mirror image, so the two tests differ."""
    rows = [[1, 2, 4], [2, 9, 3], [5, 1, 1], [7, 8, 3], [2, 6, 4]]
    assert rm.row_flip(raw(rows)).p_value != rm.mean_permutation(raw(rows)).p_value
    assert rm.row_flip(raw(rows)).arrangements == 2**5


def test_the_hypothesis_asks_for_symmetry_whatever_the_covariance():
    result = rm.row_flip(raw([[1, 2, 4], [2, 9, 3], [5, 1, 1]]))
    assert "symmetrically about zero, whatever their covariance" in result.hypothesis


def test_a_table_without_any_change_has_p_1_and_says_why():
    result = rm.row_flip(raw(np.full((4, 3), 7.5)))
    assert result.p_value == 1
    assert math.isnan(result.statistic)
    assert note_codes(result.notes) == ("all tied",)
