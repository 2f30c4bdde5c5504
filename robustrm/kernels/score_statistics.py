"""Statistics of additive scores: two forms that serve every test of the family, batched.

Scores ``s`` have shape (..., n, k) and rows that sum to zero. With S_j their sums over the
subjects, T = Σ_j S_j² and A = ΣΣ s², a test reports either

* χ² = (k−1) T / A: Friedman with tie correction (scores: centred mid-ranks), aligned ranks,
  normal scores; or
* F = (n−1) T / (nA − T): the within-subject F (scores: centred values), Quade's F, and the
  F of Iman & Davenport (1980) (scores: centred mid-ranks).

Both rise with T, and A does not change when a subject's scores are rearranged or mirrored.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

# T and nA agree to rounding when all subjects' scores are alike
_ALIKE = 1e-12


def between(scores: Floats) -> Floats:
    """Return T = Σ_j (S_j − mean)² of scores (..., n, k)."""
    sums = scores.sum(axis=-2)
    return np.asarray(np.sum((sums - sums.mean(axis=-1, keepdims=True)) ** 2, axis=-1))


def total(scores: Floats) -> Floats:
    """Return A = ΣΣ s² of scores (..., n, k)."""
    return np.asarray(np.sum(scores**2, axis=(-2, -1)))


def chi2_of(t: Floats | float, a: Floats | float, k: int) -> Floats:
    """Return (k−1) T / A; NaN where no subject varies."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray((k - 1) * np.asarray(t) / np.asarray(a))


def f_of(t: Floats | float, a: Floats | float, n: Floats | int) -> Floats:
    """Return (n−1) T / (nA − T): infinite where all subjects are alike, NaN where none varies."""
    square, whole = np.asarray(t, dtype=np.float64), n * np.asarray(a, dtype=np.float64)
    rest = whole - square
    alike = (rest <= _ALIKE * whole) & (whole > 0)
    with np.errstate(divide="ignore", invalid="ignore"):
        f = (n - 1) * square / np.where(alike, 1.0, rest)
    return np.asarray(np.where(alike, np.inf, f))
