"""All resamples of a small sample with their weights: the bootstrap without drawing."""

from __future__ import annotations

import itertools
import math
from collections import Counter

import numpy as np


def distinct_resamples(n: int) -> tuple[np.ndarray, np.ndarray]:
    """Return the rows (C(2n − 1, n), n) of every distinct resample, and their probabilities.

    A resample with c_i copies of row i has probability n! / (Π c_i! nⁿ).
    """
    rows = np.array(list(itertools.combinations_with_replacement(range(n), n)))
    ways = [
        math.factorial(n) / math.prod(math.factorial(c) for c in Counter(one).values())
        for one in rows.tolist()
    ]
    return rows, np.array(ways) / float(n) ** n


def spread_evenly(values: np.ndarray, weights: np.ndarray, draws: int) -> np.ndarray:
    """Return which values stand at the probabilities i/(B + 1), i = 1 ... B, of their law.

    Their r-th smallest is the quantile of the law at r/(B + 1), without sampling error. NaN
    stands at the upper end.
    """
    order = np.argsort(values, kind="stable")
    cumulative = np.cumsum(weights[order])
    wanted = np.arange(1, draws + 1) / (draws + 1)
    return order[np.minimum(np.searchsorted(cumulative, wanted - 1e-13), len(order) - 1)]
