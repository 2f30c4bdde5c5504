"""Trimmed means of dependent occasions, batched.

Notation: ``y`` has shape (..., n, k), n subjects on k occasions. Of each occasion apart g = ⌊γn⌋
values are cut at each end, which leaves h = n − 2g; Winsorized values ``w`` have them pulled in
to the next one, and stay with their subjects. Formulas follow Wilcox, *Introduction to Robust
Estimation and Hypothesis Testing*, chapters 4, 5 and 8.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from robustrm.kernels import anova, location

Floats = NDArray[np.float64]

_TIE = 1e-10  # a resampled F this near the observed one counts as equal


def left(n: int, trim: float) -> int:
    """Return h = n − 2g, the number of subjects left after the cut."""
    return n - 2 * location.cut(n, trim)


def trimmed_means(y: Floats, trim: float) -> Floats:
    """Return the trimmed mean of every occasion, (..., k)."""
    return location.trimmed_mean(np.swapaxes(y, -1, -2), trim)


def winsorized_rows(y: Floats, trim: float) -> Floats:
    """Return the table (..., n, k) with each occasion Winsorized apart, rows kept together."""
    return np.swapaxes(location.winsorized(np.swapaxes(y, -1, -2), trim), -1, -2)


def winsorized_covariance(y: Floats, trim: float) -> Floats:
    """Return the covariance (..., k, k) of the Winsorized occasions, divisor n − 1."""
    w = winsorized_rows(y, trim)
    centred = w - w.mean(axis=-2, keepdims=True)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(np.swapaxes(centred, -1, -2) @ centred / np.int64(y.shape[-2] - 1))


# ── all occasions ─────────────────────────────────────────────────────────────────────────────


@dataclass(frozen=True, slots=True)
class TrimmedSquares:
    """Sums of squares behind F; every field has shape (...).

    ``qc`` is that of the trimmed means, ``qe`` the residual one of the Winsorized table, and
    ``rounding`` what the rounding of its values alone can give.
    """

    qc: Floats
    qe: Floats
    rounding: Floats

    def f_ratio(self, h: int, rounding: Floats | float = 0.0) -> Floats:
        """Return F, NaN where Qe is no more than the rounding of its terms.

        ``F = [Qc/(k − 1)] / [Qe/((h − 1)(k − 1))]``, where k − 1 cancels. A Qc within rounding
        is zero. `rounding` is that of the data behind the table, where it is larger.
        """
        least = np.maximum(self.rounding, rounding)
        qc = np.where(self.qc <= least, 0.0, self.qc)
        qe = np.where(self.qe <= least, np.nan, self.qe)
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            return np.asarray((h - 1) * (qc / qe))


def trimmed_squares(y: Floats, trim: float) -> TrimmedSquares:
    """Return Qc = h Σ_j (ȳ_tj − ȳ_t)² and Qe = Σ_ij (w_ij − w̄_j − w̄_i + w̄)².

    Without trimming these are the sums of squares of the analysis of variance.
    """
    n, k = y.shape[-2:]
    means = trimmed_means(y, trim)
    means = means - means.mean(axis=-1, keepdims=True)
    w = winsorized_rows(y, trim)
    # what is cut may be huge, and is no yardstick for the rounding of what is left
    largest = np.max(np.abs(w), axis=(-2, -1), initial=0.0)
    return TrimmedSquares(
        qc=left(n, trim) * np.sum(means**2, axis=-1),
        qe=anova.sums_of_squares(w).error,
        rounding=np.asarray(n * k * (4 * np.finfo(np.float64).eps * largest) ** 2),
    )


def trimmed_epsilons(y: Floats, trim: float) -> tuple[Floats, Floats]:
    """Return Box's epsilon of the Winsorized covariance, and its Huynh-Feldt form.

    The second is ``(n(k − 1)ε̂ − 2) / ((k − 1)(n − 1 − (k − 1)ε̂))`` within [1/(k − 1), 1], with
    n and not h: the covariance is that of n Winsorized rows. NaN where all contrasts are constant.
    """
    n, k = y.shape[-2:]
    box = anova.epsilon_greenhouse_geisser(anova.to_contrasts(winsorized_covariance(y, trim)))
    return box, np.where(np.isnan(box), np.nan, anova.epsilon_huynh_feldt(box, k, n - 1))


class Exceedances(NamedTuple):
    """Of the resamples drawn: those with F* >= F, and those without residual variation."""

    at_least: int
    flat: int
    draws: int


def bootstrap_t_exceedances(
    y: Floats, trim: float, resamples: Iterable[NDArray[np.int64]]
) -> Exceedances:
    """Count the resamples whose F is at least that of the table y (n, k).

    Every occasion is centred at its trimmed mean, which makes the null hypothesis true and
    leaves shape, spread and dependence as they are; whole rows are resampled. A resample with
    Qe = 0 counts as F* >= F. Wilcox, *Introduction to Robust Estimation and Hypothesis Testing*,
    chapter 8.

    Parameters
    ----------
    y : array (n, k)
    trim : float
        Share cut at each end.
    resamples : iterable of array (b, n)
        Row numbers of b resamples each; one block is in memory at a time.
    """
    h, table = left(len(y), trim), trimmed_squares(y, trim)
    observed = float(table.f_ratio(h))
    centred = y - trimmed_means(y, trim)
    at_least = flat = draws = 0
    for rows in resamples:
        f = trimmed_squares(centred[rows], trim).f_ratio(h, table.rounding)
        undefined = np.isnan(f)
        at_least += int(np.sum(undefined | (f >= observed * (1 - _TIE))))
        flat += int(np.sum(undefined))
        draws += len(f)
    return Exceedances(at_least, flat, draws)


# ── two occasions ─────────────────────────────────────────────────────────────────────────────


class Shift(NamedTuple):
    """A shift with its standard error, both (...) arrays; t has h − 1 degrees of freedom."""

    value: Floats
    standard_error: Floats


def trimmed_mean_difference(y: Floats, trim: float) -> Shift:
    """Compare the trimmed means of two occasions, y (..., n, 2): second − first.

    With ``d_j = (n − 1)s²_wj / (h(h − 1))`` and d_12 of the Winsorized covariance alike, the
    standard error is ``√(d_1 + d_2 − 2d_12)``. It is found from the differences of the
    Winsorized values, whose sum of squares is (n − 1)(s²_w1 + s²_w2 − 2s_w12): no cancellation.
    Yuen (1974) Biometrika 61:165-170 for independent samples; dependent ones after Wilcox,
    *Introduction to Robust Estimation and Hypothesis Testing*, section 5.9.
    """
    means = trimmed_means(y, trim)
    w = winsorized_rows(y, trim)
    error = _matched_error(w[..., 1] - w[..., 0], left(y.shape[-2], trim))
    return Shift(means[..., 1] - means[..., 0], error)


def difference_trimmed_mean(gaps: Floats, trim: float) -> Shift:
    """Return the trimmed mean of differences (..., n) with standard error s_w √((n−1)/(h(h−1))).

    Tukey & McLaughlin (1963) Sankhyā A 25:331-352. It is another quantity than the difference
    of the trimmed means: :func:`trimmed_mean_difference`.
    """
    error = _matched_error(location.winsorized(gaps, trim), left(gaps.shape[-1], trim))
    return Shift(location.trimmed_mean(gaps, trim), error)


def _matched_error(w: Floats, h: int) -> Floats:
    """Return √(SSD_w / (h(h − 1))) of Winsorized values (..., n); NaN or infinite for h = 1."""
    squares = np.sum((w - w.mean(axis=-1, keepdims=True)) ** 2, axis=-1)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(np.sqrt(squares / np.int64(h * (h - 1))))


def nominal_standard_error(sample: Floats, trim: float) -> Floats:
    """Return s_w / ((1 − 2γ)√n) of samples (..., n), γ the share asked for, not g/n.

    Wilcox, *Introduction to Robust Estimation and Hypothesis Testing*, chapter 3. The further γn
    lies above a whole number, the larger it is, and the more conservative its test.
    """
    n = sample.shape[-1]
    variance = location.winsorized_variance(sample, trim)
    return np.asarray(np.sqrt(variance / n) / (1 - 2 * trim))
