"""Walsh averages and the untied signed-rank law against enumeration."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from robustrm.kernels.walsh import interval_rank, pseudo_median, signed_rank_law, walsh_averages

FINITE = st.floats(-1e6, 1e6)


@pytest.mark.property
@given(st.lists(FINITE, min_size=1, max_size=9))
def test_averages_are_those_of_all_pairs_with_themselves(d):
    expected = sorted(a / 2 + b / 2 for a, b in itertools.combinations_with_replacement(d, 2))
    assert walsh_averages(np.array(d)).tolist() == expected
    assert pseudo_median(np.array(d)) == np.median(expected)


@pytest.mark.parametrize("n", range(11))
def test_the_law_is_the_share_of_sign_patterns(n):
    sums = [
        sum(rank for rank, up in enumerate(signs, 1) if up)
        for signs in itertools.product((0, 1), repeat=n)
    ]
    counts = np.bincount(sums, minlength=n * (n + 1) // 2 + 1)
    np.testing.assert_array_equal(signed_rank_law(n), counts / 2**n)


@pytest.mark.parametrize("n", [20, 50, 200])
def test_the_law_is_a_symmetric_distribution(n):
    law = signed_rank_law(n)
    assert law.sum() == pytest.approx(1, rel=1e-12)
    np.testing.assert_allclose(law, law[::-1], rtol=1e-12)
    assert not law.flags.writeable


@pytest.mark.property
@given(st.integers(1, 40), st.floats(0.01, 0.999))
def test_the_rank_is_the_largest_that_keeps_the_level(n, level):
    tail = 2 * np.cumsum(signed_rank_law(n))
    found = interval_rank(n, level)
    if found is None:
        assert tail[0] > (1 - level) * (1 - 1e-9)
        return
    assert found.level >= level * (1 - 1e-9)
    assert found.level == pytest.approx(1 - tail[found.rank - 1])
    assert tail[found.rank] > (1 - level) * (1 - 1e-9)


@pytest.mark.parametrize(("n", "level"), [(5, 0.9375), (6, 0.96875), (4, 0.875)])
def test_a_level_that_is_attained_exactly_is_not_lost_to_rounding(n, level):
    found = interval_rank(n, level)
    assert found is not None
    assert (found.level, found.rank) == (level, 1)


def test_one_call_does_many_samples():
    d = np.random.default_rng(0).normal(size=(3, 4, 7))
    assert walsh_averages(d).shape == (3, 4, 28)
    assert pseudo_median(d).shape == (3, 4)
    assert pseudo_median(d)[2, 1] == pseudo_median(d[2, 1])


def test_the_average_of_two_huge_differences_is_finite():
    assert np.isfinite(walsh_averages(np.array([1.7e308, 1.6e308]))).all()
