"""Intervals of a median between order statistics, batched.

The interval from the k-th smallest to the k-th largest of n differences holds the median with
probability 1 − 2 P(B <= k − 1), B binomial with n trials and probability 1/2. These levels come
in steps. Hettmansperger & Sheather (1986) Statistics & Probability Letters 4:75-79 interpolate
between two neighbours, with weights that are right for a double exponential law and nearly right
for others.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Interpolation:
    """Which order statistics bound the interval, and with which weights.

    The limits lie the share `inward` of the way from the `rank`-th smallest (largest) value to
    the next one inward. `outer` and `inner` are the levels that these two intervals attain.
    """

    rank: int
    inward: float
    outer: float
    inner: float


def order_level(n: int, rank: int) -> float:
    """Return the level of the interval from the `rank`-th smallest to the `rank`-th largest."""
    return float(1 - 2 * special.bdtr(rank - 1, n, 0.5))


def interpolation(n: int, level: float) -> Interpolation | None:
    """Return the interpolated interval of `level`, None where even the whole range falls short.

    With I = (γ_k − γ)/(γ_k − γ_{k+1}) the share is λ = (n − k) I / (k + (n − 2k) I), where γ_k is
    the smallest level of two order statistics that is at least γ. With 5 differences no interval
    reaches 95%.
    """
    levels = 1 - 2 * special.bdtr(np.arange(n // 2 + 1), n, 0.5)
    # a guard for rounding: a level such as 0.96875 is attained exactly at some n
    fits = np.flatnonzero(levels[: n // 2] >= level * (1 - 1e-12))
    if not fits.size:
        return None
    k = int(fits[-1]) + 1
    outer, inner = float(levels[k - 1]), float(levels[k])
    share = max(0.0, (outer - level) / (outer - inner))
    return Interpolation(k, (n - k) * share / (k + (n - 2 * k) * share), outer, inner)


def interpolated_limits(d: Floats, found: Interpolation) -> tuple[Floats, Floats]:
    """Return the limits (...) of samples (..., n)."""
    ordered = np.sort(d, axis=-1)
    n, k, inward = d.shape[-1], found.rank, found.inward

    def between(outer: Floats, inner: Floats) -> Floats:
        # not outer + λ (inner − outer): equal values must give their own value
        return np.where(outer == inner, outer, (1 - inward) * outer + inward * inner)

    low = between(ordered[..., k - 1], ordered[..., k])
    return low, between(ordered[..., n - k], ordered[..., n - k - 1])
