"""Location, spread and shape of samples along the last axis, batched.

Trimming and Winsorizing follow Wilcox, *Introduction to Robust Estimation and Hypothesis
Testing*: g = ⌊γn⌋ values are cut, or pulled in, at each end.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import special

Floats = NDArray[np.float64]


def cut(n: int, trim: float) -> int:
    """Return g = ⌊γn⌋, guarding against 0.2 · 15 = 3.0000000000000004 and its kin.

    One value is left at least, also where a γ just below a half is taken for a half.
    """
    return min(int(np.floor(trim * n + 1e-9)), max(n - 1, 0) // 2)


def trimmed_mean(y: Floats, trim: float) -> Floats:
    """Return the trimmed mean of samples (..., n)."""
    n = y.shape[-1]
    g = cut(n, trim)
    ordered = np.sort(y, axis=-1)
    # einsum adds short rows several times as fast as mean(axis=-1), which resampling asks for
    return np.asarray(np.einsum("...i->...", ordered[..., g : n - g]) / (n - 2 * g))


def winsorized(y: Floats, trim: float) -> Floats:
    """Return the samples (..., n) with the g outer values pulled in, order kept."""
    n = y.shape[-1]
    g = cut(n, trim)
    ordered = np.sort(y, axis=-1)
    return np.clip(y, ordered[..., g : g + 1], ordered[..., n - g - 1 : n - g])


def winsorized_variance(y: Floats, trim: float) -> Floats:
    """Return the Winsorized variance (divisor n − 1) of samples (..., n)."""
    return np.asarray(winsorized(y, trim).var(axis=-1, ddof=1))


def madn(y: Floats) -> Floats:
    """Return the median absolute deviation over Φ⁻¹(3/4), which estimates a normal SD."""
    centre = np.median(y, axis=-1, keepdims=True)
    return np.asarray(np.median(np.abs(y - centre), axis=-1) / special.ndtri(0.75))


def skewness(y: Floats) -> Floats:
    """Return the adjusted Fisher-Pearson coefficient of skewness of samples (..., n), n > 2."""
    n = y.shape[-1]
    centred = y - y.mean(axis=-1, keepdims=True)
    second, third = np.mean(centred**2, axis=-1), np.mean(centred**3, axis=-1)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(np.sqrt(n * (n - 1)) / (n - 2) * third / second**1.5)
