"""Hotelling's T² of the contrasts between occasions, batched.

Notation: ``y`` has shape (..., n, k), n subjects on k occasions.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from robustrm.kernels.contrasts import helmert

Floats = NDArray[np.float64]

# A spread of the contrasts below this many rounding errors of the values is none.
ROUNDINGS = 64


def t_squared(y: Floats) -> Floats:
    """Return T² = n m'S⁻¹m with m and S the mean and covariance of contrasts, shape (...).

    Hotelling (1931) Ann Math Stat 2:360-378. Any full set of contrasts gives the same value.
    NaN where S is singular to rounding, as it is with fewer subjects than occasions.
    """
    n, k = y.shape[-2:]
    if n < k:
        return np.full(y.shape[:-2], np.nan)
    contrasts = y @ helmert(k).T
    mean = contrasts.mean(axis=-2)
    # S = D'D/(n − 1) by the singular values of D, which does not square its condition
    _, sizes, axes = np.linalg.svd(contrasts - mean[..., None, :], full_matrices=False)
    largest = np.max(np.abs(y), axis=(-2, -1))
    noise = ROUNDINGS * np.finfo(np.float64).eps * np.sqrt(n * k) * largest
    seen = (axes @ mean[..., None])[..., 0]
    with np.errstate(divide="ignore", invalid="ignore"):
        found = n * (n - 1) * np.sum((seen / sizes) ** 2, axis=-1)
    return np.where(sizes[..., -1] > noise, found, np.nan)


def to_f(t2: Floats, n: int, k: int) -> Floats:
    """Return F = (n − k + 1) / ((n − 1)(k − 1)) · T², on k − 1 and n − k + 1 df."""
    return np.asarray((n - k + 1) / ((n - 1) * (k - 1)) * t2)
