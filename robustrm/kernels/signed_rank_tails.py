"""Lower tails of the signed-rank law for many sets of ranks at once, ties and zeros included."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from robustrm.kernels.walsh import signed_rank_law

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Numbers in the laws held at once: 2^21 float64 are 16 MB.
BLOCK = 1 << 21


def lower_tails(weights: Ints, bounds: Ints) -> Floats:
    """Return P(Σ w_i B_i <= bound) with B_i independent and 0 or 1 with probability 1/2 each.

    Parameters
    ----------
    weights : array (m, n) of int
        Twice the mid-ranks of the differences, 0 for those that are left out.
    bounds : array (m,) of int
        Twice the smaller (or the chosen) rank sum, at least 0.

    Returns
    -------
    array (m,)

    Notes
    -----
    A law given its ties is found by convolution (Wilcoxon 1945; ties: Hollander & Wolfe 1999,
    section 3.1). Equal sets of ranks with equal bounds are computed once, those without ties or
    zeros by the tabulated law. Sums of positive terms: the relative error stays below 1e-13.
    """
    ordered = np.sort(weights, axis=-1)
    m, n = ordered.shape
    result = np.ones(m)
    plain = (ordered == 2 * np.arange(1, n + 1)).all(axis=-1)
    if plain.any():
        below = np.cumsum(signed_rank_law(n))
        # an odd bound holds the same whole ranks as the even one below it
        result[plain] = below[np.minimum(bounds[plain] // 2, below.size - 1)]
    rows = np.flatnonzero(~plain)
    if rows.size:
        cases = np.column_stack([ordered[rows], bounds[rows]])
        distinct, inverse = np.unique(cases, axis=0, return_inverse=True)
        result[rows] = _convolved(distinct[:, :-1], distinct[:, -1])[inverse.ravel()]
    return np.minimum(result, 1.0)


def _convolved(weights: Ints, bounds: Ints) -> Floats:
    """Return the tails of distinct cases, a block at a time."""
    most = max(1, BLOCK // (int(bounds.max(initial=0)) + 1))
    parts = [
        _block(weights[start : start + most], bounds[start : start + most])
        for start in range(0, len(weights), most)
    ]
    return np.concatenate(parts)


def _block(weights: Ints, bounds: Ints) -> Floats:
    """Convolve the laws of a block up to their bounds, one difference at a time."""
    size = int(bounds.max(initial=0)) + 1
    law = np.zeros((len(weights), size))
    law[:, 0] = 1.0
    places = np.arange(size)
    for column in weights.T:
        from_place = places - column[:, None]
        moved = np.take_along_axis(law, np.maximum(from_place, 0), axis=1)
        moved[from_place < 0] = 0.0
        law = (law + moved) / 2
    law[places > bounds[:, None]] = 0.0
    return np.asarray(law.sum(axis=1))
