"""Maximum likelihood of a multivariate normal sample with censored and missing cells, batched.

Mean vector and covariance are free (saturated). A cell is measured, missing, or known only to
lie below or above a limit; all enter one likelihood. Notation: ``y`` has shape (..., n, k), n
subjects on k occasions.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from robustrm.kernels.truncated_normal import LARGEST, cut_off_moments

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Ints = NDArray[np.int64]

TOLERANCE = 1e-8
"""Converged: no parameter moves by more, in units of the standard deviations."""
MOST_CYCLES = 200
"""Cycles of three EM steps each."""
_SINGULAR = 1e-6
"""Smallest eigenvalue of the correlations of a fit that counts as regular."""
_LOG_TWO_PI = math.log(2 * math.pi)


@dataclass(frozen=True, slots=True)
class CensoredNormal:
    """A fit: mean (..., k), covariance (..., k, k), log likelihood (...), converged (...).

    The covariance has divisor n. Where the likelihood has no maximum, or none was reached, the
    numbers are NaN and `converged` is False.
    """

    mean: Floats
    covariance: Floats
    log_likelihood: Floats
    converged: Bools


def fit(
    values: Floats,
    below: Bools,
    above: Bools,
    *,
    weights: Floats | None = None,
    start: CensoredNormal | None = None,
    all_or_none: bool = False,
) -> CensoredNormal:
    """Return the maximum-likelihood fit of every sample.

    Parameters
    ----------
    values : array (..., n, k)
        NaN where missing; the limit where `below` or `above`.
    below, above : array (..., n, k) of bool
        Cells known to lie below, or above, the number in `values`.
    weights : array (..., n), optional
        Weights of the rows, 1 if not given; 0 leaves a row out. Leading axes broadcast.
    start : CensoredNormal, optional
        Where to start; leading axes broadcast.
    all_or_none : bool, default False
        Give the search up, with NaN for all, as soon as one sample has no maximum.

    Returns
    -------
    CensoredNormal

    Notes
    -----
    EM (Dempster, Laird & Rubin 1977, J R Stat Soc B 39:1-38): a row adds its mean and covariance
    given its measured and censored cells. Censored cells given the measured ones are a normal
    vector cut off at the limits, missing cells a regression on both (Little & Rubin, Statistical
    Analysis with Missing Data, chapter 11). Steps are extrapolated by the scheme S3 of Varadhan
    & Roland (2008, Scand J Stat 35:335-353), an extrapolation that loses likelihood is undone.

    NaN where n ≤ k, where an occasion does not vary or has fewer than two measured values, where
    a row has more than six censored cells, and where the covariance runs into a singular one.
    """
    y, low, high, w = _settled(values, below, above, weights)
    lead, (n, k) = y.shape[:-2], y.shape[-2:]
    y, low, high = y.reshape(-1, n, k), low.reshape(-1, n, k), high.reshape(-1, n, k)
    w = w.reshape(-1, n)
    mean, covariance, fits = _starts(y, low, high, w, start, lead)
    patterns = _patterns(y, low, high, w)
    search = _Search(patterns, w.sum(axis=1), mean, covariance, fits)
    search.run(all_or_none=all_or_none)
    return CensoredNormal(
        search.mean.reshape(*lead, k),
        search.covariance.reshape(*lead, k, k),
        search.log_likelihood.reshape(lead),
        search.converged.reshape(lead),
    )


def leave_one_out(
    values: Floats, below: Bools, above: Bools, fitted: CensoredNormal
) -> CensoredNormal:
    """Return the fits of one sample (n, k) without each row in turn, leading axis n.

    `fitted` is the fit of the whole sample, from which the search starts. A jackknife needs them
    all: where one has no maximum, all are NaN.
    """
    weights = 1 - np.eye(values.shape[-2])
    return fit(values, below, above, weights=weights, start=fitted, all_or_none=True)


def _settled(
    values: Floats, below: Bools, above: Bools, weights: Floats | None
) -> tuple[Floats, Bools, Bools, Floats]:
    y, low, high = np.broadcast_arrays(np.asarray(values, dtype=np.float64), below, above)
    w = np.ones(y.shape[:-1]) if weights is None else np.asarray(weights, dtype=np.float64)
    lead = np.broadcast_shapes(y.shape[:-2], w.shape[:-1])
    n, k = y.shape[-2:]
    y, low, high = (np.broadcast_to(array, (*lead, n, k)) for array in (y, low, high))
    w = np.where(np.isnan(y).all(axis=-1), 0.0, np.broadcast_to(w, (*lead, n)))
    return y, low, high, w


def _starts(
    y: Floats,
    low: Bools,
    high: Bools,
    w: Floats,
    start: CensoredNormal | None,
    lead: tuple[int, ...],
) -> tuple[Floats, Floats, Bools]:
    """Return starting means and covariances, and which samples can have a fit at all."""
    k = y.shape[-1]
    present = ~np.isnan(y) & (w > 0)[..., None]
    measured = present & ~low & ~high
    share = w[..., None] * present
    total = np.maximum(share.sum(axis=1), 1e-300)
    filled = np.where(present, y, 0.0)
    mean = (share * filled).sum(axis=1) / total
    gaps = np.where(present, filled - mean[:, None, :], 0.0)
    variance = (share * gaps**2).sum(axis=1) / total
    size = np.max(np.abs(filled), axis=1)
    fits = ((w > 0).sum(axis=1) > k) & (measured.sum(axis=1) >= 2).all(axis=1)
    fits &= (variance > 1e-24 * np.maximum(size, 1e-150) ** 2).all(axis=1)
    fits &= ((low | high).sum(axis=2) <= LARGEST).all(axis=1)
    covariance = variance[:, :, None] * np.eye(k)
    if start is not None:
        given = np.broadcast_to(start.mean, (*lead, k)).reshape(-1, k)
        spread = np.broadcast_to(start.covariance, (*lead, k, k)).reshape(-1, k, k)
        use = np.broadcast_to(start.converged, lead).reshape(-1)
        mean = np.where(use[:, None], given, mean)
        covariance = np.where(use[:, None, None], spread, covariance)
    return mean, covariance, fits


@dataclass(frozen=True, slots=True)
class _Pattern:
    """Rows of any sample with the same cells measured, censored and missing."""

    measured: Ints
    censored: Ints
    missing: Ints
    sample: Ints
    values: Floats
    signs: Floats
    weight: Floats

    def take(self, rows: Ints | Bools) -> _Pattern:
        """Return some of the rows."""
        return replace(
            self,
            sample=self.sample[rows],
            values=self.values[rows],
            signs=self.signs[rows],
            weight=self.weight[rows],
        )


def _patterns(y: Floats, low: Bools, high: Bools, w: Floats) -> tuple[_Pattern, ...]:
    k = y.shape[-1]
    states = np.where(np.isnan(y), 2, np.where(low | high, 1, 0))
    codes = states @ 3 ** np.arange(k)
    found = []
    for code in np.unique(codes[w > 0]).tolist():
        sample, row = np.nonzero((codes == code) & (w > 0))
        state = states[sample[0], row[0]]
        signs = np.where(high[sample, row], -1.0, 1.0)
        pattern = _Pattern(
            measured=np.flatnonzero(state == 0),
            censored=np.flatnonzero(state == 1),
            missing=np.flatnonzero(state == 2),
            sample=sample,
            values=y[sample, row],
            signs=signs,
            weight=w[sample, row],
        )
        found.append(pattern if pattern.measured.size else _merged(pattern))
    return tuple(found)


def _merged(pattern: _Pattern) -> _Pattern:
    """Join the rows of a sample that have the same limits and nothing measured: one integral."""
    keys = np.concatenate(
        [
            pattern.sample[:, None],
            pattern.values[:, pattern.censored],
            pattern.signs[:, pattern.censored],
        ],
        axis=1,
    )
    _, first, inverse = np.unique(keys, axis=0, return_index=True, return_inverse=True)
    weight = np.zeros(first.size)
    np.add.at(weight, inverse.reshape(-1), pattern.weight)
    return replace(pattern.take(first), weight=weight)


@dataclass(slots=True)
class _Expected:
    """What rows add: expected values (m, k), their covariance (m, k, k), log likelihood (m,)."""

    values: Floats
    covariance: Floats
    log_likelihood: Floats


def _expected(pattern: _Pattern, mean: Floats, covariance: Floats) -> _Expected:
    """Return the expectation of rows under parameters (m, k) and (m, k, k)."""
    m, k = mean.shape
    seen, cut, gap = pattern.measured, pattern.censored, pattern.missing
    known = np.concatenate([seen, cut])
    values, spread, log_p = np.zeros((m, k)), np.zeros((m, k, k)), np.zeros(m)
    values[:, seen] = pattern.values[:, seen]
    if seen.size:
        log_p += _log_density(
            values[:, seen] - mean[:, seen], covariance[:, _at(seen, seen)[0], _at(seen, seen)[1]]
        )
    if cut.size:
        centre, within = _given(values, mean, covariance, seen, cut)
        sign = pattern.signs[:, cut]
        # a lower bound becomes an upper one when the axis is turned round
        moments = cut_off_moments(
            sign * centre,
            sign[:, :, None] * within * sign[:, None, :],
            sign * pattern.values[:, cut],
        )
        values[:, cut] = sign * moments.mean
        spread[:, cut[:, None], cut] = sign[:, :, None] * moments.covariance * sign[:, None, :]
        log_p += moments.log_probability
    if gap.size:
        centre, within = _given(values, mean, covariance, known, gap)
        slopes = _slopes(covariance, known, gap)
        known_spread = spread[:, known[:, None], known]
        cross = slopes @ known_spread
        values[:, gap] = centre
        spread[:, gap[:, None], gap] = within + cross @ np.swapaxes(slopes, 1, 2)
        spread[:, gap[:, None], known] = cross
        spread[:, known[:, None], gap] = np.swapaxes(cross, 1, 2)
    return _Expected(values, spread, log_p)


def _at(rows: Ints, columns: Ints) -> tuple[Ints, Ints]:
    return rows[:, None], columns


def _log_density(gaps: Floats, covariance: Floats) -> Floats:
    factor = np.linalg.cholesky(covariance)
    z = np.linalg.solve(factor, gaps[..., None])[..., 0]
    log_root = np.log(np.diagonal(factor, axis1=1, axis2=2)).sum(axis=1)
    return np.asarray(-(z**2).sum(axis=1) / 2 - log_root - gaps.shape[1] * _LOG_TWO_PI / 2)


def _slopes(covariance: Floats, known: Ints, wanted: Ints) -> Floats:
    """Return the regression of `wanted` on `known`, (m, wanted, known)."""
    if not known.size:
        return np.zeros((covariance.shape[0], wanted.size, 0))
    own = covariance[:, known[:, None], known]
    return np.swapaxes(np.linalg.solve(own, covariance[:, known[:, None], wanted]), 1, 2)


def _given(
    values: Floats, mean: Floats, covariance: Floats, known: Ints, wanted: Ints
) -> tuple[Floats, Floats]:
    """Return conditional mean and covariance of `wanted` cells given the `known` ones."""
    slopes = _slopes(covariance, known, wanted)
    gaps = values[:, known] - mean[:, known]
    centre = mean[:, wanted] + (slopes @ gaps[..., None])[..., 0]
    within = covariance[:, wanted[:, None], wanted]
    within = within - slopes @ covariance[:, known[:, None], wanted]
    return centre, (within + np.swapaxes(within, 1, 2)) / 2


class _Search:
    """EM steps with extrapolation, all samples side by side."""

    def __init__(
        self,
        patterns: tuple[_Pattern, ...],
        total: Floats,
        mean: Floats,
        covariance: Floats,
        fits: Bools,
    ) -> None:
        self.patterns, self.total = patterns, np.maximum(total, 1e-300)
        self.mean, self.covariance = mean.copy(), covariance.copy()
        self.log_likelihood = np.full(total.size, np.nan)
        self.converged = np.zeros(total.size, dtype=np.bool_)
        self.active = fits.copy()

    def run(self, *, all_or_none: bool) -> None:
        for _ in range(MOST_CYCLES):
            self.active &= self._regular(self.mean, self.covariance)
            lost = ~(self.active | self.converged)
            if not self.active.any() or (all_or_none and lost.any()):
                break
            self._cycle()
        if all_or_none and not self.converged.all():
            self.converged[:] = False
        failed = ~self.converged
        self.mean[failed], self.covariance[failed] = np.nan, np.nan
        self.log_likelihood[failed] = np.nan

    def _cycle(self) -> None:
        """Two EM steps, an extrapolation, and a step from there where it is safe."""
        zero = (self.mean, self.covariance)
        one, start_log = self._step(*zero, self.active)
        two, one_log = self._step_if_regular(one)
        moved = self._size(zero, one)
        done = self.active & (moved <= TOLERANCE)
        self.log_likelihood = np.where(self.active, start_log, self.log_likelihood)
        self.mean, self.covariance = _chosen(self.active, two, zero)
        self.converged |= done
        self.active &= ~done
        if not self.active.any():
            return
        far = self._extrapolated(zero, one, two)
        trial = self.active & self._regular(*far)
        if not trial.any():
            return
        near, far_log = self._step(*far, trial)
        better = trial & (far_log >= one_log) & self._regular(*near)
        self.mean, self.covariance = _chosen(better, near, (self.mean, self.covariance))

    def _step_if_regular(
        self, parameters: tuple[Floats, Floats]
    ) -> tuple[tuple[Floats, Floats], Floats]:
        regular = self.active & self._regular(*parameters)
        following, log_likelihood = self._step(*parameters, regular)
        self.active &= regular | (self._size((self.mean, self.covariance), parameters) <= TOLERANCE)
        return _chosen(regular, following, parameters), log_likelihood

    def _step(
        self, mean: Floats, covariance: Floats, which: Bools
    ) -> tuple[tuple[Floats, Floats], Floats]:
        """Return the parameters after one EM step, and the log likelihood before it."""
        b, k = mean.shape
        log_likelihood = np.zeros(b)
        sums, products = np.zeros((b, k)), np.zeros((b, k, k))
        for sample, weight, row in self._rows(mean, covariance, which):
            # around the present mean: squares of large values would lose digits
            gaps = row.values - mean[sample]
            square = gaps[:, :, None] * gaps[:, None, :] + row.covariance
            np.add.at(sums, sample, weight[:, None] * gaps)
            np.add.at(products, sample, weight[:, None, None] * square)
            np.add.at(log_likelihood, sample, weight * row.log_likelihood)
        shift = sums / self.total[:, None]
        spread = products / self.total[:, None, None] - shift[:, :, None] * shift[:, None, :]
        spread = (spread + np.swapaxes(spread, 1, 2)) / 2
        return _chosen(which, (mean + shift, spread), (mean, covariance)), log_likelihood

    def _rows(
        self, mean: Floats, covariance: Floats, which: Bools
    ) -> Iterator[tuple[Ints, Floats, _Expected]]:
        for pattern in self.patterns:
            used = pattern.take(which[pattern.sample])
            if used.sample.size:
                at = used.sample
                yield at, used.weight, _expected(used, mean[at], covariance[at])

    def _regular(self, mean: Floats, covariance: Floats) -> Bools:
        variance = np.diagonal(covariance, axis1=1, axis2=2)
        finite = np.isfinite(mean).all(axis=1) & np.isfinite(covariance).all(axis=(1, 2))
        positive = np.where(np.isfinite(variance), variance, 0) > 0
        usable: Bools = np.asarray(finite & positive.all(axis=1))
        k = mean.shape[1]
        safe = np.where(usable[:, None, None], covariance, np.eye(k))
        deviation = np.sqrt(np.diagonal(safe, axis1=1, axis2=2))
        correlation = safe / (deviation[:, :, None] * deviation[:, None, :])
        return np.asarray(usable & (np.linalg.eigvalsh(correlation)[:, 0] > _SINGULAR))

    def _size(self, one: tuple[Floats, Floats], two: tuple[Floats, Floats]) -> Floats:
        """Return the largest move of a parameter, in units of the standard deviations."""
        deviation = np.sqrt(np.maximum(np.diagonal(one[1], axis1=1, axis2=2), 1e-300))
        unit = deviation[:, :, None] * deviation[:, None, :]
        means = np.abs((two[0] - one[0]) / deviation).max(axis=1)
        return np.asarray(np.maximum(means, np.abs((two[1] - one[1]) / unit).max(axis=(1, 2))))

    def _extrapolated(
        self, zero: tuple[Floats, Floats], one: tuple[Floats, Floats], two: tuple[Floats, Floats]
    ) -> tuple[Floats, Floats]:
        """Return θ0 − 2αr + α²v, α = −|r|/|v| (Varadhan & Roland 2008, scheme S3)."""
        flat = [np.concatenate([m, c.reshape(m.shape[0], -1)], axis=1) for m, c in (zero, one, two)]
        deviation = np.sqrt(np.maximum(np.diagonal(zero[1], axis1=1, axis2=2), 1e-300))
        unit = deviation[:, :, None] * deviation[:, None, :]
        scale = np.concatenate([deviation, unit.reshape(deviation.shape[0], -1)], axis=1)
        first = flat[1] - flat[0]
        bend = flat[2] - flat[1] - first
        length, curve = (np.sqrt(((v / scale) ** 2).sum(axis=1)) for v in (first, bend))
        alpha = -np.maximum(length / np.maximum(curve, 1e-300), 1.0)[:, None]
        alpha = np.maximum(alpha, -1e4)
        far = flat[0] - 2 * alpha * first + alpha**2 * bend
        k = zero[0].shape[1]
        return far[:, :k], far[:, k:].reshape(-1, k, k)


def _chosen(
    which: Bools, one: tuple[Floats, Floats], other: tuple[Floats, Floats]
) -> tuple[Floats, Floats]:
    return (
        np.where(which[:, None], one[0], other[0]),
        np.where(which[:, None, None], one[1], other[1]),
    )
