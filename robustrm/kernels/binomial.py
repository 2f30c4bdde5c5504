"""Binomial proportions."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import special

Floats = NDArray[np.float64]


def clopper_pearson(successes: ArrayLike, n: ArrayLike, level: float) -> tuple[Floats, Floats]:
    """Return the exact interval of a proportion, batched.

    Clopper & Pearson (1934) Biometrika 26:404-413, by quantiles of the beta distribution.
    """
    x, size = np.broadcast_arrays(
        np.asarray(successes, dtype=np.float64), np.asarray(n, dtype=np.float64)
    )
    tail = (1 - level) / 2
    # the ends are set by hand: the beta distribution is not defined with a parameter of 0
    low = np.where(x > 0, special.betaincinv(np.maximum(x, 1), size - x + 1, tail), 0.0)
    high = np.where(x < size, special.betaincinv(x + 1, np.maximum(size - x, 1), 1 - tail), 1.0)
    return low, high
