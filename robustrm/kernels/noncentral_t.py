"""Noncentral t: which noncentralities an observed t agrees with, batched.

With D normal, t = √n · D̄/s has the noncentral t law with noncentrality √n · μ/σ. Inverting it
gives exact limits of the standardized mean: Steiger & Fouladi (1997), in Harlow, Mulaik &
Steiger (eds.) What if there were no significance tests?, chapter 9.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import special

Floats = NDArray[np.float64]

_STEPS = 60  # halvings of a bracket, to the last bits
_FAR = 1e3  # beyond it the distribution function is slow, then not defined, and not needed


def noncentrality_limits(t: ArrayLike, df: ArrayLike, level: float) -> tuple[Floats, Floats]:
    """Return the noncentralities at which t is the upper and the lower (1 − level)/2 point.

    Beyond |t| = 1,000 the normal part of the law is nothing beside t √(χ²/df), and the limit is
    t times the quantile of √(χ²/df). NaN in gives NaN out.
    """
    given, freedom = np.broadcast_arrays(np.asarray(t, np.float64), np.asarray(df, np.float64))
    tail = (1 - level) / 2
    size = np.abs(given)
    # the law of −t has the opposite noncentrality, and the left tail of a positive t is accurate
    near, far = _solved(size, freedom, 1 - tail), _solved(size, freedom, tail)
    negative = given < 0
    return np.where(negative, -far, near), np.where(negative, -near, far)


def _solved(t: Floats, df: Floats, p: float) -> Floats:
    """Return the noncentrality δ with P(T <= t | δ) = p, t >= 0, by bisection.

    P(T <= t) lies between P(Z <= −δ), reached at t = 0, and P(Z <= t s − δ) + P(S > s) for any
    s, where S = √(χ²/df). That gives the bracket.
    """
    z = -special.ndtri(p)
    s = np.sqrt(special.chdtri(df, p / 2) / df)
    low = np.broadcast_to(z, t.shape).copy()
    high = t * s - special.ndtri(p / 2)
    with np.errstate(invalid="ignore", over="ignore"):
        for _ in range(_STEPS):
            middle = low / 2 + high / 2
            too_small = special.nctdtr(df, middle, t) > p
            low, high = np.where(too_small, middle, low), np.where(too_small, high, middle)
    limit = t * np.sqrt(special.chdtri(df, p) / df)
    return np.where(np.isnan(t), np.nan, np.where(t > _FAR, limit, low / 2 + high / 2))
