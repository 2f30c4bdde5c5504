"""The permutation F test against enumeration and the within-subject ANOVA of statsmodels."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

import robustrm as rm
from robustrm.results import note_codes
from tests.methods.enumeration import (
    FIVE_BY_FOUR,
    SMALL,
    TABLES,
    anova_f,
    both_scales,
    check_upper,
    five_by_four,
    share_of_variation,
    spread,
    values_by_definition,
    values_by_sums,
)
from tests.methods.tables import measured, raw


def on_scale(rows, scale):
    """The values themselves, or their logarithms."""
    return [[math.log(cell) for cell in row] if scale == "log" else list(row) for row in rows]


def scores(rows, scale):
    """Subject-centred values; whole numbers, times k, on the raw scale."""
    k = len(rows[0])
    return [[k * cell - sum(row) for cell in row] for row in on_scale(rows, scale)]


@both_scales
@pytest.mark.property
@given(rows=TABLES)
def test_p_equals_the_enumeration_of_all_arrangements(scale, rows):
    values = values_by_sums(scores(rows, scale), spread)
    check_upper(rm.mean_permutation(raw(rows).on_scale(scale)), values)


@both_scales
@pytest.mark.property
@given(rows=SMALL)
def test_p_equals_the_enumeration_of_the_variation_computed_anew(scale, rows):
    values = values_by_definition(on_scale(rows, scale), share_of_variation)
    check_upper(rm.mean_permutation(raw(rows).on_scale(scale)), values)


@pytest.mark.slow
@both_scales
@five_by_four
def test_p_equals_the_enumeration_of_five_by_four(scale, name):
    rows = FIVE_BY_FOUR[name]
    values = values_by_sums(scores(rows, scale), spread)
    check_upper(rm.mean_permutation(raw(rows).on_scale(scale)), values)


@pytest.mark.reference
@both_scales
@pytest.mark.property
@given(rows=measured(n=st.integers(3, 8), k=st.integers(3, 4)))
def test_statistic_is_f_of_statsmodels_anova(scale, rows):
    values = np.array(on_scale(rows, scale))
    share = share_of_variation(values.tolist())
    assume(1e-8 < share < 1 - 1e-8)
    f, p, df = anova_f(values)
    result = rm.mean_permutation(raw(rows).on_scale(scale), null="monte carlo", draws=99, rng=1)
    # what rounding leaves of F in doubles is relative to the larger of both sums of squares
    assert result.statistic == pytest.approx(f, rel=1e-10 / min(share, 1 - share) ** 0.5)
    assert result.details["p_f"] == pytest.approx(p, rel=1e-8)
    assert result.details["f_df"] == result.df == df
    assert result.statistic == pytest.approx(
        rm.anova(raw(rows).on_scale(scale)).statistic, rel=1e-9 / min(share, 1 - share) ** 0.5
    )


@pytest.mark.reference
@both_scales
@pytest.mark.parametrize("name", FIVE_BY_FOUR)
def test_statistic_of_the_fixed_tables_is_f_of_statsmodels_anova(scale, name):
    rows = FIVE_BY_FOUR[name]
    f, p, _ = anova_f(np.array(on_scale(rows, scale), dtype=float))
    result = rm.mean_permutation(raw(rows).on_scale(scale), null="monte carlo", draws=99, rng=1)
    assert result.statistic == pytest.approx(f, rel=1e-10)
    assert result.details["p_f"] == pytest.approx(p, rel=1e-10)


@pytest.mark.parametrize(("n", "k"), [(9, 3), (6, 4)])
def test_real_scores_are_counted_as_whole_ones_are(n, k):
    """Values in another unit without short decimals: the same test by another way of counting."""
    rows = np.random.default_rng(n).integers(1, 40, size=(n, k))
    whole = rm.mean_permutation(raw(rows))
    other = rm.mean_permutation(raw(rows * math.pi))
    assert other.p_value == pytest.approx(whole.p_value, rel=1e-12)
    assert other.details["smallest_p"] == pytest.approx(whole.details["smallest_p"], rel=1e-12)
    assert other.statistic == pytest.approx(whole.statistic, rel=1e-10)


def test_subjects_who_all_change_alike_have_an_infinite_f_and_the_smallest_p():
    result = rm.mean_permutation(raw([[10 * i, 10 * i + 3, 10 * i + 1] for i in range(1, 6)]))
    assert result.statistic == math.inf
    assert result.p_value == pytest.approx(6.0**-4, rel=1e-12)
    assert result.details["smallest_p"] == result.p_value
    assert math.isnan(result.details["p_f"])


def test_half_the_limit_enters():
    values = [[0.4, 1.0, 0.8], [2.0, 1.4, 1.2], [0.9, 0.6, 1.1]]
    below = [[True, False, False], [False] * 3, [False] * 3]
    entered = [[0.2, *values[0][1:]], *values[1:]]
    found = rm.mean_permutation(raw(values, below=below, lower_limit=0.4).log())
    expected = rm.mean_permutation(raw(entered).log())
    assert found.statistic == pytest.approx(expected.statistic, rel=1e-10)
    assert found.p_value == expected.p_value


def test_a_table_without_any_change_has_p_1_and_says_why():
    result = rm.mean_permutation(raw(np.full((4, 3), 7.5)).log())
    assert result.p_value == 1
    assert math.isnan(result.statistic)
    assert note_codes(result.notes) == ("all tied",)
