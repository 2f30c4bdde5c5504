"""Scores of the additive tests: what each one makes of the cells of a table, batched.

Every function takes arrays (..., n, k), n subjects on k occasions, and returns scores of the
same shape whose rows sum to zero. A test adds them over the subjects (`score_statistics`) and
rearranges them within subjects (`null`). Rank scores are multiplied so that they are whole
numbers, which makes equal sums equal to the last bit.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import special

from robustrm.kernels.location import cut
from robustrm.kernels.ranks import midranks

Floats = NDArray[np.float64]


def rank_scores(cells: Floats) -> Floats:
    """Return twice the centred mid-ranks within subjects: 2r − (k+1), Friedman (1937)."""
    return np.asarray(2 * midranks(cells) - (cells.shape[-1] + 1))


def quade_scores(cells: Floats, spans: Floats) -> Floats:
    """Return 4 q (r − (k+1)/2), q the mid-rank of a subject's range (..., n), Quade (1979)."""
    return np.asarray(2 * midranks(spans)[..., None] * rank_scores(cells))


def aligned_scores(centred: Floats) -> Floats:
    """Return 2k times the centred ranks among all nk subject-centred values.

    Hodges & Lehmann (1962): values less their subject's mean are ranked together.
    """
    n, k = centred.shape[-2:]
    pooled = centred.reshape(*centred.shape[:-2], n * k)
    doubled = 2 * midranks(pooled).reshape(centred.shape)
    return np.asarray(k * doubled - doubled.sum(axis=-1, keepdims=True))


def normal_scores(cells: Floats) -> Floats:
    """Return Φ⁻¹(r/(k+1)) of the mid-ranks within subjects, centred by subject."""
    quantiles = special.ndtri(midranks(cells) / (cells.shape[-1] + 1))
    scores = quantiles - quantiles.mean(axis=-1, keepdims=True)
    # a row that is tied throughout is centred to rounding, not to zero
    return np.where(np.ptp(quantiles, axis=-1, keepdims=True) == 0, 0.0, scores)


def mean_scores(values: Floats) -> Floats:
    """Return the subject-centred values."""
    return np.asarray(values - values.mean(axis=-1, keepdims=True))


def winsorized_scores(centred: Floats, trim: float) -> Floats:
    """Return k times the centred values clipped at their pooled quantiles, centred again.

    The clip points pull in g = ⌊trim · nk⌋ of all nk values at each end; they do not depend
    on how a subject's values are arranged over the occasions.
    """
    n, k = centred.shape[-2:]
    g = cut(n * k, trim)
    pooled = np.sort(centred.reshape(*centred.shape[:-2], n * k), axis=-1)[..., None]
    clipped = np.clip(centred, pooled[..., g : g + 1, :], pooled[..., n * k - g - 1 : n * k - g, :])
    return np.asarray(k * clipped - clipped.sum(axis=-1, keepdims=True))


def block_scores(cells: Floats) -> Floats:
    """Return √(12/(k_i+1)) (r − (k_i+1)/2) among a subject's k_i cells, 0 where missing.

    Skillings & Mack (1981).
    """
    ranks = midranks(cells)
    sizes = np.sum(~np.isnan(ranks), axis=-1, keepdims=True)
    return np.asarray(np.nan_to_num(np.sqrt(12 / (sizes + 1)) * (ranks - (sizes + 1) / 2)))


def signed_ranks(sizes: Floats, signs: Floats, zeros: str = "pratt") -> Floats:
    """Return twice the signed mid-ranks of differences (..., m), 0 for zero differences.

    Pratt (1959) ranks the zeros too and then leaves them out; dropping (Wilcoxon 1945)
    leaves them out first.
    """
    moved = signs != 0
    ranked = midranks(sizes if zeros == "pratt" else np.where(moved, sizes, np.nan))
    return np.where(moved, 2 * ranked * signs, 0.0)
