"""Exact tails of a sum of real scores: two sorted lists of half sums, paired by bisection.

The device of Horowitz & Sahni (1974) for subset sums: 40 sign flips are two lists of 2^20 numbers
instead of 2^40 sums. Tails are sums of positive terms and keep their relative precision.

References
----------
Horowitz E, Sahni S (1974). Computing partitions with applications to the knapsack problem.
Journal of the ACM 21:277-292.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from robustrm.kernels.null.tables import Array, ListedRow
from robustrm.kernels.null.two_halves import halves


def tails(tables: Sequence[ListedRow], low: float, high: float) -> tuple[float, float, int]:
    """Weight of the sums at least `low`, of those at most `high`, and of all.

    Parameters
    ----------
    tables : sequence of ListedRow
        One score a vector, (arrangements, 1).
    low, high : float
        Bounds just below and just above the observed value.

    Returns
    -------
    tuple of float, float and int
    """
    (first, first_weights), (second, second_weights) = halves(tables, 1)
    order = np.argsort(second[:, 0])
    ascending = second[order, 0]
    below = np.r_[0.0, np.cumsum(second_weights[order])]
    above = np.r_[np.cumsum(second_weights[order][::-1])[::-1], 0.0]
    queries = np.argsort(first[:, 0])[::-1]  # bisection of sorted queries stays in the cache
    points, weights = first[queries, 0], first_weights[queries]
    upper = weights @ above[np.searchsorted(ascending, low - points, side="left")]
    lower = weights @ below[np.searchsorted(ascending, high - points, side="right")]
    return float(upper), float(lower), math.prod(table.total for table in tables)


def extremes(tables: Sequence[ListedRow]) -> tuple[float, float]:
    """Smallest and largest attainable sum."""
    smallest: Array = np.sum([table.vectors.min() for table in tables])
    greatest: Array = np.sum([table.vectors.max() for table in tables])
    return float(smallest), float(greatest)
