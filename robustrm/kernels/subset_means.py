"""Means of subsets of a sample: the exact interval that belongs to the sign-flip test.

Of the 2ⁿ − 1 means of non-empty subsets, each gap between neighbours holds the centre of
symmetry with the same probability (typical values: Hartigan 1969, J Am Stat Assoc
64:1303-1317). The sign-flip test of the mean of d − θ rejects exactly when θ lies beyond the
corresponding order statistic.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

LARGEST = 40
"""Beyond this many values two lists of half subsets no longer fit."""


def subset_sums(d: Floats) -> Floats:
    """Return the sums of all 2ⁿ subsets of (n,) values, ascending; the empty one is 0."""
    sums = np.zeros(1)
    for value in d.tolist():
        sums = np.concatenate([sums, sums + value])
        sums.sort(kind="stable")  # two ascending runs: a merge, in linear time
    return sums


def count_at_most(d: Floats, centre: float) -> int:
    """Return how many of the 2ⁿ − 1 non-empty subsets have a mean of at most `centre`.

    The mean of a subset is at most θ when its sum of d − θ is at most zero: the subsets of
    two halves are listed in order, and one list is searched in the other.
    """
    shifted = d - centre
    half = d.size // 2
    low, high = subset_sums(shifted[:half]), subset_sums(shifted[half:])
    slack = 1e-13 * float(np.abs(shifted).sum())
    pairs = int(np.searchsorted(low, slack - high, side="right").sum())
    return pairs - 1  # the empty subset has no mean


def subset_mean(d: Floats, rank: int) -> float:
    """Return the `rank`-th smallest mean of a non-empty subset, by bisection on the count."""
    low, high = float(d.min()), float(d.max())
    if count_at_most(d, low) >= rank:
        return low
    while True:
        middle = low + (high - low) / 2
        if middle in (low, high) or high - low <= 1e-14 * max(abs(low), abs(high)):
            return high
        if count_at_most(d, middle) >= rank:
            high = middle
        else:
            low = middle


def random_subset_means(d: Floats, count: int, rng: np.random.Generator) -> Floats:
    """Return the means of `count` random subsets, sorted; empty subsets are drawn again."""
    means = np.empty(count)
    filled = 0
    while filled < count:
        members = rng.random((min(4096, count - filled), d.size)) < 0.5
        members = members[members.any(axis=1)]
        means[filled : filled + len(members)] = members @ d / members.sum(axis=1)
        filled += len(members)
    return np.sort(means)
