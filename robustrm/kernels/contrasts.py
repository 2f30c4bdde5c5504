"""Contrasts of the occasions."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def helmert(k: int) -> Floats:
    """Return (k − 1, k) orthonormal rows that sum to zero: an occasion against those before."""
    rows = np.tri(k - 1, k)
    index = np.arange(1, k)
    rows[index - 1, index] = -index
    return np.asarray(rows / np.sqrt(index * (index + 1.0))[:, None])
