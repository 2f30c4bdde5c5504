"""Within-subject analysis of variance and the sphericity of its contrasts, batched.

Notation: ``y`` has shape (..., n, k), n subjects on k occasions.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

from robustrm.kernels.contrasts import helmert

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class SumsOfSquares:
    """Partition of the total sum of squares; every field has shape (...)."""

    occasion: Floats
    subject: Floats
    error: Floats

    def f_ratio(self, n: int, k: int) -> Floats:
        """Return F on (k − 1) and (n − 1)(k − 1) degrees of freedom; NaN where 0/0."""
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.asarray((self.occasion / (k - 1)) / (self.error / ((n - 1) * (k - 1))))


def sums_of_squares(y: Floats) -> SumsOfSquares:
    """Return the sums of squares of occasions, subjects and residuals."""
    n, k = y.shape[-2:]
    centred = y - y.mean(axis=(-2, -1), keepdims=True)
    by_occasion = centred.mean(axis=-2, keepdims=True)
    by_subject = centred.mean(axis=-1, keepdims=True)
    residual = centred - by_occasion - by_subject
    return SumsOfSquares(
        occasion=n * np.sum(by_occasion**2, axis=(-2, -1)),
        subject=k * np.sum(by_subject**2, axis=(-2, -1)),
        error=np.sum(residual**2, axis=(-2, -1)),
    )


def contrast_covariance(y: Floats) -> Floats:
    """Return the covariance (..., k − 1, k − 1) of orthonormal contrasts of the occasions."""
    n = y.shape[-2]
    centred = y - y.mean(axis=-2, keepdims=True)
    scores = centred @ helmert(y.shape[-1]).T
    return np.asarray(np.swapaxes(scores, -1, -2) @ scores / (n - 1))


def to_contrasts(covariance: Floats) -> Floats:
    """Return the covariance of orthonormal contrasts from that of the occasions (..., k, k)."""
    basis = helmert(covariance.shape[-1])
    return basis @ covariance @ basis.T


def epsilon_greenhouse_geisser(contrasts: Floats) -> Floats:
    """Return Box's epsilon, tr(S)² / (p tr(S²)), of a contrast covariance (..., p, p).

    Greenhouse & Geisser (1959) Psychometrika 24:95-112. NaN where all contrasts are constant.
    """
    p = contrasts.shape[-1]
    trace = np.trace(contrasts, axis1=-2, axis2=-1)
    with np.errstate(invalid="ignore"):
        return np.asarray(trace**2 / (p * np.sum(contrasts**2, axis=(-2, -1))))


def epsilon_huynh_feldt(epsilon: Floats, k: int, residual_df: int, n_groups: int = 1) -> Floats:
    """Return the Huynh-Feldt estimate from Box's epsilon, limited to [1/(k − 1), 1].

    ``(N(k − 1)ε − 2) / ((k − 1)(N − g − (k − 1)ε))`` with N − g residual degrees of freedom
    between subjects and g groups. Huynh & Feldt (1976) J Educ Stat 1:69-82; with one group
    the correction of Lecoutre (1991) leaves it as it is.
    """
    n = residual_df + n_groups
    denominator = (k - 1) * (residual_df - (k - 1) * epsilon)
    with np.errstate(divide="ignore", invalid="ignore"):
        raw = (n * (k - 1) * epsilon - 2) / denominator
    return np.asarray(np.where(denominator > 0, np.clip(raw, 1 / (k - 1), 1.0), 1.0))


def mauchly(contrasts: Floats, residual_df: int) -> tuple[Floats, Floats, Floats, int]:
    """Return Mauchly's W, its χ² approximation, p value and degrees of freedom.

    Mauchly (1940) Ann Math Stat 11:204-209, with the factor of Box (1949). Not defined
    (NaN) when the residual degrees of freedom are fewer than the contrasts.
    """
    p = contrasts.shape[-1]
    df = p * (p + 1) // 2 - 1
    sign, log_determinant = np.linalg.slogdet(contrasts)
    trace = np.trace(contrasts, axis1=-2, axis2=-1)
    factor = residual_df - (2 * p**2 + p + 2) / (6 * p)
    with np.errstate(divide="ignore", invalid="ignore"):
        log_w = np.where(sign > 0, log_determinant - p * np.log(trace / p), np.nan)
    defined = (residual_df >= p) & (df > 0)
    log_w = np.where(defined, log_w, np.nan)
    chi2 = -factor * log_w
    return np.exp(log_w), chi2, special.chdtrc(df, chi2), df


def f_tail(f: Floats, df1: Floats | float, df2: Floats | float) -> Floats:
    """Return P(F >= f); df may be fractional."""
    return np.asarray(special.fdtrc(df1, df2, f))
