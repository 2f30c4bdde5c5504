"""The paired Brunner-Munzel statistic and what swapping a subject's two values does to it, batched.

Notation: ``values`` has shape (..., n, 2), n subjects on two occasions; only their order counts.
F_1 and F_2 are the empirical distributions (ties counted half), p = P(X_1 < X_2) + P(X_1 = X_2)/2
for independent X_1 from F_1 and X_2 from F_2. Each subject has the placement

    Z_i = F_1(X_i2) − F_2(X_i1),    mean(Z) = 2p − 1,    T = √n (p − 1/2) / sd(Z)

(Munzel & Brunner 2002; by ranks, n Z_i = R_i2 − R_i2^(2) − R_i1 + R_i1^(1), with R overall and
R^(j) within occasion j). a_i = 2n Z_i is a whole number.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def swap_columns(values: Floats) -> Floats:
    """Return the whole-number matrix M, (..., n, n), with a = M ε for every pattern of swaps.

    ε_l is 1 where subject l's two values stand as observed and −1 where they are swapped, so
    M's column l is what subject l adds to all placements. With c_il = sign(X_i2 − X_l1) +
    sign(X_l2 − X_i1) and d_il = sign(X_i2 − X_l2) − sign(X_i1 − X_l1), a pair of subjects adds
    ε_i c_il to a_i when both stand or both are swapped, ε_i d_il otherwise. Written with
    (1 ± ε_i ε_l)/2 that is linear in the signs.
    """
    first, second = values[..., 0], values[..., 1]
    rise = np.sign(second[..., :, None] - first[..., None, :])  # X_i2 against X_l1
    alike = rise + np.swapaxes(rise, -1, -2)
    crossed = np.sign(second[..., :, None] - second[..., None, :]) - np.sign(
        first[..., :, None] - first[..., None, :]
    )
    matrix = (alike - crossed) / 2
    own = np.arange(values.shape[-2])
    matrix[..., own, own] += np.sum(alike + crossed, axis=-1) / 2
    return np.asarray(matrix)


def effect_of(placements: Floats) -> Floats:
    """Return p, shape (...), from the whole placements a (..., n)."""
    n = placements.shape[-1]
    return np.asarray(0.5 + placements.sum(axis=-1) / (4 * n * n))


def error_of(placements: Floats) -> Floats:
    """Return the standard error of p, shape (...), from the whole placements a (..., n)."""
    n = placements.shape[-1]
    total, squares = placements.sum(axis=-1), np.square(placements).sum(axis=-1)
    # whole numbers up to the root: zero is exactly zero
    return np.asarray(np.sqrt((n * squares - total**2) / (n - 1)) / (2 * n * n))


def statistic_of(placements: Floats) -> Floats:
    """Return T, shape (...), from the whole placements a (..., n).

    Where all placements are equal T is infinite with the sign of p − 1/2, and 0 at p = 1/2.
    """
    error, excess = error_of(placements), effect_of(placements) - 0.5
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(excess == 0, 0.0, excess / error)
