"""Scores of additive tests when visits are missing, batched.

As in `scores`, from arrays (..., n, k), but with NaN for a missing cell: a subject's scores sum to
zero over the cells that it has, and are zero where it has none. Without a missing cell each is a
multiple of the score of the same name in `scores`.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import special

from robustrm.kernels.location import cut
from robustrm.kernels.ranks import midranks

Floats = NDArray[np.float64]


def centred(values: Floats) -> Floats:
    """Return values less their row's mean over the cells it has; NaN where missing."""
    present = ~np.isnan(values)
    sizes = np.maximum(present.sum(axis=-1, keepdims=True), 1)
    means = np.where(present, values, 0.0).sum(axis=-1, keepdims=True) / sizes
    return np.asarray(values - means)


def mean_scores(values: Floats) -> Floats:
    """Return the centred values."""
    return _filled(values)


def normal_scores(cells: Floats) -> Floats:
    """Return Φ⁻¹(r/(k_i+1)) of the mid-ranks among a subject's k_i cells, centred."""
    sizes = np.sum(~np.isnan(cells), axis=-1, keepdims=True)
    return _filled(special.ndtri(midranks(cells) / (sizes + 1)))


def aligned_scores(centred_values: Floats) -> Floats:
    """Return the ranks among all centred values that there are, centred by subject.

    Hodges & Lehmann (1962), with the missing cells left out of the ranking.
    """
    pooled = centred_values.reshape(*centred_values.shape[:-2], -1)
    return _filled(midranks(pooled).reshape(centred_values.shape))


def winsorized_scores(centred_values: Floats, trim: float) -> Floats:
    """Return the centred values of one table (n, k) clipped at their pooled quantiles, centred.

    The clip points pull in g = ⌊trim · N⌋ of the N values that there are at each end.
    """
    return _filled(np.clip(centred_values, *clip_points(centred_values, trim)))


def clip_points(centred_values: Floats, trim: float) -> tuple[float, float]:
    """Return the pooled quantiles at which the centred values of one table are clipped."""
    pooled = np.sort(centred_values[~np.isnan(centred_values)])
    g = cut(pooled.size, trim)
    return float(pooled[g]), float(pooled[pooled.size - g - 1])


def _filled(values: Floats) -> Floats:
    return np.nan_to_num(centred(values))
