"""Mid-ranks within rows, batched over the leading axes."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt


def midranks(values: npt.ArrayLike, *, tolerance: float = 0.0) -> npt.NDArray[np.float64]:
    """Rank each row from 1 upward, tied values sharing the mean of their ranks.

    Parameters
    ----------
    values : array_like, shape (..., k)
        Values; NaN marks a missing cell, which takes no rank and stays NaN.
    tolerance : float, default 0.0
        Neighbours in sorted order that differ by no more than this (absolute, in the unit of
        `values`) are tied. Derived data such as logarithms use 1e-10 times the largest magnitude.

    Returns
    -------
    ndarray, shape (..., k)
        Mid-ranks, float64.

    Notes
    -----
    Ties chain: with tolerance 1, the values 0, 1, 2 are all tied. Mid-ranks are multiples of one
    half, so twice the result is made of whole numbers.

    References
    ----------
    Kendall MG (1945). The treatment of ties in ranking problems. Biometrika 33:239-251.

    Examples
    --------
    >>> midranks([[7.0, 3.0, 7.0], [1.0, float("nan"), 0.5]])
    array([[2.5, 1. , 2.5],
           [2. , nan, 1. ]])
    """
    cells = np.asarray(values, dtype=np.float64)
    order = np.argsort(cells, axis=-1, kind="stable")
    ascending = np.take_along_axis(cells, order, axis=-1)
    # Written as "not at most", so that a missing cell (sorted last) never joins the run before it.
    steps = ~(ascending[..., 1:] <= ascending[..., :-1] + tolerance)
    edge = np.ones((*cells.shape[:-1], min(cells.shape[-1], 1)), dtype=bool)
    position = np.arange(cells.shape[-1])
    starts = np.where(np.concatenate([edge, steps], axis=-1), position, 0)
    ends = np.where(np.concatenate([steps, edge], axis=-1), position, cells.shape[-1])
    first = np.maximum.accumulate(starts, axis=-1)
    last = np.minimum.accumulate(ends[..., ::-1], axis=-1)[..., ::-1]
    ranks = np.empty_like(cells)
    np.put_along_axis(ranks, order, (first + last) / 2 + 1, axis=-1)
    ranks[np.isnan(cells)] = np.nan
    return ranks
