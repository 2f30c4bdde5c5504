"""Adjusted p values of many families at once, each along the last axis.

With p_(1) <= ... <= p_(m):

    bonferroni  m p
    holm        max over j <= i of (m − j + 1) p_(j), Holm (1979)
    hochberg    min over j >= i of (m − j + 1) p_(j), Hochberg (1988)
    bh          min over j >= i of m p_(j) / j, Benjamini & Hochberg (1995)
    hommel      closed testing with Simes' test (1986), Hommel (1988)

The largest Simes p value of a set of s hypotheses that holds hypothesis i is that of i with the
s − 1 largest of the others: exchanging a member for one with a larger p lowers no order statistic.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def step_adjusted(p_values: Floats, method: str) -> Floats:
    """Return adjusted p values of families (..., m), in the order given.

    Parameters
    ----------
    p_values : ndarray, shape (..., m)
        Without NaN: a hypothesis that could not be tested has 1.
    method : {"none", "bonferroni", "holm", "hochberg", "hommel", "bh"}

    Returns
    -------
    ndarray, shape (..., m)

    Examples
    --------
    >>> step_adjusted(np.array([0.01, 0.04, 0.03]), "holm")
    array([0.03, 0.06, 0.06])
    """
    if method == "none":
        return p_values
    order = np.argsort(p_values, axis=-1, kind="stable")
    ascending = np.take_along_axis(p_values, order, axis=-1)
    found = np.empty_like(p_values)
    np.put_along_axis(found, order, np.minimum(_STEPS[method](ascending), 1.0), axis=-1)
    return found


def _bonferroni(p: Floats) -> Floats:
    return np.asarray(p.shape[-1] * p)


def _holm(p: Floats) -> Floats:
    return np.maximum.accumulate(np.arange(p.shape[-1], 0, -1) * p, axis=-1)


def _from_above(steps: Floats) -> Floats:
    return np.minimum.accumulate(steps[..., ::-1], axis=-1)[..., ::-1]


def _hochberg(p: Floats) -> Floats:
    return _from_above(np.arange(p.shape[-1], 0, -1) * p)


def _bh(p: Floats) -> Floats:
    m = p.shape[-1]
    return _from_above(m * p / np.arange(1, m + 1))


def _hommel(p: Floats) -> Floats:
    m = p.shape[-1]
    found = p.copy()
    for i in range(m):
        others = np.delete(p, i, axis=-1)
        for size in range(2, m + 1):
            # the others are in ascending order, their largest at the end
            chosen = np.concatenate([p[..., i : i + 1], others[..., m - size :]], axis=-1)
            simes = size * np.sort(chosen, axis=-1) / np.arange(1, size + 1)
            found[..., i] = np.maximum(found[..., i], simes.min(axis=-1))
    return found


_STEPS: dict[str, Callable[[Floats], Floats]] = {
    "bonferroni": _bonferroni,
    "holm": _holm,
    "hochberg": _hochberg,
    "hommel": _hommel,
    "bh": _bh,
}
