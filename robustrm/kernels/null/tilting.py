"""Exponential tilts of score tables: their cumulants, and the tilt that moves the mean to a place.

A tilt of strength t makes an arrangement with score v more likely by exp(t v). The logarithm of the
sum of these factors, added over the subjects, is the cumulant generating function K(t); the tilted
mean is K'(t) and the tilted variance K''(t). Both the saddlepoint approximation and the proposals
of importance sampling ask for the t with K'(t) equal to a given place.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from robustrm.kernels.null.tables import (
    Array,
    ListedRow,
    PermutedRow,
    Table,
    list_all,
    read_only,
)

# Steps of the search; Newton's method on a smooth rising function needs about six.
STEPS = 60


@dataclass(frozen=True, eq=False)
class Stack:
    """Distinct tables side by side, shorter ones filled up with vectors of no probability.

    Attributes
    ----------
    vectors : ndarray, shape (g, m, d)
    logs : ndarray, shape (g, m)
        Logarithms of the probabilities, -inf for the filling.
    counts : ndarray, shape (g,)
        How many subjects have each table.
    """

    vectors: Array
    logs: Array
    counts: Array


def stack(tables: Sequence[Table]) -> Stack:
    """List the distinct tables; rows that are permutations of one another have one table."""
    listed = list_all(canonical(tables))
    distinct: dict[tuple[bytes, bytes], list[ListedRow]] = {}
    for row in listed:
        distinct.setdefault((row.vectors.tobytes(), row.weights.tobytes()), []).append(row)
    rows = [members[0] for members in distinct.values()]
    longest, dimension = max(row.size for row in rows), rows[0].vectors.shape[1]
    vectors = np.zeros((len(rows), longest, dimension))
    logs = np.full((len(rows), longest), -np.inf)
    for place, row in enumerate(rows):
        vectors[place, : row.size] = row.vectors
        logs[place, : row.size] = np.log(row.weights / row.total)
    counts = [len(members) for members in distinct.values()]
    return Stack(read_only(vectors), read_only(logs), read_only(counts))


def canonical(tables: Sequence[Table]) -> tuple[Table, ...]:
    """Turn rows that are permutations of one another into equal ones: their tables are the same."""
    return tuple(_sorted(table) for table in tables)


def _sorted(table: Table) -> Table:
    """Order the scores of a permuted row within its groups, which leaves its table as it is."""
    if isinstance(table, ListedRow):
        return table
    scores = table.scores.copy()
    for group in table.groups:
        scores[list(group)] = np.sort(scores[list(group)])
    return PermutedRow(read_only(scores), table.groups)


@dataclass(frozen=True, eq=False)
class Cumulants:
    """K(t), K'(t) and K''(t) of each sum, (...)."""

    log: Array
    mean: Array
    variance: Array


def cumulants(tilt: Array, values: Array, logs: Array, counts: Array) -> Cumulants:
    """Cumulant generating function of sums of independent scores, with two derivatives.

    Parameters
    ----------
    tilt : ndarray, shape (...)
    values : ndarray, shape (..., g, m)
        Scores of each table.
    logs : ndarray, shape (..., g, m) or (g, m)
        Logarithms of their probabilities.
    counts : ndarray, shape (..., g) or (g,)
        How often each table occurs.

    Returns
    -------
    Cumulants
    """
    powers = tilt[..., None, None] * values + logs
    top = powers.max(axis=-1, keepdims=True)
    shares = np.exp(powers - top)
    whole = shares.sum(axis=-1, keepdims=True)
    shares /= whole
    means = (shares * values).sum(axis=-1)
    spreads = (shares * np.square(values - means[..., None])).sum(axis=-1)
    log = top[..., 0] + np.log(whole[..., 0])
    return Cumulants(*(np.asarray((part * counts).sum(axis=-1)) for part in (log, means, spreads)))


def tilt_to(
    place: Array, values: Array, logs: Array, counts: Array, *, tolerance: float = 1e-12
) -> Array:
    """Find the tilt t with K'(t) = place, by Newton's method inside a closing bracket.

    Parameters
    ----------
    place : ndarray, shape (...)
        Strictly between the smallest and the largest attainable sum.
    values, logs, counts
        As for `cumulants`.
    tolerance : float, default 1e-12
        Allowed distance of K'(t) from the place, as a share of the range of the sum.

    Returns
    -------
    ndarray, shape (...)
        Where the place is out of reach, a tilt so strong that nothing but the end is left.
    """
    real = np.isfinite(logs)
    least = (np.where(real, values, np.inf).min(axis=-1) * counts).sum(axis=-1)
    most = (np.where(real, values, -np.inf).max(axis=-1) * counts).sum(axis=-1)
    allowed = tolerance * (most - least)
    tilt = np.zeros(np.shape(place))
    low, high = np.full_like(tilt, -np.inf), np.full_like(tilt, np.inf)
    for _ in range(STEPS):
        found = cumulants(tilt, values, logs, counts)
        excess = found.mean - place
        going = np.abs(excess) > allowed
        if not going.any():
            break
        low, high = np.where(excess < 0, tilt, low), np.where(excess > 0, tilt, high)
        variance = np.maximum(found.variance, np.maximum(allowed**2, np.finfo(np.float64).tiny))
        # Where the variance dies out Newton's method leaps: a few times the tilt is far enough.
        reach = 4 * np.maximum(np.abs(tilt), 1 / np.sqrt(variance))
        newton = tilt - np.clip(excess / variance, -reach, reach)
        is_closed = np.isfinite(low) & np.isfinite(high)
        middle = 0.5 * (np.where(is_closed, low, newton) + np.where(is_closed, high, newton))
        inside = (newton > low) & (newton < high)
        tilt = np.where(going, np.where(inside, newton, middle), tilt)
    return tilt
