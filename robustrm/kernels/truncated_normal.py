"""Moments of a multivariate normal vector cut off on one side in every coordinate, batched.

One coordinate has a closed form. More are integrated one after the other by Gauss-Legendre rules
over the part of each that carries mass, the last in closed form: fixed nodes, so equal input
gives equal output.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

LARGEST = 6
"""Most coordinates that are integrated."""

_NODES = {2: 48, 3: 28, 4: 18, 5: 14, 6: 11}
"""Nodes an axis, by the number of coordinates: at most 11⁵ points."""
_TAIL = 26.0
"""Where the density has fallen by exp(−26), an axis ends."""
_BLOCK = 2_000_000
"""Most floats held for the nodes at a time."""
_LOG_ROOT_TWO_PI = 0.5 * np.log(2 * np.pi)


@dataclass(frozen=True, slots=True)
class Moments:
    """Log probability (m,), mean (m, d) and covariance (m, d, d) of the vectors cut off."""

    log_probability: Floats
    mean: Floats
    covariance: Floats


def cut_off_moments(mean: Floats, covariance: Floats, limit: Floats) -> Moments:
    """Return the moments of z ~ N(mean, covariance) given that z ≤ limit in every coordinate.

    Parameters
    ----------
    mean, limit : array (m, d)
        d is at most `LARGEST`; with more all moments are NaN.
    covariance : array (m, d, d)
        Positive definite.

    Returns
    -------
    Moments

    Notes
    -----
    With z = mean + L e, L the Cholesky factor, the coordinates of e are cut off one after the
    other, each given those before (the order of integration of Genz 1992, J Comput Graph Stat
    1:141-149, the strictest limit first). The density of e is smooth on the part that carries
    mass, so that few nodes do. At d = 2 the error is near rounding, to d = 4 it is below 1e-6;
    at d = 5 and 6 it is about 1e-4 at correlations of 0.7, and 1e-3 above 0.9.
    """
    m, d = mean.shape
    if d > LARGEST or not m:
        return Moments(np.full(m, np.nan), np.full((m, d), np.nan), np.full((m, d, d), np.nan))
    order = _strictest_first(mean, covariance, limit)
    room = np.take_along_axis(limit - mean, order, axis=1)
    arranged = np.take_along_axis(covariance, order[:, :, None], axis=1)
    arranged = np.take_along_axis(arranged, order[:, None, :], axis=2)
    factor = np.asarray(np.linalg.cholesky(arranged), dtype=np.float64)
    rows = max(1, _BLOCK // (_NODES.get(d, 1) ** (d - 1) * (d + 4)))
    parts = [
        _standard_moments(factor[start : start + rows], room[start : start + rows])
        for start in range(0, m, rows)
    ]
    first = np.concatenate([part.mean for part in parts])
    second = np.concatenate([part.covariance for part in parts])
    moved = np.einsum("mij,mj->mi", factor, first)
    spread = factor @ second @ np.swapaxes(factor, 1, 2)
    back = np.argsort(order, axis=1)
    spread = np.take_along_axis(spread, back[:, :, None], axis=1)
    return Moments(
        np.concatenate([part.log_probability for part in parts]),
        mean + np.take_along_axis(moved, back, axis=1),
        np.take_along_axis(spread, back[:, None, :], axis=2),
    )


def _strictest_first(mean: Floats, covariance: Floats, limit: Floats) -> Ints:
    deviation = np.sqrt(np.diagonal(covariance, axis1=1, axis2=2))
    # equal limits keep their order whatever the last bit of a parameter
    return np.argsort(np.round((limit - mean) / deviation, 6), axis=1, kind="stable")


def _standard_moments(factor: Floats, room: Floats) -> Moments:
    """Return mean and covariance of e, where L e ≤ room."""
    m, d = room.shape
    places = np.empty((m, 1, 0))
    log_weight = np.zeros((m, 1))
    nodes, weights = special.roots_legendre(_NODES.get(d, 1))
    for t in range(d - 1):
        bound = _bound(factor, room, places, t)
        reach = np.sqrt(np.minimum(bound, 0) ** 2 + 2 * _TAIL)
        top = np.minimum(bound, np.sqrt(2 * _TAIL))
        half = (top + reach)[..., None] / 2
        e = -reach[..., None] + half * (1 + nodes)
        added = np.log(half * weights) - e**2 / 2 - _LOG_ROOT_TWO_PI
        log_weight = (log_weight[..., None] + added).reshape(m, -1)
        places = np.concatenate(
            [np.repeat(places, nodes.size, axis=1), e.reshape(m, -1, 1)], axis=2
        )
    return _summed(places, log_weight, _bound(factor, room, places, d - 1))


def _bound(factor: Floats, room: Floats, places: Floats, t: int) -> Floats:
    """Return the limit of e_t given the coordinates before it, (m, points)."""
    taken = np.einsum("mpt,mt->mp", places, factor[:, t, :t])
    return np.asarray((room[:, t, None] - taken) / factor[:, t, t, None])


def _summed(places: Floats, log_weight: Floats, bound: Floats) -> Moments:
    """Add up the nodes; the last coordinate in closed form (one-sided truncated normal)."""
    m, _, before = places.shape
    log_p = special.log_ndtr(bound)
    mills = np.exp(-(bound**2) / 2 - _LOG_ROOT_TWO_PI - log_p)
    log_weight = log_weight + log_p
    largest = log_weight.max(axis=1, keepdims=True)
    weight = np.exp(log_weight - largest)
    total = weight.sum(axis=1, keepdims=True)
    weight /= total
    e = np.concatenate([places, -mills[..., None]], axis=2)
    mean = np.einsum("mp,mpt->mt", weight, e)
    centred = e - mean[:, None, :]
    spread = np.einsum("mp,mps,mpt->mst", weight, centred, centred, optimize=True)
    # variance of the last coordinate around its own mean at every node: 1 − b h − h²
    own = np.maximum(1 - bound * mills - mills**2, 0)
    spread[:, before, before] += (weight * own).sum(axis=1)
    return Moments((largest + np.log(total)).reshape(m), mean, spread)
