"""Monte Carlo draws of the sum of score vectors, and what a count of them says.

Listed tables of neighbouring subjects are added up beforehand, so that one uniform number draws
several subjects at once. Rows with too many arrangements to list are shuffled by sorting uniform
keys. One draw uses one row of uniform numbers whatever its neighbours do, so the block size
changes no result.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from robustrm.kernels.binomial import clopper_pearson
from robustrm.kernels.null.tables import Array, ListedRow, PermutedRow, Table, list_all

Progress = Callable[[int, int], object]
# Counts, in a block of sums (b, d), those in the tail of interest and those in the other tail.
Counter = Callable[[Array], tuple[int, int]]

# Rows with more arrangements (8 occasions and up) are shuffled, not listed.
LISTED = 5_040
# Pre-added tables have at most this many rows.
GROUPED = 16_384
# Numbers a block may hold in its widest array: 2^20 float64 are 8 MB.
BLOCK = 1 << 20


@dataclass(frozen=True, eq=False)
class Sampler:
    """Pre-added tables with cumulative weights (None: equal), and rows to shuffle, (u, d).

    `shuffled` holds the scores in order of their groups, `target` where that order lands, and
    `label` a whole number a group, which keeps the sorted keys of different groups apart.
    """

    grouped: tuple[tuple[Array, Array | None], ...]
    shuffled: Array
    label: Array
    target: npt.NDArray[np.int64]
    dimension: int

    @property
    def width(self) -> int:
        """Uniform numbers one draw takes."""
        return len(self.grouped) + self.shuffled.size

    def sums(self, uniform: Array) -> Array:
        """Turn uniform numbers, (draws, width), into sums of score vectors, (draws, d)."""
        total = np.zeros((len(uniform), self.dimension))
        for (vectors, cumulative), column in zip(self.grouped, uniform.T, strict=False):
            if cumulative is None:
                # Floor of u * m: no probability is off by more than 1e-11 of itself.
                index = (column * len(vectors)).astype(np.int64)
            else:
                index = np.searchsorted(cumulative, column * cumulative[-1], side="right")
            total += np.take(vectors, index, axis=0)
        if self.shuffled.size:
            keys = uniform[:, len(self.grouped) :].reshape(-1, *self.shuffled.shape)
            total += self._shuffle(keys)
        return total

    def _shuffle(self, keys: Array) -> Array:
        """Sum of the rows, each permuted within its groups as its keys (draws, u, d) sort."""
        order = np.argsort(keys + self.label, axis=-1)
        placed = np.take_along_axis(self.shuffled[None], order, axis=-1)
        total = np.zeros((len(keys), self.dimension))
        for row, target in enumerate(self.target):
            total[:, target] += placed[:, row]
        return total


def sampler(tables: Sequence[Table]) -> Sampler:
    """Prepare the draws: list and pre-add small tables, keep large rows for shuffling."""
    dimension = len(tables[0].any_vector)
    large = [row for row in tables if isinstance(row, PermutedRow) and row.size > LISTED]
    small = list_all([row for row in tables if isinstance(row, ListedRow) or row.size <= LISTED])
    labels = np.array([_labels(row) for row in large]).reshape(len(large), dimension)
    order = np.argsort(labels, axis=-1, kind="stable")
    scores = np.array([row.scores for row in large]).reshape(len(large), dimension)
    return Sampler(
        tuple(_pre_add(small)),
        np.take_along_axis(scores, order, axis=-1),
        np.take_along_axis(labels, order, axis=-1),
        order,
        dimension,
    )


def _labels(row: PermutedRow) -> Array:
    """Group number of each cell; a cell that never moves is a group of its own."""
    labels = np.arange(len(row.scores), dtype=np.float64)
    for group in row.groups:
        labels[list(group)] = group[0]
    return labels


def _pre_add(tables: Sequence[ListedRow]) -> Iterator[tuple[Array, Array | None]]:
    """Add up neighbouring tables as long as the result stays small."""
    start = 0
    while start < len(tables):
        stop, rows = start + 1, tables[start].size
        while stop < len(tables) and rows * tables[stop].size <= GROUPED:
            rows *= tables[stop].size
            stop += 1
        vectors, weights = tables[start].vectors, tables[start].weights
        for table in tables[start + 1 : stop]:
            vectors = (vectors[:, None] + table.vectors[None]).reshape(-1, vectors.shape[1])
            weights = np.multiply.outer(weights, table.weights).ravel()
        yield vectors, None if np.ptp(weights) == 0 else np.cumsum(weights)
        start = stop


def blocks(
    source: Sampler, rng: np.random.Generator, draws: int, *, block: int | None = None
) -> Iterator[Array]:
    """Draw sums, (block, d) at a time; the block size bounds the memory and nothing else."""
    rows = block or max(1, BLOCK // max(source.width, source.dimension))
    for start in range(0, draws, rows):
        yield source.sums(rng.random((min(rows, draws - start), source.width)))


@dataclass(frozen=True)
class Hits:
    """How many of the draws were at least (at most) the observed value; `sides` 2 doubles p."""

    upper: int
    lower: int
    draws: int
    sides: int

    @property
    def hits(self) -> int:
        """Hits of the tail that counts: the smaller of two."""
        return min(self.upper, self.lower) if self.sides == 2 else self.upper

    @property
    def p_value(self) -> float:
        """(b + 1) / (B + 1), doubled for two sides (Phipson & Smyth 2010)."""
        return min(1.0, self.sides * (self.hits + 1) / (self.draws + 1))

    def interval(self, level: float) -> tuple[float, float]:
        """Clopper-Pearson limits of the p-value that infinitely many draws would give."""
        low, high = clopper_pearson(self.hits, self.draws, level)
        return min(1.0, self.sides * float(low)), min(1.0, self.sides * float(high))


def count(
    source: Sampler,
    extreme: Counter,
    *,
    sides: int,
    stages: Sequence[int],
    thresholds: Sequence[float],
    rng: np.random.Generator,
    block: int | None = None,
    progress: Progress | None = None,
) -> Hits:
    """Draw stage by stage until no threshold is in doubt.

    Parameters
    ----------
    source : Sampler
    extreme : callable
        Counts, in a block of sums (b, d), those in the upper and in the lower tail.
    sides : int
        1 or 2.
    stages : sequence of int
        Total numbers of draws, ascending; one stream, earlier draws are kept.
    thresholds : sequence of float
        Go on to the next stage while the 99.9% interval of p contains one of them.
    rng : numpy.random.Generator
    block : int, optional
        Draws at once; changes no result.
    progress : callable, optional
        Called with (draws done, draws of this stage).

    Returns
    -------
    Hits
    """
    found = Hits(0, 0, 0, sides)
    for stage in stages:
        for sums in blocks(source, rng, stage - found.draws, block=block):
            upper, lower = extreme(sums)
            found = Hits(found.upper + upper, found.lower + lower, found.draws + len(sums), sides)
            if progress is not None:
                progress(found.draws, stage)
        low, high = found.interval(0.999)
        if not any(low <= threshold <= high for threshold in thresholds):
            break
    return found
