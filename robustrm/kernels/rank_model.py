"""Relative effects of the occasions by overall mid-ranks, batched.

Notation: ``values`` has shape (..., n, k), n subjects on k occasions; only their order counts.
F_j is the distribution on occasion j, H the mean of all k, and p_j = P(Z < X_j) + P(Z = X_j)/2
with Z drawn from H, independently: the relative effect of occasion j. All are estimated from
mid-ranks over the N = nk cells (Brunner, Domhof & Langer 2002; Brunner & Puri 2001).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import special

from robustrm.kernels.anova import contrast_covariance
from robustrm.kernels.ranks import midranks

Floats = NDArray[np.float64]


def overall_midranks(values: Floats) -> Floats:
    """Return the mid-ranks of all cells of each table, (..., n, k)."""
    n, k = values.shape[-2:]
    return midranks(values.reshape(*values.shape[:-2], n * k)).reshape(values.shape)


def relative_effects(ranks: Floats) -> Floats:
    """Return p_j = (mean rank of occasion j − 1/2) / N, (..., k), from overall mid-ranks."""
    n, k = ranks.shape[-2:]
    return np.asarray((ranks.mean(axis=-2) - 0.5) / (n * k))


def anova_type(ranks: Floats) -> tuple[Floats, Floats]:
    """Return the ANOVA-type statistic F and its first degrees of freedom, each (...).

    With V the covariance of the rank rows over N² and T = I − J/k: F = n p'Tp / tr(TV) on
    tr(TV)² / tr(TVTV) and infinitely many degrees of freedom (Brunner, Domhof & Langer 2002).
    NaN where tr(TV) is zero.
    """
    n, k = ranks.shape[-2:]
    effects = relative_effects(ranks)
    centred = effects - effects.mean(axis=-1, keepdims=True)
    # V seen by orthonormal contrasts has the trace of TV, and its square that of TVTV
    seen = contrast_covariance(ranks) / (n * k) ** 2
    trace = np.trace(seen, axis1=-2, axis2=-1)
    # The residual sum of squares of mid-ranks is a multiple of 1/(4N): less is rounding.
    moves = (n - 1) * (n * k) ** 2 * trace >= 1 / (8 * n * k)
    with np.errstate(divide="ignore", invalid="ignore"):
        f = np.where(moves, n * np.sum(centred**2, axis=-1) / trace, np.nan)
        df = np.where(moves, trace**2 / np.sum(seen**2, axis=(-2, -1)), np.nan)
    return f, df


def effect_influence(values: Floats) -> Floats:
    """Return what each subject adds to the relative effects, up to a constant, (..., n, k).

    Z_ij = H(X_ij) − (1/k) Σ_s F_j(X_is), with the empirical distributions for H and F_j. The
    second part comes from the ranks being estimated; without it the variance holds under equal
    marginal distributions alone. √n(p̂_j − p_j) has the limiting variance of Z_ij, whatever the
    marginal distributions and the dependence: p̂_j = ∫ Ĥ dF̂_j, and the derivative of ∫ H dF_j in
    the direction of one subject is Z_ij, less its mean. Akritas & Brunner (1997) J Stat Plan
    Inference 61:249-277; Brunner & Puri (2001) Stat Papers 42:1-52.
    """
    n, k = values.shape[-2:]
    cells = values.reshape(*values.shape[:-2], n * k)
    ranks = midranks(cells)
    result: Floats = ((ranks - 0.5) / (n * k)).reshape(values.shape)
    for j in range(k):
        # a second copy of occasion j adds n F_j(x) to the mid-rank of x
        twice = midranks(np.concatenate([cells, values[..., j]], axis=-1))[..., : n * k]
        below = (twice - ranks).reshape(values.shape) / n
        result[..., j] -= below.mean(axis=-1)
    return result


def effect_errors(values: Floats) -> Floats:
    """Return the standard errors of the relative effects, (..., k)."""
    n = values.shape[-2]
    influence = effect_influence(values)
    return np.asarray(influence.std(axis=-2, ddof=1) / np.sqrt(n))


def logit_interval(
    probability: Floats, error: Floats, quantile: Floats | float
) -> tuple[Floats, Floats]:
    """Return limits of a probability from an interval of its logit, which keep inside (0, 1).

    NaN where the probability is 0 or 1, or its standard error is zero (to rounding).
    """
    spread = probability * (1 - probability)
    defined = (spread > 0) & (error > 1e-12)
    safe = np.where(defined, spread, 1.0)
    middle = special.logit(np.where(defined, probability, 0.5))
    margin = quantile * error / safe
    limits = special.expit(middle - margin), special.expit(middle + margin)
    low, high = (np.where(defined, limit, np.nan) for limit in limits)
    return low, high


def effect_intervals(
    effects: Floats, errors: Floats, quantile: Floats | float
) -> tuple[Floats, Floats]:
    """Return logit intervals of relative effects, (..., k).

    p_j lies between 1/(2k) and 1 − 1/(2k), since X_j is part of the mean distribution; the
    logit is taken of its place between these two (Brunner, Domhof & Langer 2002).
    """
    k = effects.shape[-1]
    place = (k * effects - 0.5) / (k - 1)
    low, high = logit_interval(place, errors * k / (k - 1), quantile)
    return ((k - 1) * low + 0.5) / k, ((k - 1) * high + 0.5) / k
