"""Score tables: for one subject, every equally likely score vector.

A `PermutedRow` stays unlisted until somebody needs its rows, since 8 occasions already have 40,320
arrangements. A `ListedRow` holds distinct vectors with whole-number multiplicities.
"""

from __future__ import annotations

import functools
import itertools
import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]
Groups = tuple[tuple[int, ...], ...]


def read_only(values: npt.ArrayLike) -> Array:
    """Copy to float64 (a negative zero becomes zero) and forbid writing."""
    copy = np.array(values, dtype=np.float64) + 0.0
    copy.flags.writeable = False
    return copy


def merge_rows(vectors: Array, weights: Array, *, grid: float = 0.0) -> tuple[Array, Array]:
    """Merge equal rows and add their weights.

    Rows are brought together by sorting a 64-bit hash and merged only if they agree in every
    coordinate, so that a collision costs a merge but never a wrong one.

    Parameters
    ----------
    vectors : ndarray, shape (m, d)
    weights : ndarray, shape (m,)
    grid : float, default 0.0
        Rows count as equal when they round to the same multiple of `grid`; with 0 when they are
        equal bit for bit. One row of a run stands for it, unrounded.

    Returns
    -------
    tuple of ndarray
        Distinct rows (r, d) and their weights (r,).
    """
    if not vectors.size:
        return vectors[:1], weights.sum(keepdims=True)
    cells = np.rint(vectors / grid) + 0.0 if grid else vectors
    bits = np.ascontiguousarray(cells).view(np.uint64)
    key = np.zeros(len(bits), dtype=np.uint64)
    for column in bits.T:
        # Odd multiplier of Knuth's multiplicative hashing (TAOCP 3, 6.4), 2^64 / golden ratio.
        key = (key ^ column ^ (column >> np.uint64(29))) * np.uint64(0x9E3779B97F4A7C15)
        key ^= key >> np.uint64(32)
    order = np.argsort(key)
    bits = bits[order]
    first = np.flatnonzero(np.r_[True, (bits[1:] != bits[:-1]).any(axis=1)])
    return vectors[order[first]], np.add.reduceat(weights[order], first)


@dataclass(frozen=True, eq=False)
class ListedRow:
    """Distinct score vectors of one subject, with multiplicities free of a common factor."""

    vectors: Array
    weights: Array
    arrangements: int

    @property
    def size(self) -> int:
        """Number of distinct vectors."""
        return len(self.vectors)

    @property
    def total(self) -> int:
        """Sum of the weights."""
        return int(self.weights.sum())

    @property
    def low(self) -> Array:
        """Smallest score on each occasion."""
        return np.asarray(self.vectors.min(axis=0))

    @property
    def span(self) -> Array:
        """Largest minus smallest score on each occasion."""
        return np.asarray(np.ptp(self.vectors, axis=0))

    @property
    def norm(self) -> float:
        """Length of the longest vector."""
        return float(np.sqrt(np.square(self.vectors).sum(axis=1).max()))

    @property
    def cells(self) -> Array:
        """Scores less the smallest of their occasion, every one that occurs."""
        return np.asarray(self.vectors - self.low)

    @property
    def any_vector(self) -> Array:
        """One of the vectors, (d,)."""
        return np.asarray(self.vectors[0])

    def swaps(self) -> npt.NDArray[np.bool_]:
        """Which pairs of occasions can be exchanged without changing the table, (d, d)."""
        d = self.vectors.shape[1]
        allowed = np.eye(d, dtype=bool)
        table = np.column_stack([self.vectors, self.weights])
        reference = table[np.lexsort(table.T)]
        for a, b in itertools.combinations(range(d), 2):
            swapped = table.copy()
            swapped[:, [a, b]] = swapped[:, [b, a]]
            same = np.array_equal(swapped[np.lexsort(swapped.T)], reference)
            allowed[a, b] = allowed[b, a] = same
        return allowed

    def listed(self) -> ListedRow:
        """Return itself."""
        return self


@dataclass(frozen=True, eq=False)
class PermutedRow:
    """Scores of one subject that may be permuted within groups of occasions, and only there."""

    scores: Array
    groups: Groups

    @property
    def arrangements(self) -> int:
        """Product of the factorials of the group sizes."""
        return math.prod(math.factorial(len(group)) for group in self.groups)

    @property
    def size(self) -> int:
        """Number of distinct vectors: equal scores of a group do not count twice."""
        repeats = 1
        for group in self.groups:
            _, counts = np.unique(self.scores[list(group)], return_counts=True)
            repeats *= math.prod(math.factorial(int(count)) for count in counts)
        return self.arrangements // repeats

    @property
    def total(self) -> int:
        """Sum of the weights, one a distinct vector."""
        return self.size

    @property
    def low(self) -> Array:
        """Smallest score on each occasion."""
        low = self.scores.copy()
        for group in self.groups:
            low[list(group)] = low[list(group)].min()
        return low

    @property
    def span(self) -> Array:
        """Largest minus smallest score on each occasion."""
        span = np.zeros_like(self.scores)
        for group in self.groups:
            span[list(group)] = np.ptp(self.scores[list(group)])
        return span

    @property
    def norm(self) -> float:
        """Length of the vector, the same in every arrangement."""
        return float(np.sqrt(np.square(self.scores).sum()))

    @property
    def cells(self) -> Array:
        """Scores less the smallest of their group."""
        return np.asarray(self.scores - self.low)

    @property
    def any_vector(self) -> Array:
        """One of the vectors, (d,)."""
        return self.scores

    def swaps(self) -> npt.NDArray[np.bool_]:
        """Which pairs of occasions can be exchanged without changing the table, (d, d)."""
        label = np.full(self.scores.shape, -1)
        for number, group in enumerate(self.groups):
            label[list(group)] = number
        alike = label[:, None] == label[None, :]
        # Cells that never move are interchangeable only if they hold the same score.
        return np.asarray(
            alike & ((label[:, None] >= 0) | np.equal.outer(self.scores, self.scores))
        )

    def listed(self) -> ListedRow:
        """List the distinct vectors."""
        vectors = self.scores[None, :]
        for group in self.groups:
            placed = _distinct_orders(self.scores[list(group)])
            vectors = np.repeat(vectors, len(placed), axis=0)
            vectors[:, list(group)] = np.tile(placed, (len(vectors) // len(placed), 1))
        return ListedRow(read_only(vectors), read_only(np.ones(len(vectors))), self.arrangements)


Table = ListedRow | PermutedRow


def reduced(vectors: Array, weights: Array, arrangements: int) -> ListedRow:
    """Make a listed row, dividing the weights by their common factor."""
    common = np.gcd.reduce(weights.astype(np.int64))
    return ListedRow(read_only(vectors), read_only(weights / common), arrangements)


@functools.lru_cache(maxsize=16)
def _orders(size: int) -> npt.NDArray[np.int64]:
    """All permutations of 0..size-1, in lexicographic order."""
    orders = np.array(list(itertools.permutations(range(size))), dtype=np.int64)
    orders.flags.writeable = False
    return orders


def _distinct_orders(values: Array) -> Array:
    """All distinct arrangements of a few values, (arrangements, len(values))."""
    distinct, codes = np.unique(values, return_inverse=True)
    orders = codes[_orders(len(values))]
    if len(distinct) < len(values):
        number = orders @ (len(values) ** np.arange(len(values)))
        orders = orders[np.unique(number, return_index=True)[1]]
    return np.asarray(distinct[orders])


def permutation_table(
    scores: npt.ArrayLike,
    *,
    observed: npt.ArrayLike | None = None,
    blocks: Iterable[Sequence[int]] | None = None,
) -> PermutedRow:
    """Let a subject's own scores be permuted over the occasions.

    Parameters
    ----------
    scores : array_like, shape (d,)
        One score an occasion. Whole numbers stay exact: give twice the mid-rank, or
        ``k * y - y.sum()``. Real scores should be centred.
    observed : array_like of bool, shape (d,), optional
        Cells that were measured. The others contribute zero and are never permuted into.
    blocks : iterable of sequences of int, optional
        Partition of the occasions; scores move only within a block. Default: one block.

    Returns
    -------
    PermutedRow
    """
    row = np.asarray(scores, dtype=np.float64)
    seen = np.ones(row.shape, dtype=bool) if observed is None else np.asarray(observed, dtype=bool)
    parts = [range(len(row))] if blocks is None else blocks
    groups = (tuple(int(j) for j in part if seen[j]) for part in parts)
    return PermutedRow(
        read_only(np.where(seen, row, 0.0)), tuple(group for group in groups if len(group) > 1)
    )


def permutation_tables(
    scores: npt.ArrayLike,
    *,
    observed: npt.ArrayLike | None = None,
    blocks: Iterable[Sequence[int]] | None = None,
) -> tuple[PermutedRow, ...]:
    """Make one `permutation_table` a row of scores, (n, d), with masks (n, d)."""
    rows = np.asarray(scores, dtype=np.float64)
    masks = np.ones(rows.shape, dtype=bool) if observed is None else np.asarray(observed, bool)
    parts = None if blocks is None else [tuple(block) for block in blocks]
    return tuple(
        permutation_table(row, observed=mask, blocks=parts)
        for row, mask in zip(rows, masks, strict=True)
    )


def score_table(vectors: npt.ArrayLike, multiplicities: npt.ArrayLike | None = None) -> ListedRow:
    """List one subject's equally likely score vectors.

    Parameters
    ----------
    vectors : array_like, shape (arrangements, d)
        Score vectors; equal ones are merged.
    multiplicities : array_like of int, shape (arrangements,), optional
        How often each occurs, default once.

    Returns
    -------
    ListedRow
    """
    rows = read_only(vectors)
    counts = np.ones(len(rows)) if multiplicities is None else read_only(multiplicities)
    return reduced(*merge_rows(rows, counts), int(counts.sum()))


def sign_table(scores: npt.ArrayLike) -> ListedRow:
    """Let a subject's score vector, (d,), be itself or its mirror image."""
    row = np.asarray(scores, dtype=np.float64)
    return score_table(np.stack([row, -row]))


def sign_tables(scores: npt.ArrayLike) -> tuple[ListedRow, ...]:
    """Make one `sign_table` a row, (n, d); differences (n,) count as (n, 1)."""
    rows = np.asarray(scores, dtype=np.float64)
    return tuple(sign_table(row) for row in rows.reshape(len(rows), -1))


def list_all(tables: Sequence[Table]) -> tuple[ListedRow, ...]:
    """List every table, equal permuted rows only once."""
    known: dict[tuple[bytes, Groups], ListedRow] = {}
    listed = []
    for table in tables:
        if isinstance(table, PermutedRow):
            key = (table.scores.tobytes(), table.groups)
            if key not in known:
                known[key] = table.listed()
            listed.append(known[key])
        else:
            listed.append(table)
    return tuple(listed)
