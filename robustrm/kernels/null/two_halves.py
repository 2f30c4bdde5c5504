"""Exact upper tail of |sum|^2 for real scores: two lists of half sums, counted on two trees.

With A and B the possible sums of either half of the subjects, |a + b| exceeds r unless a lies
within r of -b. Such pairs are counted, with weights, by descending two k-d trees together (Gray &
Moore 2001), without visiting them one by one.

Where occasions can be relabelled, a stands for all its relabellings, because B as a whole is the
same seen from each. One subject of its half is folded, so the list of A is k! times shorter, and
every a is sorted, so that it fills one sector of the plane (of k!) instead of all of it thinly.
Points that lie closer together leave the trees fewer pairs of cells to take apart.

The tail is a complement, so the weights must be whole numbers with a total below 2^53: then the
count is exact and small tails are not noise.

References
----------
Gray AG, Moore AW (2001). N-body problems in statistical learning. Advances in Neural Information
Processing Systems 13:521-527.
"""

from __future__ import annotations

import math
import os
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import numpy.typing as npt

from robustrm.kernels.null.symmetry import Classes, sort_within
from robustrm.kernels.null.tables import Array, ListedRow, merge_rows, read_only

# Half sums (N, D) and their whole weights (N,).
Half = tuple[Array, Array]
# Half sums nearer than this share of the largest magnitude are one: a hundredth of the tolerance.
GRID = 1e-12
# Strips of half sums shared out to the processors: at most so many, of about this many or more.
STRIPS = 8
STRIP = 2_000


def split(sizes: Sequence[int]) -> tuple[list[int], list[int]]:
    """Deal subjects, largest table first, to the half that has fewer sums so far."""
    halves: tuple[list[int], list[int]] = ([], [])
    logs = [0.0, 0.0]
    for subject in sorted(range(len(sizes)), key=lambda i: -sizes[i]):
        smaller = int(logs[1] < logs[0])
        halves[smaller].append(subject)
        logs[smaller] += math.log(sizes[subject])
    return halves


def half_sums(tables: Sequence[ListedRow], dimension: int) -> Half:
    """List all sums of one vector from each table, (N, d), and their weights; equal ones merged."""
    grid = GRID * math.fsum(table.norm for table in tables)
    sums, weights = np.zeros((1, dimension)), np.ones(1)
    for table in tables:
        sums = (sums[:, None, :] + table.vectors[None, :, :]).reshape(-1, dimension)
        weights = np.multiply.outer(weights, table.weights).ravel()
        sums, weights = merge_rows(sums, weights, grid=grid)
    return sums, weights


def halves(tables: Sequence[ListedRow], dimension: int) -> tuple[Half, Half]:
    """Half sums of both halves."""
    one, other = split([table.size for table in tables])
    return (
        half_sums([tables[i] for i in one], dimension),
        half_sums([tables[i] for i in other], dimension),
    )


def folded_halves(
    tables: Sequence[ListedRow], folded: int, classes: Classes, projection: Array
) -> tuple[Half, Half]:
    """Projected half sums of both halves, those with the folded subject first.

    Parameters
    ----------
    tables : sequence of ListedRow
        Scores (arrangements, d); subject `folded` holds one vector an orbit (`symmetry.fold`).
    folded : int
    classes : tuple of tuple of int
        Occasions that can be relabelled, from `symmetry.exchangeable`.
    projection : ndarray, shape (D, d)

    Returns
    -------
    tuple of tuple of ndarray
        Half sums (N, D) and their weights (N,), twice.
    """
    sides = split([table.size for table in tables])
    own, other = sides if folded in sides[0] else sides[::-1]
    seen = [projected(table, projection) for table in tables]
    sums, weights = half_sums([tables[i] for i in own], projection.shape[1])
    sums = sort_within(sums, classes) @ projection.T
    grid = GRID * math.fsum(seen[i].norm for i in own)
    first = merge_rows(sums, weights, grid=grid)
    return first, half_sums([seen[i] for i in other], len(projection))


def projected(table: ListedRow, projection: Array) -> ListedRow:
    """Scores as the form sees them, (arrangements, D)."""
    return replace(table, vectors=read_only(table.vectors @ projection.T))


def upper_tail(first: Half, second: Half, floor: float) -> tuple[float, int]:
    """Weight of the pairs of half sums with |a + b|^2 above `floor`, and the weight of all.

    Parameters
    ----------
    first, second : Half
        From `folded_halves`.
    floor : float
        Bound just below the observed value; below zero everything counts.

    Returns
    -------
    tuple of float and int
    """
    total = int(first[1].sum()) * int(second[1].sum())
    if floor < 0:
        return float(total), total
    return float(total - _within(first, second, math.sqrt(floor))), total


def _within(first: Half, second: Half, radius: float) -> float:
    """Weight of the pairs of half sums with |a + b| at most `radius`.

    The first list is cut into strips that are counted side by side, for which SciPy lets go of the
    interpreter. Counts are whole numbers: how many processors there are changes no answer.
    """
    from concurrent.futures import ThreadPoolExecutor  # here, because both are slow to import

    from scipy.spatial import cKDTree

    (sums, weights), (others, other_weights) = first, second
    mirrored = cKDTree(-others)
    # A plain count is a quarter faster than a weighted one.
    is_plain = bool((weights == 1).all() and (other_weights == 1).all())

    def count(strip: npt.NDArray[np.int64]) -> float:
        pair = None if is_plain else (weights[strip], other_weights)
        return float(cKDTree(sums[strip]).count_neighbors(mirrored, radius, weights=pair))

    strips = np.array_split(np.argsort(sums[:, 0]), min(STRIPS, math.ceil(len(sums) / STRIP)))
    with ThreadPoolExecutor(os.cpu_count()) as pool:
        return sum(pool.map(count, strips))


def largest(first: Half, second: Half) -> float:
    """Largest attainable |sum|^2, by looking at every pair of half sums."""
    sums, others = first[0], second[0]
    squares = np.square(others).sum(axis=1)
    best = 0.0
    for part in np.array_split(sums, math.ceil(len(sums) * len(others) / 2**20)):
        pairs = 2 * part @ others.T + np.square(part).sum(axis=1)[:, None] + squares
        best = max(best, float(pairs.max()))
    return best
