"""The Winsorized permutation test against enumeration and the ANOVA of statsmodels."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

import robustrm as rm
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

trims = st.sampled_from([0.0, 0.1, 0.2, 0.3])


def clipped(rows, scale, trim):
    """Subject-centred values pulled in to the g-th smallest and largest, g = ⌊trim · nk⌋."""
    if scale == "log":
        rows = [[math.log(cell) for cell in row] for row in rows]
    k = len(rows[0])
    centred = [[k * cell - sum(row) for cell in row] for row in rows]
    pooled = sorted(cell for row in centred for cell in row)
    g = int(round(trim * 10) * len(pooled) / 10)
    low, high = pooled[g], pooled[len(pooled) - 1 - g]
    return [[min(max(cell, low), high) for cell in row] for row in centred]


def scores(rows, scale, trim):
    """The clipped values, centred again; whole numbers on the raw scale."""
    return [[len(row) * cell - sum(row) for cell in row] for row in clipped(rows, scale, trim)]


@both_scales
@pytest.mark.property
@given(rows=TABLES, trim=trims)
def test_p_equals_the_enumeration_of_all_arrangements(scale, rows, trim):
    values = values_by_sums(scores(rows, scale, trim), spread)
    check_upper(rm.winsorized_permutation(raw(rows).on_scale(scale), winsorize=trim), values)


@both_scales
@pytest.mark.property
@given(rows=SMALL, trim=trims)
def test_p_equals_the_enumeration_with_clip_points_found_anew(scale, rows, trim):
    """The clip points do not depend on the arrangement, which makes the test exact."""
    values = values_by_definition(
        rows, lambda arranged: share_of_variation(clipped(arranged, scale, trim))
    )
    check_upper(rm.winsorized_permutation(raw(rows).on_scale(scale), winsorize=trim), values)


@pytest.mark.slow
@both_scales
@five_by_four
def test_p_equals_the_enumeration_of_five_by_four(scale, name):
    rows = FIVE_BY_FOUR[name]
    values = values_by_sums(scores(rows, scale, 0.1), spread)
    check_upper(rm.winsorized_permutation(raw(rows).on_scale(scale)), values)


@pytest.mark.reference
@both_scales
@pytest.mark.property
@given(rows=measured(n=st.integers(3, 7), k=st.integers(3, 4)), trim=trims)
def test_statistic_is_f_of_statsmodels_anova_of_the_clipped_values(scale, rows, trim):
    values = np.array(clipped(rows, scale, trim))
    share = share_of_variation(values.tolist())
    assume(1e-6 < share < 1 - 1e-6)
    f, p, df = anova_f(values)
    result = rm.winsorized_permutation(
        raw(rows).on_scale(scale), winsorize=trim, null="monte carlo", draws=99, rng=1
    )
    assert result.statistic == pytest.approx(f, rel=1e-10 / min(share, 1 - share) ** 0.5)
    assert result.details["p_f"] == pytest.approx(p, rel=1e-8)
    assert result.df == df
    assert result.details["winsorize"] == trim


@both_scales
@pytest.mark.property
@given(rows=TABLES)
def test_without_pulling_in_it_is_the_permutation_f_test(scale, rows):
    table = raw(rows).on_scale(scale)
    found, means = rm.winsorized_permutation(table, winsorize=0), rm.mean_permutation(table)
    assert found.p_value == pytest.approx(means.p_value, rel=1e-12)
    assert found.statistic == pytest.approx(means.statistic, rel=1e-9, abs=1e-12, nan_ok=True)


def test_one_wild_value_hides_the_means_but_not_the_winsorized_values():
    """F of the means tends to 1 as one value grows without bound."""
    rows = np.array([[5, 9, 12], [6, 8, 11], [4, 7, 13], [5, 8, 10], [6, 9, 14], [3, 8, 12]])
    rows[0, 2] = 30_000
    assert rm.mean_permutation(raw(rows)).statistic == pytest.approx(1, abs=0.01)
    assert rm.winsorized_permutation(raw(rows), winsorize=0.2).statistic > 10


@pytest.mark.parametrize(
    ("trim", "message"),
    [
        (0.5, r"`winsorize` must be in \[0, 0.5\), got 0.5\."),
        (-0.1, r"`winsorize` must be in \[0, 0.5\), got -0.1\."),
        (10, r"`winsorize` must be in \[0, 0.5\), got 10\. Did you mean 0.1\?"),
    ],
)
def test_an_impossible_share_is_refused(trim, message):
    with pytest.raises(rm.ArgumentError, match=message):
        rm.winsorized_permutation(raw([[1, 2], [3, 4]]), winsorize=trim)
