"""Effect sizes of samples of differences (..., n) and of tables (..., n, k), batched."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import special

from robustrm.kernels.location import cut, trimmed_mean, winsorized
from robustrm.kernels.score_statistics import between, total

Floats = NDArray[np.float64]

_EQUAL = 1e-10  # derived values this near each other, relative to the largest, are equal


def winsorized_normal_sd(fraction: float) -> float:
    """Return the SD of a standard normal variable Winsorized by `fraction` at each end.

    √(∫_{−q}^{q} x² φ(x) dx + 2γq²) with q = Φ⁻¹(1 − γ); by parts the integral is
    1 − 2γ − 2qφ(q). 0.642 at γ = 0.2.
    """
    if fraction <= 0:
        return 1.0
    q = float(special.ndtri(1 - fraction))
    density = np.exp(-(q**2) / 2) / np.sqrt(2 * np.pi)
    return float(np.sqrt(1 - 2 * fraction - 2 * q * density + 2 * fraction * q**2))


def robust_standardized(d: Floats, trim: float) -> Floats:
    """Return the trimmed mean over the Winsorized SD, times the normal Winsorized SD at g/n.

    Algina, Keselman & Penfield (2005) Psychol Methods 10:317-328. The factor makes it the mean
    over the SD for a normal law. It is taken at the share that is cut, g/n, not at the share
    asked for. Without Winsorized variation: infinite, or NaN where the trimmed mean is 0 too.
    """
    n = d.shape[-1]
    g = cut(n, trim)
    ordered = np.sort(d, axis=-1)
    spread = ordered[..., n - g - 1] - ordered[..., g]
    varies = spread > _EQUAL * np.max(np.abs(d), axis=-1)
    w = winsorized(d, trim)
    squares = np.sum((w - w.mean(axis=-1, keepdims=True)) ** 2, axis=-1)
    with np.errstate(divide="ignore", invalid="ignore"):
        deviation = np.where(varies, np.sqrt(squares / np.int64(n - 1)), 0.0)
        return np.asarray(winsorized_normal_sd(g / n) * trimmed_mean(d, trim) / deviation)


def standardized(d: Floats) -> Floats:
    """Return the mean over the SD of differences (..., n), Cohen's d_z; NaN for one of them."""
    return robust_standardized(d, 0.0)


def average_standardized(y: Floats) -> tuple[Floats, Floats]:
    """Return d_av of pairs (..., n, 2) and its standard error.

    d_av is the mean of second − first over s, s² the mean of the two variances. Bonett (2008)
    Psychol Methods 13:99-109, for two dependent means:

        var(d) = d² (s₁⁴ + s₂⁴ + 2 s₁₂²) / (8 s⁴ (n − 1)) + (s₁² + s₂² − 2 s₁₂) / (s² (n − 1))
    """
    df = np.int64(y.shape[-2] - 1)
    centred = y - y.mean(axis=-2, keepdims=True)
    with np.errstate(divide="ignore", invalid="ignore"):
        first, second = np.moveaxis(np.sum(centred**2, axis=-2) / df, -1, 0)
        shared = np.sum(centred[..., 0] * centred[..., 1], axis=-1) / df
        square = (first + second) / 2
        d = (y[..., 1].mean(axis=-1) - y[..., 0].mean(axis=-1)) / np.sqrt(square)
        of_spread = d**2 * (first**2 + second**2 + 2 * shared**2) / (8 * square**2)
        of_mean = (first + second - 2 * shared) / square
        return np.asarray(d), np.sqrt((of_spread + np.maximum(of_mean, 0)) / df)


def concordance(scores: Floats) -> Floats:
    """Return Kendall's W of centred mid-ranks (..., n, k), ties corrected: Σ S_j² / (n ΣΣ s²).

    Kendall & Babington Smith (1939) Ann Math Stat 10:275-287. NaN where no subject varies.
    """
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(between(scores) / (scores.shape[-2] * total(scores)))


def less_bias(resampled: Floats, observed: Floats | float, n: int) -> Floats:
    """Return resampled W less what drawing subjects twice adds, and less the bias of W itself.

    W = 1/n + (1 − 1/n) r̄ with r̄ the mean rank correlation of two different subjects, which has
    no bias. A resample draws a subject twice with probability 1/n a pair, so the mean of W* is
    W + (1 − W)/n, and that of (nW* − 1)/(n − 1) is W: exactly without ties. What remains is the
    bias of W as an estimate of the concordance in the population, estimated by W − r̄ =
    (1 − W)/(n − 1).
    """
    return np.asarray((n * resampled - 1) / (n - 1) - (1 - observed) / (n - 1))


def agreement_limit(n: int, level: float, stretch: float = 1.0) -> float:
    """Return a lower limit of the concordance in the population when all n subjects rank alike.

    The share q of the population with that order is at least (α/2)^{1/n} (Clopper & Pearson
    1934). Without ties the concordance is least, (2q − 1)², were all others to rank the other
    way round. With ties in the common order the others may have longer score vectors: with
    `stretch` the sum of squares of scores without ties over that of the common order,

        (q − (1 − q)√stretch)² / (q + (1 − q) stretch), and 0 where the base is negative.
    """
    share = ((1 - level) / 2) ** (1 / n)
    others = 1 - share
    agreed = max(share - others * np.sqrt(stretch), 0.0)
    return float(agreed**2 / (share + others * stretch))
