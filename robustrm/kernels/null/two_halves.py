"""Exact upper tail of |sum|^2 for real scores: two lists of half sums, counted on two trees.

With A and B the possible sums of either half of the subjects, |a + b| exceeds r unless a lies
within r of -b. Such pairs are counted, with weights, by descending two k-d trees together (Gray &
Moore 2001), without visiting them one by one.

The tail is a complement, so the weights must be whole numbers with a total below 2^53: then the
count is exact and small tails are not noise.

References
----------
Gray AG, Moore AW (2001). N-body problems in statistical learning. Advances in Neural Information
Processing Systems 13:521-527.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from robustrm.kernels.null.tables import Array, ListedRow, merge_rows

# Half sums nearer than this share of the largest magnitude are one: a hundredth of the tolerance.
GRID = 1e-12


def split(sizes: Sequence[int]) -> tuple[list[int], list[int]]:
    """Deal subjects, largest table first, to the half that has fewer sums so far."""
    halves: tuple[list[int], list[int]] = ([], [])
    logs = [0.0, 0.0]
    for subject in sorted(range(len(sizes)), key=lambda i: -sizes[i]):
        smaller = int(logs[1] < logs[0])
        halves[smaller].append(subject)
        logs[smaller] += math.log(sizes[subject])
    return halves


def half_sums(tables: Sequence[ListedRow], dimension: int) -> tuple[Array, Array]:
    """List all sums of one vector from each table, (N, d), and their weights; equal ones merged."""
    grid = GRID * math.fsum(table.norm for table in tables)
    sums, weights = np.zeros((1, dimension)), np.ones(1)
    for table in tables:
        sums = (sums[:, None, :] + table.vectors[None, :, :]).reshape(-1, dimension)
        weights = np.multiply.outer(weights, table.weights).ravel()
        sums, weights = merge_rows(sums, weights, grid=grid)
    return sums, weights


def halves(tables: Sequence[ListedRow], dimension: int) -> tuple[tuple[Array, Array], ...]:
    """Half sums of both halves."""
    sides = split([table.size for table in tables])
    return tuple(half_sums([tables[i] for i in side], dimension) for side in sides)


def upper_tail(tables: Sequence[ListedRow], floor: float) -> tuple[float, int]:
    """Weight of the arrangements with |sum|^2 above `floor`, and the weight of all.

    Parameters
    ----------
    tables : sequence of ListedRow
        Projected scores; one subject may have been folded (see `symmetry`).
    floor : float
        Bound just below the observed value; below zero everything counts.

    Returns
    -------
    tuple of float and int
    """
    from scipy.spatial import cKDTree  # here, because it is slow to import

    total = math.prod(table.total for table in tables)
    if floor < 0:
        return float(total), total
    (first, first_weights), (second, second_weights) = halves(tables, tables[0].vectors.shape[1])
    within = cKDTree(first).count_neighbors(
        cKDTree(-second), math.sqrt(floor), weights=(first_weights, second_weights)
    )
    return float(total - within), total


def largest(tables: Sequence[ListedRow]) -> float:
    """Largest attainable |sum|^2, by looking at every pair of half sums."""
    (first, _), (second, _) = halves(tables, tables[0].vectors.shape[1])
    squares = np.square(second).sum(axis=1)
    best = 0.0
    for part in np.array_split(first, math.ceil(len(first) * len(second) / 2**20)):
        pairs = 2 * part @ second.T + np.square(part).sum(axis=1)[:, None] + squares
        best = max(best, float(pairs.max()))
    return best
