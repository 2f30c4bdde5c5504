"""Forms: the statistic as a function of the sum of the score vectors."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt

from robustrm.kernels.contrasts import helmert
from robustrm.kernels.null.tables import Array, ListedRow, Table, read_only, reduced

Side = Literal["greater", "less", "two-sided"]

# Equality of real statistics: this share of the largest attainable magnitude, never of the
# observed one, since a balanced table has a statistic of 1e-32.
TOLERANCE = 1e-10
# Whole-number statistics are compared as whole numbers while they stay below this, which leaves
# room for the rounding of projections and square roots on the way in float64 (53 bits).
LARGEST_WHOLE = 2.0**42


def is_whole(values: Array) -> bool:
    """Whether all values are whole numbers."""
    return bool(np.all(np.rint(values) == values))


def _reach(tables: Sequence[Table]) -> float:
    """Largest length a sum of the score vectors can have, an upper bound."""
    return math.fsum(table.norm for table in tables)


@dataclass(frozen=True, eq=False)
class Quadratic:
    """T = |L s|^2, with M = `gram` / `multiple` = L'L and rows of `projection` spanning L."""

    projection: Array
    gram: Array
    multiple: int

    @property
    def dimension(self) -> int:
        """Number of occasions."""
        return len(self.gram)

    def swaps(self) -> npt.NDArray[np.bool_]:
        """Which pairs of occasions can be exchanged without changing T, (d, d)."""
        d = self.dimension
        # A form computed from data is invariant up to the rounding of its coefficients.
        rounding = 1e-12 * np.abs(self.gram).max()
        allowed = np.eye(d, dtype=bool)
        for a in range(d):
            for b in range(a):
                order = np.arange(d)
                order[[a, b]] = order[[b, a]]
                change = np.abs(self.gram[np.ix_(order, order)] - self.gram).max()
                allowed[a, b] = allowed[b, a] = change <= rounding
        return allowed

    def largest(self, tables: Sequence[Table]) -> float:
        """Upper bound of |L s|."""
        stretch = np.linalg.norm(self.projection, 2) if self.projection.size else 0.0
        return _reach(tables) * float(stretch)

    def is_exact(self, tables: Sequence[Table]) -> bool:
        """Whether T times `multiple` is a whole number that float64 holds with room to spare."""
        return (
            is_whole(self.gram)
            and all(is_whole(table.cells) and is_whole(table.low) for table in tables)
            and self.multiple * self.largest(tables) ** 2 < LARGEST_WHOLE
        )

    def values(self, sums: Array, *, exact: bool) -> Array:
        """T of sums (..., d): by whole numbers divided at the end, or by the projection."""
        if exact:
            return np.asarray(((sums @ self.gram) * sums).sum(axis=-1) / self.multiple)
        return np.asarray(np.square(sums @ self.projection.T).sum(axis=-1))

    def floor(self, value: float, tables: Sequence[Table], *, exact: bool) -> float:
        """Give the bound just below `value`: whatever lies above it is "at least as large"."""
        if exact:
            return value - 0.5 / self.multiple
        length = math.sqrt(max(value, 0.0)) - TOLERANCE * self.largest(tables)
        return length**2 if length > 0 else -math.inf


@dataclass(frozen=True, eq=False)
class Linear:
    """T = c . s, with the tail that counts as extreme."""

    coefficients: Array
    side: Side

    @property
    def dimension(self) -> int:
        """Number of occasions."""
        return len(self.coefficients)

    def swaps(self) -> npt.NDArray[np.bool_]:
        """Which pairs of occasions can be exchanged without changing T, (d, d)."""
        return np.equal.outer(self.coefficients, self.coefficients)

    def largest(self, tables: Sequence[Table]) -> float:
        """Upper bound of |c . s|."""
        return _reach(tables) * float(np.linalg.norm(self.coefficients))

    def is_exact(self, tables: Sequence[Table]) -> bool:
        """Whether T is a whole number that float64 holds with room to spare."""
        return (
            is_whole(self.coefficients)
            and all(is_whole(table.cells) and is_whole(table.low) for table in tables)
            and self.largest(tables) < LARGEST_WHOLE
        )

    def values(self, sums: Array, *, exact: bool) -> Array:
        """T of sums (..., d)."""
        values = sums @ self.coefficients
        return np.asarray(np.rint(values) if exact else values)

    def slack(self, tables: Sequence[Table], *, exact: bool) -> float:
        """How far below (above) the observed value a sum still counts as equal to it."""
        return 0.5 if exact else TOLERANCE * self.largest(tables)

    def project(self, table: ListedRow) -> ListedRow:
        """Table of the single score c . s, (arrangements, 1), equal ones merged."""
        distinct, inverse = np.unique(table.vectors @ self.coefficients, return_inverse=True)
        weights = np.bincount(inverse, table.weights).astype(np.float64)
        return reduced(distinct[:, None], weights, table.arrangements)


Form = Quadratic | Linear


def centring(dimension: int, *, blocks: Iterable[Sequence[int]] | None = None) -> Quadratic:
    """T = sum over the blocks of the squared length of the block's centred sum.

    Parameters
    ----------
    dimension : int
        Number of occasions d.
    blocks : iterable of sequences of int, optional
        Partition of the occasions; the default is one block, T = sum_j (s_j - mean(s))^2.

    Returns
    -------
    Quadratic
    """
    parts = [list(range(dimension))] if blocks is None else [list(block) for block in blocks]
    multiple = math.lcm(*(len(part) for part in parts))
    gram = np.zeros((dimension, dimension))
    projection = np.zeros((sum(len(part) - 1 for part in parts), dimension))
    start = 0
    for part in parts:
        size = len(part)
        gram[np.ix_(part, part)] = multiple * np.eye(size) - multiple // size
        projection[start : start + size - 1, part] = helmert(size)
        start += size - 1
    return Quadratic(read_only(projection), read_only(gram), multiple)


def quadratic(matrix: npt.ArrayLike) -> Quadratic:
    """T = |L s|^2 for any L, (q, d); directions that L ignores are dropped."""
    rows = np.atleast_2d(np.asarray(matrix, dtype=np.float64))
    _, lengths, basis = np.linalg.svd(rows, full_matrices=False)
    kept = lengths > 1e-12 * lengths.max(initial=np.finfo(np.float64).tiny)
    return Quadratic(read_only(lengths[kept, None] * basis[kept]), read_only(rows.T @ rows), 1)


def linear(coefficients: npt.ArrayLike, *, side: Side = "two-sided") -> Linear:
    """T = c . s; a two-sided p is min(1, twice the smaller tail)."""
    return Linear(read_only(np.atleast_1d(coefficients)), side)
