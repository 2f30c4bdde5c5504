"""Exact law of a sum of whole-number vectors: keep distinct sums, add a subject at a time.

Occasions of one class (see `symmetry`) can be relabelled, so a sum stands for all its relabellings
and is kept sorted within the class: 24 times fewer sums for 4 occasions. Without such a class this
is a plain convolution. A sum is packed into one 64-bit key by mixed radices.

Weights are counts of arrangements in float64: exact while the total stays below 2^53, and beyond
that sums of positive terms, with a relative error below 1e-12. They are scaled by powers of two, so
that probabilities down to 1e-580 keep this precision; smaller ones are given as about 1e-580.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from robustrm.kernels.null.symmetry import Classes, fold
from robustrm.kernels.null.tables import Array, ListedRow, Table

Keys = npt.NDArray[np.int64]
Columns = npt.NDArray[np.int32]

# New sums formed at once: 2^20 keep every array of a step at 8 MB.
CHUNK = 1 << 20
# Keys of finished chunks waiting to be merged: this many (128 MB), or twice the distinct ones.
PENDING = 1 << 23
# A key space up to this many times the keys at hand is summed by counting, a larger one by sorting.
DENSE = 4
# Weights are scaled down by 2^64 whenever the largest passes this.
LARGEST_WEIGHT = 2.0**960
# None falls below this by scaling, so that no attainable sum is lost.
SMALLEST_WEIGHT = 2.0**-1000


@dataclass(frozen=True, eq=False)
class Lattice:
    """Whole-number steps of the scores: s_ij = low_ij + unit * step_ij, all steps from 0 upward.

    `moving` are the classes restricted to occasions that vary; `dependent` names the last member of
    each class whose steps add up to a constant; `ceilings[i, j]` is the largest number of steps
    that the sorted sum of subjects 0..i can have on occasion j.
    """

    unit: int
    moving: Classes
    dependent: dict[int, tuple[int, ...]]
    ceilings: Keys

    @property
    def free(self) -> tuple[int, ...]:
        """Occasions that determine a sum."""
        return tuple(j for members in self.moving for j in members if j not in self.dependent)

    def radices(self, subject: int) -> list[int]:
        """Count the values of each free occasion once this subject (0, 1, ...) has been added."""
        return [int(self.ceilings[subject, j]) + 1 for j in self.free]


def lattice(tables: Sequence[Table], classes: Classes) -> Lattice:
    """Find the unit of whole-number tables and what determines a sum."""
    factors = [np.gcd.reduce(table.cells.astype(np.int64), axis=None) for table in tables]
    unit = max(int(np.gcd.reduce(factors)), 1)
    spans = np.array([table.span for table in tables]).astype(np.int64) // unit
    parts = (tuple(j for j in part if spans[:, j].any()) for part in classes)
    moving = tuple(part for part in parts if part)
    dependent = {part[-1]: part for part in moving if _has_fixed_total(tables, part)}
    ceilings = np.cumsum(spans, axis=0)
    for part in dependent.values():
        totals = [np.atleast_2d(table.cells)[0, list(part)].sum() // unit for table in tables]
        # The j-th smallest of c numbers is at most their total divided by c - j.
        shares = np.cumsum(totals).astype(np.int64)[:, None] // np.arange(len(part), 0, -1)
        ceilings[:, part] = np.minimum(ceilings[:, part], shares)
    return Lattice(unit, moving, dependent, ceilings)


def _has_fixed_total(tables: Sequence[Table], members: tuple[int, ...]) -> bool:
    """Whether each subject's scores of these occasions have one total in all arrangements."""
    inside = set(members)
    for table in tables:
        if isinstance(table, ListedRow):
            is_fixed = np.ptp(table.vectors[:, list(members)].sum(axis=1)) == 0
        else:
            is_fixed = all(
                set(group) <= inside or not inside & set(group) for group in table.groups
            )
        if not is_fixed:
            return False
    return True


@functools.lru_cache(maxsize=64)
def comparators(size: int) -> tuple[tuple[int, int], ...]:
    """Merge-exchange sorting network (Knuth, TAOCP 3, algorithm 5.2.2M)."""
    pairs: list[tuple[int, int]] = []
    top = 1 << max((size - 1).bit_length() - 1, 0)
    p = top
    while p and size > 1:
        q, r, d = top, 0, p
        while True:
            pairs += [(i, i + d) for i in range(size - d) if i & p == r]
            if q == p:
                break
            d, q, r = q - p, q // 2, p
        p //= 2
    return tuple(pairs)


def merge_keys(keys: Keys, weights: Array, size: int) -> tuple[Keys, Array]:
    """Add the weights of equal keys; all keys are below `size`."""
    if size <= DENSE * len(keys):
        totals = np.bincount(keys, weights, minlength=size).astype(np.float64)
        kept = np.flatnonzero(totals)
        return kept, totals[kept]
    order = np.argsort(keys)
    ordered = keys[order]
    first = np.flatnonzero(np.r_[True, ordered[1:] != ordered[:-1]])
    return ordered[first], np.add.reduceat(weights[order], first)


@dataclass(frozen=True, eq=False)
class SumLaw:
    """Distinct sums (sorted within classes) and their weights, times 2^exponent, out of `total`."""

    sums: Array
    weights: Array
    exponent: int
    total: int


def law_of_sums(tables: Sequence[ListedRow], classes: Classes) -> SumLaw:
    """Law of the sum of one whole-number vector from each table.

    Parameters
    ----------
    tables : sequence of ListedRow
        At least one; all scores whole numbers.
    classes : tuple of tuple of int
        Occasions that can be relabelled, from `symmetry.exchangeable`; singletons sort nothing.

    Returns
    -------
    SumLaw
        Sums (S, d) in the unit of the scores.
    """
    grid = lattice(tables, classes)
    first = fold(tables[0], classes)
    # A folded table need not reach the lowest score on every occasion: count from the whole one.
    sums, weights, exponent = _steps(first.vectors - tables[0].low, grid), first.weights, 0
    for subject, table in enumerate(tables[1:], start=1):
        steps = _steps(table.cells, grid)
        keys, weights = _add(sums, weights, steps, table.weights, grid, subject)
        sums = _unpack(keys, sums[:, 0] + steps[:, 0], grid, subject)
        if weights.max() > LARGEST_WEIGHT:
            weights, exponent = np.maximum(weights * 2.0**-64, SMALLEST_WEIGHT), exponent + 64
    low = np.sum([table.low for table in tables], axis=0)
    total = math.prod(table.total for table in (first, *tables[1:]))
    return SumLaw(sums.T * float(grid.unit) + low, weights, exponent, total)


def _steps(cells: Array, grid: Lattice) -> Columns:
    """Turn scores into steps, one row an occasion, (d, arrangements)."""
    return np.ascontiguousarray((cells.T / grid.unit).astype(np.int32))


def _add(
    sums: Columns,
    weights: Array,
    steps: Columns,
    multiplicities: Array,
    grid: Lattice,
    subject: int,
) -> tuple[Keys, Array]:
    """Add one subject: keys of the distinct new sums, and their weights."""
    radices = grid.radices(subject)
    size = math.prod(radices)
    pending: list[tuple[Keys, Array]] = []
    limit = PENDING
    width = max(1, CHUNK // steps.shape[1])
    for start in range(0, sums.shape[1], width):
        part = slice(start, start + width)
        products = np.multiply.outer(weights[part], multiplicities).ravel()
        pending.append(merge_keys(_pack(sums[:, part], steps, grid, radices), products, size))
        if sum(len(keys) for keys, _ in pending) > limit:
            pending = [_join(pending, size)]
            limit = max(PENDING, 2 * len(pending[0][0]))
    return _join(pending, size)


def _join(parts: Sequence[tuple[Keys, Array]], size: int) -> tuple[Keys, Array]:
    """Merge the keys of several chunks."""
    if len(parts) == 1:
        return parts[0]
    keys, weights = (np.concatenate(column) for column in zip(*parts, strict=True))
    return merge_keys(keys, weights, size)


def _pack(sums: Columns, steps: Columns, grid: Lattice, radices: Sequence[int]) -> Keys:
    """Keys of all sums of one old sum and one new vector, sorted within classes."""
    columns = {j: np.add.outer(sums[j], steps[j]).ravel() for part in grid.moving for j in part}
    for part in grid.moving:
        for a, b in comparators(len(part)):
            lower = np.minimum(columns[part[a]], columns[part[b]])
            np.maximum(columns[part[a]], columns[part[b]], out=columns[part[b]])
            columns[part[a]] = lower
    keys = np.zeros(sums.shape[1] * steps.shape[1], dtype=np.int64)
    for j, radix in zip(grid.free, radices, strict=True):
        keys *= radix
        keys += columns[j]
    return keys


def _unpack(keys: Keys, member: Columns, grid: Lattice, subject: int) -> Columns:
    """Recover the sums; `member`, any one of them, tells the totals that are constant."""
    sums = np.zeros((len(member), len(keys)), dtype=np.int32)
    rest = keys
    for j, radix in reversed(list(zip(grid.free, grid.radices(subject), strict=True))):
        rest, sums[j] = np.divmod(rest, radix)
    for last, part in grid.dependent.items():
        sums[last] = member[list(part)].sum() - sums[list(part)].sum(axis=0)
    return sums
