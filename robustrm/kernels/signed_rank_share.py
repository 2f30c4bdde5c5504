"""Exact limits for the rank-biserial correlation of matched pairs, batched.

Given their sizes, the differences have independent signs. When each is a rise with the same
probability π, the rank sum of the rises is T = Σ r_i B_i with B_i independent Bernoulli(π), and
the rank-biserial correlation (T⁺ − T⁻)/Σ r estimates 2π − 1. The limits are the π at which T is
as large, or as small, as observed with probability (1 − level)/2: the argument of Clopper &
Pearson (1934) with ranks for weights. At π = 1/2 the law is the signed-rank null, so an interval
without zeros excludes 0 exactly when the two-sided exact signed-rank p is at most 1 − level.

The variance given a common π is at least that given unequal ones whenever larger differences go
one way more consistently than small ones, as after a shift of a symmetric law; the level is then
held. Where the largest differences are the least consistent it can fall short.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import special

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

LARGEST_SUM = 2**14
"""Largest total of the whole-number weights that is treated exactly; 180 ranks without ties."""

_STEPS = 52


def sum_law(weights: Ints, share: Floats) -> Floats:
    """Return P(Σ w_i B_i = t), t = 0 ... Σ w, for every share π (...): shape (..., Σ w + 1)."""
    law = np.ones((*share.shape, 1))
    for weight in weights.tolist():
        longer = np.zeros((*share.shape, law.shape[-1] + weight))
        longer[..., : law.shape[-1]] += law * (1 - share[..., None])
        longer[..., weight:] += law * share[..., None]
        law = longer
    return law


def share_limits(
    weights: Ints, fewest: ArrayLike, most: ArrayLike, level: float
) -> tuple[Floats, Floats]:
    """Return limits (...) for the share π of the rank sum that rises.

    Parameters
    ----------
    weights : array (m,) of int
        Ranks as positive whole numbers: twice the mid-ranks where there are ties.
    fewest, most : array (...)
        Weighted rises with undecided differences counted as falls, and as rises.
    level : float
        Level of the two-sided interval.

    Returns
    -------
    low, high : array (...)
        Exact limits; score limits where the weights total more than ``LARGEST_SUM``.
    """
    lowest, highest = np.broadcast_arrays(
        np.asarray(fewest, dtype=np.int64), np.asarray(most, dtype=np.int64)
    )
    whole = int(weights.sum())
    if whole > LARGEST_SUM:
        return _score(weights, lowest, level)[0], _score(weights, highest, level)[1]
    tail = (1 - level) / 2
    low = _lower(weights, lowest, tail)
    # the upper limit of the rises is one less the lower limit of the falls
    return low, 1 - _lower(weights, whole - highest, tail)


def _lower(weights: Ints, total: Ints, tail: float) -> Floats:
    """Return the π at which P(T >= total) = tail, by bisection; 0 where nothing rises."""
    low, high = np.zeros(total.shape), np.ones(total.shape)
    beyond = np.arange(int(weights.sum()) + 1) >= total[..., None]
    for _ in range(_STEPS):
        middle = (low + high) / 2
        likely = np.sum(sum_law(weights, middle) * beyond, axis=-1) > tail
        low, high = np.where(likely, low, middle), np.where(likely, middle, high)
    return np.where(total > 0, low, 0.0)


def _score(weights: Ints, total: Ints, level: float) -> tuple[Floats, Floats]:
    """Return the π with |T/W − π| = z √(v π(1 − π)), v = Σ w²/W².

    Wilson (1927) J Am Stat Assoc 22:209-212, with weights.
    """
    w = weights.astype(np.float64)
    share = total / w.sum()
    spread = special.ndtri((1 + level) / 2) ** 2 * np.sum(w**2) / w.sum() ** 2
    centre = (share + spread / 2) / (1 + spread)
    margin = np.sqrt(spread * share * (1 - share) + spread**2 / 4) / (1 + spread)
    return centre - margin, centre + margin
