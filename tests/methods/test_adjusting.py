"""Adjusted p values against statsmodels, SciPy and the definition by closed testing."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats
from statsmodels.stats.multitest import multipletests

import robustrm as rm
from robustrm.methods.adjusting import TITLES, adjusted
from robustrm.methods.registry import ADJUSTMENTS, P_ADJUSTMENTS

P_VALUES = st.lists(st.floats(1e-12, 1), min_size=1, max_size=8)
FAMILYWISE = ("bonferroni", "holm", "hochberg", "hommel")
THEIRS = {"bonferroni": "b", "holm": "h", "hochberg": "sh", "hommel": "ho", "bh": "fdr_bh"}


def simes(p_values):
    m = len(p_values)
    return min(m * p / rank for rank, p in enumerate(sorted(p_values), 1))


def closed(p_values, local):
    """Adjusted p by closed testing: the largest local p over all intersections with the member."""
    m = len(p_values)
    sets = [s for size in range(1, m + 1) for s in itertools.combinations(range(m), size)]
    tests = {s: min(1.0, local([p_values[i] for i in s])) for s in sets}
    return [max(p for s, p in tests.items() if i in s) for i in range(m)]


@pytest.mark.reference
@pytest.mark.property
@given(p=P_VALUES, name=st.sampled_from(sorted(THEIRS)))
def test_agrees_with_statsmodels_multipletests(p, name):
    expected = np.minimum(1, multipletests(p, method=THEIRS[name])[1])
    assert adjusted(p, name) == pytest.approx(expected, rel=1e-10)


@pytest.mark.reference
@pytest.mark.property
@given(p=P_VALUES)
def test_benjamini_hochberg_agrees_with_scipy(p):
    assert adjusted(p, "bh") == pytest.approx(stats.false_discovery_control(p), rel=1e-10)


@pytest.mark.property
@given(p=st.lists(st.floats(1e-12, 1), min_size=1, max_size=6))
def test_hommel_is_closed_testing_with_simes_and_holm_with_bonferroni(p):
    """Hommel (1988); Holm (1979): the local tests of the two closed procedures."""
    assert adjusted(p, "hommel") == pytest.approx(closed(p, simes), rel=1e-10)
    holm = closed(p, lambda part: len(part) * min(part))
    assert adjusted(p, "holm") == pytest.approx(holm, rel=1e-10)


@pytest.mark.property
@given(p=P_VALUES, name=st.sampled_from(P_ADJUSTMENTS))
def test_adjusted_p_values_are_bounded_ordered_and_never_below_the_raw_ones(p, name):
    found = adjusted(p, name)
    assert all(raw <= q <= 1 for raw, q in zip(p, found, strict=True))
    ranked = [found[i] for i in np.argsort(p, kind="stable")]
    assert all(b >= a * (1 - 1e-12) for a, b in itertools.pairwise(ranked))


@pytest.mark.property
@given(p=P_VALUES, name=st.sampled_from(P_ADJUSTMENTS), seed=st.integers(0, 99))
def test_the_order_of_the_family_plays_no_part(p, name, seed):
    order = np.random.default_rng(seed).permutation(len(p))
    shuffled = adjusted([p[i] for i in order], name)
    assert shuffled == pytest.approx([adjusted(p, name)[i] for i in order], rel=1e-12)


@pytest.mark.property
@given(p=P_VALUES, name=st.sampled_from(P_ADJUSTMENTS), at=st.integers(0, 7), less=st.floats(0, 1))
def test_a_smaller_p_never_makes_an_adjusted_one_larger(p, name, at, less):
    smaller = list(p)
    smaller[at % len(p)] *= less or 1e-12
    before, after = adjusted(p, name), adjusted(smaller, name)
    assert all(b <= a * (1 + 1e-12) for a, b in zip(before, after, strict=True))


@pytest.mark.property
@given(p=P_VALUES, name=st.sampled_from(FAMILYWISE))
def test_a_test_that_could_not_run_stays_and_counts(p, name):
    found = adjusted([*p, math.nan], name)
    assert math.isnan(found[-1])
    assert found[:-1] == pytest.approx(adjusted([*p, 1.0], name)[:-1], rel=1e-12)
    if name == "bonferroni":
        assert found[0] == pytest.approx(min(1, (len(p) + 1) * p[0]), rel=1e-12)


def test_all_missing_and_none_stay_as_they_are():
    assert all(math.isnan(p) for p in adjusted([math.nan, math.nan], "holm"))
    assert adjusted([], "holm") == []
    assert adjusted([0.02, 0.9], "none") == [0.02, 0.9]


def test_an_unknown_adjustment_is_refused_with_the_nearest():
    with pytest.raises(
        rm.ArgumentError, match=r"`adjust` must be one of .*Did you mean 'hommel'\?"
    ):
        adjusted([0.1], "homel")


def test_every_adjustment_of_p_values_is_compared_here():
    assert set(P_ADJUSTMENTS) == {"none", *THEIRS}


def test_every_adjustment_has_a_title():
    assert set(TITLES) == set(ADJUSTMENTS)
