"""Bootstrap of whole rows: resamples, leave-one-out values and the limits they give.

One row is one subject. An estimator maps samples (..., n, k) to m estimands (..., m), and all of
them see the same resamples. Replicates have shape (..., B, m): B resamples, m estimands, and any
leading axes. Percentile and bootstrap-t limits follow Efron & Tibshirani (1993) An Introduction
to the Bootstrap, chapters 12 and 13; BCa follows Efron (1987) J Am Stat Assoc 82:171-185.

Quantiles. A tail of probability α takes the r-th smallest replicate for the lower limit and the
r-th largest for the upper one, r = ⌊(B + 1)α⌋ (Efron & Tibshirani 1993, section 12.5). B draws
cut the line into B + 1 gaps, each of which holds one more draw with the same probability, so r
gaps hold it with probability r/(B + 1) <= α: rounding down moves both limits outward. A tail
rarer than 1/(B + 1) gets the extreme replicate.

An undefined replicate (NaN) says nothing, so it counts as lying beyond both limits.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy import special

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Indices = NDArray[np.int64]
Estimator = Callable[[Floats], Floats]

NUMBERS = 1 << 16
"""Numbers that the resamples of one block hold: half a megabyte stays in a processor's cache."""

TIE = 1e-12  # closer than this share of the largest replicate, two values are equal


class Limits(NamedTuple):
    """Limits (..., m), and where the formula defines none: NaN there, and `degenerate` true."""

    low: Floats
    high: Floats
    degenerate: Bools


class Tails(NamedTuple):
    """Probabilities (..., m) below the lower and above the upper limit among the replicates."""

    below: Floats
    above: Floats


# ── resamples ─────────────────────────────────────────────────────────────────────────────────


def rows_in_block(numbers: int) -> int:
    """Return how many samples of that many numbers one block holds."""
    return max(1, NUMBERS // max(1, numbers))


def resampled_rows(rng: np.random.Generator, n: int, draws: int, block: int) -> Iterator[Indices]:
    """Yield the rows (b, n) of `draws` samples of n of n rows, at most `block` samples at once.

    One after the other they are the same whatever the block. That needs integers of 64 bits:
    those of fewer bits are cut from words that are thrown away at the end of each call.
    """
    for start in range(0, draws, block):
        yield rng.integers(0, n, size=(min(block, draws - start), n), dtype=np.int64)


def taken(y: Floats, rows: Indices) -> Floats:
    """Return the samples (..., *rows.shape, k) of whole rows of y (..., n, k).

    In memory each occasion stands by itself, so that a difference of two occasions runs along
    neighboring numbers.
    """
    return np.moveaxis(np.take(np.moveaxis(y, -1, 0), rows, axis=-1), 0, -1)


def replicates(
    y: Floats,
    estimator: Estimator,
    *,
    draws: int,
    rng: np.random.Generator,
    block: int | None = None,
) -> Floats:
    """Return the estimates (draws, m) in samples of whole rows of y (n, k) with replacement.

    Parameters
    ----------
    y : (n, k) one row a subject
    estimator : maps (..., n, k) to (..., m)
    draws : number of resamples
    rng : generator of the random rows
    block : resamples at once; by default as many as hold `NUMBERS` numbers
    """
    blocks = resampled_rows(rng, y.shape[0], draws, block or rows_in_block(y.size))
    return np.concatenate([estimator(taken(y, rows)) for rows in blocks], axis=0)


def jackknife(y: Floats, estimator: Estimator) -> Floats:
    """Return the estimates (..., n, m) of samples (..., n, k) with each row left out."""
    n = y.shape[-2]
    others = np.arange(n - 1) + (np.arange(n - 1) >= np.arange(n)[:, None])
    return np.asarray(estimator(taken(y, others)))


def jackknife_se(jackknifed: Floats) -> Floats:
    """Return the standard errors (..., m) from leave-one-out values (..., n, m).

    Efron & Tibshirani (1993), equation 11.5.
    """
    n = jackknifed.shape[-2]
    with np.errstate(invalid="ignore", over="ignore"):
        return np.asarray(np.sqrt((n - 1) * np.var(jackknifed, axis=-2)))


# ── order statistics ──────────────────────────────────────────────────────────────────────────


def ordered(replicates: Floats) -> Floats:
    """Return replicates (..., B, m) as (..., m, B), ascending, the undefined ones last."""
    return np.sort(np.ascontiguousarray(np.swapaxes(replicates, -1, -2)), axis=-1)


def order_statistics(ascending: Floats, tails: Tails) -> Limits:
    """Return the limits that leave the given tails of ordered replicates (..., m, B)."""
    draws = ascending.shape[-1]
    undefined = _undefined(ascending)
    low = _at(ascending, _rank(tails.below, draws) - 1 - undefined)
    high = _at(ascending, draws - _rank(tails.above, draws))
    known = np.isfinite(tails.below) & np.isfinite(tails.above)
    return without(Limits(low, high, ~known))


def without(limits: Limits, degenerate: Bools | bool = False) -> Limits:
    """Return the limits with more of them degenerate, and those that are not finite."""
    finite = np.isfinite(limits.low) & np.isfinite(limits.high)
    none = limits.degenerate | degenerate | ~finite
    return Limits(np.where(none, np.nan, limits.low), np.where(none, np.nan, limits.high), none)


def _undefined(ascending: Floats) -> Indices:
    if not np.isnan(ascending[..., -1]).any():  # NaN comes last
        return np.zeros(ascending.shape[:-1], dtype=np.int64)
    return np.asarray(np.count_nonzero(np.isnan(ascending), axis=-1), dtype=np.int64)


def _rank(tail: Floats, draws: int) -> Indices:
    # a guard for rounding: 10,000 · 0.025 may be 249.99999999999997
    rank = np.floor((draws + 1) * np.nan_to_num(tail) * (1 + 1e-12))
    return np.clip(rank, 1, draws).astype(np.int64)


def _at(ascending: Floats, index: Indices) -> Floats:
    """Return the value at an index (..., m), NaN before the first."""
    value = np.take_along_axis(ascending, np.maximum(index, 0)[..., None], axis=-1)[..., 0]
    return np.where(index < 0, np.nan, value)


def sampling_sd(tail: Floats, draws: int) -> Floats:
    """Return the SD of the share of B draws that falls in a tail of given probability."""
    return np.sqrt(tail * (1 - tail) / draws)


def quantile_range(ascending: Floats, share: Floats, sd: Floats, z: float, *, low: bool) -> Limits:
    """Return where the quantile of endless draws lies, from ordered replicates (..., m, B).

    The interval by order statistics, from the quantile of `share` − z · `sd` to that of
    `share` + z · `sd`, rounded outward. Degenerate where that reaches beyond all draws. Undefined
    replicates lie below a quantile that makes a lower limit (`low`), and above one that makes an
    upper limit.
    """
    draws = ascending.shape[-1]
    shift = _undefined(ascending) if low else 0
    first, last = share - z * sd, 1 - share - z * sd
    with np.errstate(invalid="ignore"):
        seen = np.minimum(first, last) * (draws + 1) >= 1
    return without(
        Limits(
            _at(ascending, _rank(first, draws) - 1 - shift),
            _at(ascending, draws - _rank(last, draws) - shift),
            ~seen,
        )
    )


# ── limits ────────────────────────────────────────────────────────────────────────────────────


def percentile(replicates: Floats, level: float) -> Limits:
    """Return the percentile limits of replicates (..., B, m).

    Degenerate where all replicates are equal, or too many undefined or infinite.
    """
    ascending = ordered(replicates)
    return without(order_statistics(ascending, equal_tails(ascending, level)), all_equal(ascending))


def equal_tails(ascending: Floats, level: float) -> Tails:
    """Return (1 − level)/2 on both sides, for ordered replicates (..., m, B)."""
    tail = np.full(ascending.shape[:-1], (1 - level) / 2)
    return Tails(tail, tail)


def all_equal(ascending: Floats) -> Bools:
    """Return where all defined replicates are equal but for rounding."""
    lowest = ascending[..., 0]
    highest = _at(ascending, ascending.shape[-1] - 1 - _undefined(ascending))
    with np.errstate(invalid="ignore"):
        slack = TIE * np.maximum(np.abs(lowest), np.abs(highest))
        return np.asarray(~(highest - lowest > np.where(np.isfinite(slack), slack, 0.0)))


def acceleration(jackknifed: Floats) -> Floats:
    """Return a (..., m) from leave-one-out values (..., n, m); NaN where all are equal.

    ``a = Σ u³ / (6 (Σ u²)^{3/2})`` with u the mean of the values less each value: Efron &
    Tibshirani (1993), equation 14.15.
    """
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        u = jackknifed.mean(axis=-2, keepdims=True) - jackknifed
        largest = np.abs(u).max(axis=-2, keepdims=True)
        equal = largest <= TIE * np.abs(jackknifed).max(axis=-2, keepdims=True)
        u = u / np.where(equal, np.nan, largest)  # a has no unit; the powers stay in range
        return np.asarray(np.sum(u**3, axis=-2) / (6 * np.sum(u**2, axis=-2) ** 1.5))


def share_below(observed: Floats, ascending: Floats) -> Floats:
    """Return the share (..., m) of ordered replicates below the estimate, ties counted half.

    Efron (1987) writes P(θ* < θ) for a continuous law, where ties play no part. In small samples
    they do. Counted half, the interval of −θ is the mirror image of that of θ, and a law that is
    symmetric about the estimate has no bias to correct; counted as above, it has a negative one.
    """
    draws = ascending.shape[-1]
    ends = np.abs(ascending[..., [0, -1]])
    size = np.where(np.isfinite(ends), ends, 0.0).max(axis=-1)
    slack = TIE * np.maximum(size, np.abs(observed))
    with np.errstate(invalid="ignore"):
        low, high = ((observed + by)[..., None] for by in (-slack, slack))
        below = np.count_nonzero(ascending < low, axis=-1)
        above = np.count_nonzero(ascending > high, axis=-1)
    return np.asarray((draws + below - above) / (2 * draws))


class Correction(NamedTuple):
    """Bias correction z₀ and acceleration a (..., m) of a BCa interval."""

    z0: Floats
    a: Floats

    def moved(self, z: float) -> tuple[Floats, Floats]:
        """Return z₀ + (z₀ + z)/(1 − a(z₀ + z)) and its derivative by z₀.

        Efron & Tibshirani (1993), equation 14.10. NaN where z₀ is infinite or the denominator
        is not positive: there the formula turns back on itself.
        """
        with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
            scale = 1 - self.a * (self.z0 + z)
            scale = np.where((scale > 0) & np.isfinite(self.z0), scale, np.nan)
            return self.z0 + (self.z0 + z) / scale, 1 + 1 / scale**2


def bca_tails(correction: Correction, level: float) -> Tails:
    """Return the tails of the BCa interval; both are NaN where either is not defined."""
    z = float(special.ndtri((1 + level) / 2))
    lower, upper = correction.moved(-z)[0], correction.moved(z)[0]
    known = np.where(np.isfinite(lower) & np.isfinite(upper), 0.0, np.nan)
    return Tails(special.ndtr(lower) + known, special.ndtr(-upper) + known)


def bca_sd(correction: Correction, z: float, draws: int) -> Floats:
    """Return the SD that B draws leave in the probability below a BCa limit.

    z₀ and the quantile come from the same draws. By the delta method, with p₀ the share below
    the estimate, c = (dα/dz₀)/φ(z₀) and both shares binomial:
    ``B Var = α(1 − α) + c² p₀(1 − p₀) − 2c (min(α, p₀) − α p₀)``.
    """
    moved, slope = correction.moved(z)
    alpha, p0 = special.ndtr(moved), special.ndtr(correction.z0)
    c = slope * np.exp((correction.z0**2 - moved**2) / 2)
    variance = alpha * (1 - alpha) + c**2 * p0 * (1 - p0)
    variance -= 2 * c * (np.minimum(alpha, p0) - alpha * p0)
    return np.sqrt(np.maximum(variance, 0.0) / draws)


def bca(observed: Floats, replicates: Floats, jackknifed: Floats, level: float) -> Limits:
    """Return the bias-corrected and accelerated limits.

    Degenerate where the estimate lies beyond all replicates, no row left out moves the estimate,
    1 − a(z₀ + z) <= 0, or the percentile limits are degenerate.

    Parameters
    ----------
    observed : (..., m) estimates
    replicates : (..., B, m) estimates in the resamples
    jackknifed : (..., n, m) estimates with each row left out
    level : in (0, 1)
    """
    ascending = ordered(replicates)
    correction = bca_correction(observed, ascending, jackknifed)
    limits = order_statistics(ascending, bca_tails(correction, level))
    return without(limits, all_equal(ascending))


def bca_correction(observed: Floats, ascending: Floats, jackknifed: Floats) -> Correction:
    """Return z₀ = Φ⁻¹(share below) and a, for ordered replicates (..., m, B)."""
    return Correction(special.ndtri(share_below(observed, ascending)), acceleration(jackknifed))


def has_se(observed: Floats, se: Floats) -> Bools:
    """Return where a standard error is positive beyond rounding, and finite."""
    with np.errstate(invalid="ignore"):
        return np.asarray(np.isfinite(se) & (se > TIE * np.abs(observed)))


def studentized(observed: Floats, replicates: Floats, replicate_se: Floats) -> Floats:
    """Return t* = (θ* − θ)/se* (..., B, m), NaN where a resample has no standard error."""
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        se = np.where(has_se(replicates, replicate_se), replicate_se, np.nan)
        return np.asarray((replicates - observed[..., None, :]) / se)


def bootstrap_t(
    observed: Floats, se: Floats, replicates: Floats, replicate_se: Floats, level: float
) -> Limits:
    """Return the bootstrap-t limits θ − t*₍₁₋α₎ se and θ − t*₍α₎ se, α = (1 − level)/2.

    Degenerate where the estimate, or too many resamples, have no standard error.

    Parameters
    ----------
    observed, se : (..., m) estimates and their standard errors
    replicates, replicate_se : (..., B, m) the same in the resamples
    level : in (0, 1)
    """
    ascending = ordered(studentized(observed, replicates, replicate_se))
    t = order_statistics(ascending, equal_tails(ascending, level))
    return from_t(observed, se, t)


def simultaneous_t(
    observed: Floats, se: Floats, replicates: Floats, replicate_se: Floats, level: float
) -> Limits:
    """Return limits θ ± c se that hold together, c the quantile of the largest |t*| of the m.

    An estimand without a standard error has no limits and stays out of the largest |t*|. The
    limits lie symmetrically about the estimate: with m = 1 they are the symmetric bootstrap-t
    limits, not the equal-tailed ones. Parameters as in :func:`bootstrap_t`.
    """
    t = studentized(observed, replicates, replicate_se)
    ascending = ordered(largest_t(t, has_se(observed, se)))
    tail = np.full(ascending.shape[:-1], 1 - level)
    c = order_statistics(ascending, Tails(tail, tail))
    return from_t(observed, se, Limits(-c.high, c.high, c.degenerate))


def from_t(observed: Floats, se: Floats, t: Limits) -> Limits:
    """Return θ − t se for the quantiles of t (..., m)."""
    with np.errstate(invalid="ignore", over="ignore"):
        limits = Limits(observed - t.high * se, observed - t.low * se, t.degenerate)
    return without(limits, ~has_se(observed, se))


def largest_t(t: Floats, usable: Bools) -> Floats:
    """Return the largest |t*| (..., B, 1) over the usable estimands; NaN where one is NaN."""
    usable = usable[..., None, :]
    return np.asarray(np.abs(np.where(usable, t, 0.0)).max(axis=-1, keepdims=True))
