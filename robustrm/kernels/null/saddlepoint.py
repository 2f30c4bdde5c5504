"""Saddlepoint approximation of the tails of a sum of independent scores, for many sums at once.

The tilt t that moves the mean of the sum to the observed place x (`tilting`) gives

    P(X >= x) = Q(w) + f(w) (1/u - 1/w),   w = sign(t) sqrt(2 (t x - K)),   u = t sqrt(K'')

with Q and f the tail and the density of the standard normal law (Lugannani & Rice 1980). Robinson
(1982) shows that such tails hold for permutation and sign-flip laws, with a relative error that
stays small far out. Where the sum moves on a lattice of step h, x is half a step lower and
u = (2/h) sinh(h t / 2) sqrt(K'') (Daniels 1987, second continuity correction). Other sums are
discrete too, but without a step: what is approximated there is the tail with half of the
probability of the observed value, so the other half of one arrangement is added.

References
----------
Daniels HE (1987). Tail probability approximations. International Statistical Review 55:37-48.
Lugannani R, Rice S (1980). Saddle point approximation for the distribution of the sum of
independent random variables. Advances in Applied Probability 12:475-490.
Robinson J (1982). Saddlepoint approximations for permutation tests and confidence intervals.
Journal of the Royal Statistical Society B 44:91-101.
"""

from __future__ import annotations

import math

import numpy as np
from scipy import special

from robustrm.kernels.null.forms import TOLERANCE, Side
from robustrm.kernels.null.tables import Array
from robustrm.kernels.null.tilting import cumulants, tilt_to

# Closer to the mean than this the two poles cancel and their limit is used.
NEAR_MEAN = 1e-3
# Scores held at once: 2^20 float64 are 8 MB.
BLOCK = 1 << 20


def log_upper_tails(place: Array, values: Array, logs: Array, counts: Array, step: Array) -> Array:
    """Approximate log P(X >= place) for sums X of independent scores.

    Parameters
    ----------
    place : ndarray, shape (...)
        Observed sums.
    values : ndarray, shape (..., g, m)
        Scores of each table, any value for those of no probability.
    logs : ndarray, shape (..., g, m)
        Logarithms of the probabilities, -inf for filling.
    counts : ndarray, shape (..., g)
        How often each table occurs.
    step : ndarray, shape (...)
        Distance of neighboring attainable sums, 0 where they have none.

    Returns
    -------
    ndarray, shape (...)
        At most 0. At the largest attainable sum the probability is exact.
    """
    mean = cumulants(np.zeros(place.shape), values, logs, counts).mean
    is_far = place - step / 2 >= mean
    sign = np.where(is_far, 1.0, -1.0)
    # A tail on the near side is one less the strict tail on the other: half a step the other way.
    at = sign * (place - step / 2)
    turned = sign[..., None, None] * values
    half = np.where(step > 0, 0.0, 0.5)
    end, log_end, log_one = _ends(turned, logs, counts)
    near_end = end - TOLERANCE * np.maximum(np.abs(end), np.abs(at))
    is_end, is_top = at >= near_end, place >= near_end
    inner = np.where(is_end, sign * mean, at)
    with np.errstate(all="ignore"):
        log_tail = _log_tail(inner, turned, logs, counts, step)
        # The other half of the observed arrangement counts in its own tail, not in the other.
        log_half = log_one + np.log(half)
        own = np.where(is_top, log_end, np.logaddexp(log_tail, log_half))
        other = np.logaddexp(np.log1p(-np.exp(np.minimum(log_tail, 0.0))), log_half)
        other = np.where(is_end, 0.0, other)  # nothing lies beyond the end
    return np.asarray(np.minimum(np.where(is_far, own, other), 0.0))


def _ends(values: Array, logs: Array, counts: Array) -> tuple[Array, Array, Array]:
    """Largest sum, the logarithm of its probability, and that of the least likely arrangement."""
    real = np.where(np.isfinite(logs), values, -np.inf)
    top = real.max(axis=-1, keepdims=True)
    largest = (top[..., 0] * counts).sum(axis=-1)
    at_top = np.where(real == top, np.exp(logs), 0.0).sum(axis=-1)
    least = np.where(np.isfinite(logs), logs, np.inf).min(axis=-1)
    return largest, (np.log(at_top) * counts).sum(axis=-1), (least * counts).sum(axis=-1)


def _log_tail(place: Array, values: Array, logs: Array, counts: Array, step: Array) -> Array:
    """Logarithm of the Lugannani-Rice tail at places not below the mean."""
    tilt = np.maximum(tilt_to(place, values, logs, counts), 0.0)
    found = cumulants(tilt, values, logs, counts)
    w = np.sqrt(np.maximum(2 * (tilt * place - found.log), 0.0))
    bent = np.where(step > 0, 2 / step * np.sinh(step * tilt / 2), tilt)
    poles = 1 / (bent * np.sqrt(found.variance)) - 1 / w
    limit = -_third(tilt, values, logs, counts) / (6 * found.variance**1.5)
    poles = np.where(w > NEAR_MEAN, poles, np.where(found.variance > 0, limit, 0.0))
    mills = math.sqrt(math.pi / 2) * special.erfcx(w / math.sqrt(2))
    return np.asarray(np.log(mills + poles) - np.square(w) / 2 - math.log(2 * math.pi) / 2)


def _third(tilt: Array, values: Array, logs: Array, counts: Array) -> Array:
    """Third cumulant K''' of the tilted sum."""
    powers = tilt[..., None, None] * values + logs
    shares = special.softmax(powers, axis=-1)
    centered = values - (shares * values).sum(axis=-1, keepdims=True)
    return np.asarray(((shares * centered**3).sum(axis=-1) * counts).sum(axis=-1))


def log_tails(
    place: Array, values: Array, logs: Array, counts: Array, step: Array, side: Side
) -> Array:
    """Approximate the logarithm of p for the side that counts; parameters as `log_upper_tails`."""
    upper = lower = np.zeros(place.shape)
    if side != "less":
        upper = log_upper_tails(place, values, logs, counts, step)
    if side != "greater":
        lower = log_upper_tails(-place, -values, logs, counts, step)
    if side == "two-sided":
        return np.minimum(np.minimum(upper, lower) + math.log(2), 0.0)
    return upper if side == "greater" else lower


def steps(values: Array, logs: Array) -> Array:
    """Lattice step of the sums of whole-number scores (..., g, m), 0 for other scores.

    The greatest common divisor of the differences within the tables.
    """
    real = np.isfinite(logs)
    least = np.where(real, values, np.inf).min(axis=-1, keepdims=True)
    gaps = np.where(real, values - least, 0.0)
    whole = (np.rint(gaps) == gaps).all(axis=(-2, -1)) & (np.abs(gaps).max(axis=(-2, -1)) < 2**53)
    units = np.where(whole[..., None, None], gaps, 0.0).astype(np.int64)
    return np.asarray(np.gcd.reduce(np.gcd.reduce(units, axis=-1), axis=-1).astype(np.float64))


def shared_flip_log_p(scores: Array, *, side: Side = "two-sided") -> Array:
    """Approximate log p of the sum of each test's scores when every score may change its sign.

    Parameters
    ----------
    scores : ndarray, shape (tests, n)
        Signed ranks, or differences; zeros play no part.
    side : {"two-sided", "greater", "less"}

    Returns
    -------
    ndarray, shape (tests,)

    Notes
    -----
    Use whole numbers where there are some (twice the mid-ranks): they get the lattice correction.
    """
    block = max(1, BLOCK // (2 * max(scores.shape[1], 1)))
    found = np.zeros(len(scores))
    for start in range(0, len(scores), block):
        part = scores[start : start + block]
        values = np.stack([part, -part], axis=-1)
        logs = np.full(values.shape, -math.log(2))
        found[start : start + block] = log_tails(
            part.sum(axis=-1), values, logs, np.ones(part.shape), steps(values, logs), side
        )
    return found
