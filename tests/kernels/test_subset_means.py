"""Subset means against listing all subsets."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from robustrm.kernels import subset_means

whole = st.lists(st.integers(-30, 30), min_size=1, max_size=10).map(
    lambda values: np.array(values, dtype=float)
)


def all_means(d):
    """Means of all non-empty subsets, ascending."""
    subsets = (s for size in range(1, d.size + 1) for s in itertools.combinations(d, size))
    return np.sort([np.mean(subset) for subset in subsets])


def test_subset_sums_list_every_subset_in_order():
    sums = subset_means.subset_sums(np.array([-1.0, 10.0, 100.0]))
    assert sums.tolist() == [-1, 0, 9, 10, 99, 100, 109, 110]
    assert subset_means.subset_sums(np.array([])).tolist() == [0]


@pytest.mark.property
@given(whole, st.integers(-60, 60))
def test_count_at_most_counts_the_means(d, twice):
    centre = twice / 2
    expected = int((all_means(d) <= centre + 1e-9).sum())
    assert subset_means.count_at_most(d, centre) == expected


@pytest.mark.property
@given(whole, st.data())
def test_subset_mean_is_the_order_statistic(d, data):
    means = all_means(d)
    rank = data.draw(st.integers(1, means.size))
    found = subset_means.subset_mean(d, rank)
    assert found == pytest.approx(means[rank - 1], rel=1e-9, abs=1e-9)


@pytest.mark.property
@given(whole)
def test_extreme_means_are_the_extreme_values(d):
    assert subset_means.subset_mean(d, 1) == d.min()
    assert subset_means.subset_mean(d, 2**d.size - 1) == pytest.approx(d.max(), abs=1e-9)


def test_forty_values_that_all_agree_have_one_mean():
    d = np.full(40, 2.5)
    for rank in (1, 2**20, 2**40 - 1):
        assert subset_means.subset_mean(d, rank) == 2.5


@pytest.mark.slow
def test_means_of_one_to_forty_are_symmetric_about_their_centre():
    """The subset and the one of its values taken from 41 have means that add up to 41."""
    d = np.arange(1.0, 41)
    rank = 2**40 // 40
    low, high = subset_means.subset_mean(d, rank), -subset_means.subset_mean(-d, rank)
    assert low + high == pytest.approx(41, abs=1e-9)
    assert subset_means.count_at_most(d, low + 1e-6) >= rank
    assert subset_means.count_at_most(d, low - 1e-6) < rank


def test_random_subset_means_are_sorted_means_of_non_empty_subsets():
    d = np.array([1.0, 10.0])
    means = subset_means.random_subset_means(d, 30_000, np.random.default_rng(1))
    assert means.size == 30_000
    assert (np.diff(means) >= 0).all()
    values, counts = np.unique(means, return_counts=True)
    assert values.tolist() == [1, 5.5, 10]
    # each of the three subsets is equally likely: 10,000 with a standard deviation of 82
    assert np.abs(counts - 10_000).max() < 400


def test_random_subset_means_have_the_quantiles_of_all_of_them():
    d = np.random.default_rng(5).normal(size=12)
    every = all_means(d)
    drawn = subset_means.random_subset_means(d, 99_999, np.random.default_rng(6))
    for share in (0.025, 0.5, 0.975):
        place = np.searchsorted(every, np.quantile(drawn, share)) / every.size
        assert place == pytest.approx(share, abs=0.005)
