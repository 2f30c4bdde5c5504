"""Exact count of a far tail that few arrangements reach, in any number of subjects.

Partial sums are kept a subject at a time, equal ones merged, as long as the remaining subjects can
still carry them to the observed statistic. Near the largest attainable value next to nothing is
kept, so the count is exact where every sampler misses the few arrangements there are.

A partial sum a is carried by the others to at most

    linear      a + sum of the largest scores
    quadratic   |a|^2 + 2 sum of the largest a . z + largest |b|^2 of the sum b of the others,
                |b|^2 <= sum of the largest |z_i|^2 + sum over pairs of the largest z_i . z_j

The last bound is attained by complete permuted rows, all sorted alike.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from robustrm.kernels.null.forms import Linear, Quadratic
from robustrm.kernels.null.problem import Problem
from robustrm.kernels.null.symmetry import fold, sort_within
from robustrm.kernels.null.tables import Array, ListedRow, merge_rows
from robustrm.kernels.null.two_halves import GRID, projected

# Partial sums kept at once: beyond this the tail is no corner.
MOST_KEPT = 1 << 14
# Products of pairs of vectors the bound may take.
MOST_PRODUCTS = 1 << 27


def log_share(problem: Problem, low: float, *, side: int = 1) -> float | None:
    """Logarithm of the share of the arrangements whose statistic is above `low`.

    Parameters
    ----------
    problem : Problem
        Listable tables.
    low : float
        Bound just below the observed value (times `side`).
    side : int, default 1
        -1 counts the small values of a linear form.

    Returns
    -------
    float or None
        None where too many arrangements come near; -inf where none does.
    """
    if isinstance(problem.form, Linear):
        return _walk(_Line(problem, side), low)
    if _products(problem) > MOST_PRODUCTS:
        return None
    return _walk(_Square(problem, problem.form), low)


def _products(problem: Problem) -> int:
    """Pairs of vectors that the bound of a quadratic form looks at."""
    distinct = {id(row): row.size for row in problem.rows}
    return sum(distinct.values()) ** 2


class _Line:
    """A linear form: the sums are single numbers."""

    def __init__(self, problem: Problem, side: int) -> None:
        self.rows = sorted(problem.rows, key=lambda row: -float(np.ptp(row.vectors)))
        self.side = side
        self.grid = GRID * math.fsum(row.norm for row in self.rows)
        most = [float((side * row.vectors).max()) for row in self.rows]
        self.rest = np.r_[np.cumsum(most[::-1])[::-1], 0.0]

    def start(self) -> tuple[Array, Array]:
        return self.rows[0].vectors, self.rows[0].weights

    def ordered(self, sums: Array) -> Array:
        return sums

    def bound(self, sums: Array, following: int) -> Array:
        return np.asarray(self.side * sums[:, 0] + self.rest[following])


class _Square:
    """A quadratic form: sums sorted within the classes, the first table folded."""

    def __init__(self, problem: Problem, form: Quadratic) -> None:
        order = sorted(range(len(problem.rows)), key=lambda i: -problem.rows[i].norm)
        order.remove(problem.fixed)
        self.form, self.classes, self.exact = form, problem.classes, problem.exact
        self.rows = [problem.rows[i] for i in (problem.fixed, *order)]
        self.first = fold(self.rows[0], self.classes)
        self.grid = GRID * math.fsum(row.norm for row in self.rows)
        seen = {id(row): projected(row, form.projection).vectors for row in self.rows}
        self.seen = [seen[id(row)] for row in self.rows]
        self.farthest = _farthest(self.seen)

    def start(self) -> tuple[Array, Array]:
        return self.first.vectors, self.first.weights

    def ordered(self, sums: Array) -> Array:
        return sort_within(sums, self.classes)

    def bound(self, sums: Array, following: int) -> Array:
        if following == len(self.rows):
            return self.form.values(sums, exact=self.exact)
        places = sums @ self.form.projection.T
        squares = np.square(places).sum(axis=1) + self.farthest[following]
        known: dict[int, Array] = {}
        for vectors in self.seen[following:]:
            if id(vectors) not in known:
                known[id(vectors)] = _largest(places, vectors)
            squares += 2 * known[id(vectors)]
        # Rounding must not cut off an arrangement that attains the bound.
        return np.asarray(squares * (1 + 1e-9))


def _largest(places: Array, vectors: Array) -> Array:
    """Largest inner product of each place with the vectors of one table."""
    found = np.empty(len(places))
    width = max(1, (1 << 20) // len(vectors))
    for start in range(0, len(places), width):
        part = slice(start, start + width)
        found[part] = (places[part] @ vectors.T).max(axis=1)
    return found


def _farthest(seen: Sequence[Array]) -> Array:
    """Bound of |b|^2 for the sum b of the tables from each one on."""
    n = len(seen)
    pairs = np.zeros((n, n))
    known: dict[tuple[int, int], float] = {}
    for i in range(n):
        for j in range(i):
            key = (id(seen[i]), id(seen[j]))
            if key not in known:
                known[key] = known[key[::-1]] = float(_largest(seen[i], seen[j]).max())
            pairs[i, j] = pairs[j, i] = known[key]
        pairs[i, i] = np.square(seen[i]).sum(axis=1).max()
    return np.array([pairs[i:, i:].sum() for i in range(n + 1)])


def _walk(form: _Line | _Square, low: float) -> float | None:
    """Add a subject at a time and drop the partial sums that cannot get there."""
    sums, weights = form.start()
    total = int(weights.sum())
    for subject in range(1, len(form.rows) + 1):
        kept = form.bound(sums, subject) >= low
        sums, weights = sums[kept], weights[kept]
        if not len(sums):
            return -math.inf
        if subject == len(form.rows):
            break
        row = form.rows[subject]
        if len(sums) * row.size > MOST_KEPT * 8 or len(sums) > MOST_KEPT:
            return None
        sums, weights = _added(form, sums, weights, row)
        total *= row.total
    # Weights are sums of whole numbers, the total may be beyond any float.
    return math.log(weights.sum()) - math.log(total)


def _added(
    form: _Line | _Square, sums: Array, weights: Array, row: ListedRow
) -> tuple[Array, Array]:
    """All sums of a partial sum and a vector of the next table, equal ones merged."""
    wider = (sums[:, None] + row.vectors[None]).reshape(-1, sums.shape[1])
    products = np.multiply.outer(weights, row.weights).ravel()
    return merge_rows(form.ordered(wider), products, grid=form.grid)
