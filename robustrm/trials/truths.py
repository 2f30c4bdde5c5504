"""What intervals are to cover: the estimands of a design, by quadrature.

A difference is last − first occasion, with law F. Its estimands are functionals of F:

    mean, SD            in closed form
    median              root of F(x) = 1/2
    trimmed mean, Winsorized SD
                        ∫ x dF and ∫ x² dF between two quantiles, by parts from ∫ F and ∫ x F
    pseudo-median       half the root of P(D + D' <= s) = 1/2, D' an independent copy
    rank-biserial       P(D + D' > 0) − P(D + D' < 0): what (T⁺ − T⁻)/(n(n+1)/2) tends to

Symmetric errors are scale mixtures of normal laws, so that F is a sum of normal ones. The
difference of two lognormal values of a subject is normal on logs given its level and its first
error; those two are summed over a grid. Sums over equally spaced points of smooth functions that
vanish at both ends are accurate far beyond what is needed (Trefethen & Weideman 2014, SIAM Review
56:385-458). All trimming is 20% at each end of the law.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Protocol

import numpy as np
from numpy.typing import NDArray
from scipy import special

from robustrm.errors import ArgumentError
from robustrm.kernels.effect_sizes import winsorized_normal_sd
from robustrm.simulation import TRIM, Design, lognormal_trimmed_mean

Floats = NDArray[np.float64]

# Points x = sinh(t): far into the tails, and close together in the middle.
_T = np.arange(-240, 241) / 20
_X = np.sinh(_T)
_DX = np.cosh(_T) / 20
# Points and weights of a standard normal variable.
_Z = np.arange(-50, 51) / 6
_WEIGHT = np.exp(-(_Z**2) / 2) / math.sqrt(2 * math.pi) / 6
# Parts of a mixture with less weight leave no trace in 12 digits.
_UNSEEN = 1e-16
# Points of an integral between two quantiles.
_NODES, _NODE_WEIGHTS = np.polynomial.legendre.leggauss(80)


class Law(Protocol):
    """A continuous law on the line."""

    def cdf(self, x: Floats) -> Floats:
        """Return P(D <= x)."""

    def pdf(self, x: Floats) -> Floats:
        """Return the density at x."""


@dataclass(frozen=True, slots=True, eq=False)
class Mixture:
    """Mixture of normal laws with a common centre."""

    centre: float
    weights: Floats
    variances: Floats

    def cdf(self, x: Floats) -> Floats:
        """Return P(D <= x)."""
        z = (np.asarray(x)[..., None] - self.centre) / np.sqrt(self.variances)
        return np.asarray(special.ndtr(z) @ self.weights)

    def pdf(self, x: Floats) -> Floats:
        """Return the density at x."""
        z2 = (np.asarray(x)[..., None] - self.centre) ** 2 / self.variances
        normal = np.exp(-z2 / 2) / np.sqrt(2 * math.pi * self.variances)
        return np.asarray(normal @ self.weights)


@dataclass(frozen=True, slots=True, eq=False)
class LognormalDifference:
    """Law of exp(τb) [exp(δ + σe') − exp(σe)], b, e and e' independent standard normal."""

    between_sd: float
    within_sd: float
    shift: float

    def _given(self, x: Floats) -> tuple[Floats, Floats]:
        """Return the size that exp(δ + σe') must have, and its z, given b and e: (..., b, e)."""
        level, error = np.exp(self.between_sd * _Z)[:, None], np.exp(self.within_sd * _Z)
        size = np.asarray(x)[..., None, None] / level + error
        with np.errstate(divide="ignore", invalid="ignore"):
            z = np.where(size > 0, (np.log(size) - self.shift) / self.within_sd, -np.inf)
        return size, z

    def cdf(self, x: Floats) -> Floats:
        """Return P(D <= x)."""
        return self._in_parts(x, lambda part: special.ndtr(self._given(part)[1]))

    def pdf(self, x: Floats) -> Floats:
        """Return the density at x."""

        def density(part: Floats) -> Floats:
            size, z = self._given(part)
            level = np.exp(self.between_sd * _Z)[:, None]
            with np.errstate(divide="ignore", invalid="ignore"):
                found = np.exp(-(z**2) / 2) / (size * level * self.within_sd)
            return np.where(size > 0, found, 0.0) / math.sqrt(2 * math.pi)

        return self._in_parts(x, density)

    @staticmethod
    def _in_parts(x: Floats, given: Callable[[Floats], Floats]) -> Floats:
        """Sum over b and e, a few points of x at a time."""
        flat = np.atleast_1d(np.asarray(x, dtype=np.float64)).ravel()
        parts = [
            given(flat[start : start + 32]) @ _WEIGHT @ _WEIGHT for start in range(0, flat.size, 32)
        ]
        return np.asarray(np.concatenate(parts).reshape(np.shape(x)))


def error_difference(design: Design, shift: float = 0.0, extra: float = 0.0) -> Mixture:
    """Return the law of shift + σ(e' − e) + a normal variable of variance `extra`.

    Student's t on 3 degrees of freedom is normal given a χ²₃ variable g = exp(t), with variance
    3/g; over its SD, 1/g. The log scale of lognormal errors is normal.
    """
    if design.errors in ("normal", "lognormal"):
        weights, variances = np.ones(1), np.ones(1)
    elif design.errors == "contaminated":
        weights, variances = np.array([0.9, 0.1]), np.array([1.0, 9.0]) / 1.8
    elif design.errors == "t3":
        t = np.arange(-60, 16) * 0.3
        weights = np.exp(1.5 * t - np.exp(t) / 2)
        weights, variances = weights / weights.sum(), np.exp(-t)
    else:
        raise ArgumentError(f"`errors` must be symmetric or lognormal, got {design.errors!r}.")
    # each pair of parts once, and none too rare to be seen
    i, j = np.triu_indices(weights.size)
    joint = weights[i] * weights[j] * np.where(i == j, 1, 2)
    seen = joint > _UNSEEN
    both = (variances[i] + variances[j])[seen]
    return Mixture(shift, joint[seen], design.within_sd**2 * both + extra)


def difference_law(design: Design) -> Law:
    """Return the law of last − first occasion of one subject."""
    shift = design.shift[-1] - design.shift[0]
    if design.errors == "lognormal":
        return LognormalDifference(design.between_sd, design.within_sd, shift)
    return error_difference(design, shift)


def _root(rises: Callable[[float], float], low: float, high: float) -> float:
    """Return where an increasing function crosses zero, by bisection to 12 digits."""
    while high - low > 1e-12 * max(1.0, abs(low)):
        middle = (low + high) / 2
        low, high = (middle, high) if rises(middle) < 0 else (low, middle)
    return (low + high) / 2


def quantile(law: Law, p: float) -> float:
    """Return the p quantile of a law."""
    return _root(lambda x: float(law.cdf(np.array(x))) - p, -1e3, 1e3)


def sum_cdf(law: Law) -> Callable[[float], float]:
    """Return s -> P(D + D' <= s) for independent D and D' of one law: ∫ F(s − x) dF(x)."""
    weights = law.pdf(_X) * _DX
    return lambda s: float(law.cdf(s - _X) @ weights)


def pseudo_median(law: Law) -> float:
    """Return the median of the average of two independent copies."""
    below = sum_cdf(law)
    # P(D + D' <= 2q) is at most 2 P(D <= q), and likewise from above
    low, high = 2 * quantile(law, 0.24), 2 * quantile(law, 0.76)
    return _root(lambda s: below(s) - 0.5, low, high) / 2


def trimmed_moments(law: Law) -> tuple[float, float]:
    """Return the 20% trimmed mean and the 20% Winsorized variance of a law.

    With a and b the quantiles, ∫ x dF = bF(b) − aF(a) − ∫ F, ∫ x² dF = b²F(b) − a²F(a) − 2∫ xF.
    """
    a, b = quantile(law, TRIM), quantile(law, 1 - TRIM)
    x = (a + b) / 2 + (b - a) / 2 * _NODES
    f = law.cdf(x) * _NODE_WEIGHTS * (b - a) / 2
    first = b * (1 - TRIM) - a * TRIM - float(f.sum())
    second = b**2 * (1 - TRIM) - a**2 * TRIM - 2 * float(f @ x)
    mean = first + TRIM * (a + b)
    return first / (1 - 2 * TRIM), second + TRIM * (a**2 + b**2) - mean**2


def mean_differences(design: Design) -> Floats:
    """Return the mean of each later occasion less that of the first, (k − 1,)."""
    shift = np.array(design.shift)
    if design.errors != "lognormal":
        return np.asarray(shift[1:] - shift[0])
    size = math.exp((design.between_sd**2 + design.within_sd**2) / 2)
    means = size * np.exp(shift)
    return np.asarray(means[1:] - means[0])


def sd_of_difference(design: Design) -> float:
    """Return the SD of last − first."""
    if design.errors != "lognormal":
        return math.sqrt(2) * design.within_sd
    first, last = design.shift[0], design.shift[-1]
    tau2, sigma2 = design.between_sd**2, design.within_sd**2
    # E D² = E exp(2τb) · E (exp(δ' + σe') − exp(δ + σe))²
    squares = math.exp(2 * sigma2) * (math.exp(2 * last) + math.exp(2 * first))
    second = math.exp(2 * tau2) * (squares - 2 * math.exp(sigma2 + first + last))
    return math.sqrt(second - mean_differences(design)[-1] ** 2)


def average_sd(design: Design) -> float:
    """Return the root of the mean of the variances on the first and last occasion."""
    between, within = design.between_sd**2, design.within_sd**2
    if design.errors != "lognormal":
        return math.sqrt(between + within)
    first, last = design.shift[0], design.shift[-1]
    unit = math.exp(between + within) * (math.exp(between + within) - 1)
    return math.sqrt(unit * (math.exp(2 * first) + math.exp(2 * last)) / 2)


def difference_of_trimmed_means(design: Design) -> float:
    """Return the trimmed mean of the last occasion less that of the first."""
    first, last = design.shift[0], design.shift[-1]
    if design.errors != "lognormal":
        return last - first
    sd = math.hypot(design.between_sd, design.within_sd)
    return lognormal_trimmed_mean(last, sd) - lognormal_trimmed_mean(first, sd)


def larger(design: Design, *, same_subject: bool) -> Floats:
    """Return P(value on occasion a < value on occasion b), (k, k): of one subject or of two."""
    extra = 0.0 if same_subject else 2 * design.between_sd**2
    law = error_difference(design, extra=extra)
    shift = np.array(design.shift)
    return law.cdf(shift - shift[:, None])


def relative_effects(design: Design) -> Floats:
    """Return P(a random value of any occasion < one of occasion j) + half of ties, (k,)."""
    return np.asarray(larger(design, same_subject=False).mean(axis=0))


def kendall_w(design: Design) -> float:
    """Return what Kendall's W tends to: 12 Σ (E r_j − (k + 1)/2)² / (k(k² − 1))."""
    k = design.k
    # P(a < b) summed over a counts the occasion itself half: E r_b − 1/2
    away = larger(design, same_subject=True).sum(axis=0) - k / 2
    return float(12 * (away**2).sum() / (k * (k**2 - 1)))


def truths(design: Design) -> dict[str, tuple[float, ...]]:
    """Return every estimand of a design with a shift, by its name.

    Parameters
    ----------
    design : Design
        Symmetric or lognormal errors, a shift, and nothing else.

    Returns
    -------
    dict of str to tuple of float
        One number, or for "means" one for each contrast with the first occasion.

    Raises
    ------
    ArgumentError
        When the design is of another form.
    """
    if not design.shift or _unknown(design):
        raise ArgumentError(f"Truths are known for designs with a shift alone, got {design.key}.")
    return _truths(replace(design, n=1))


def _unknown(design: Design) -> bool:
    return any((design.rho, design.slope_sd, design.spread, design.stretch, design.limit))


@functools.lru_cache(maxsize=64)
def _truths(design: Design) -> dict[str, tuple[float, ...]]:
    law = difference_law(design)
    trimmed, winsorized_variance = trimmed_moments(law)
    means = mean_differences(design)
    single = {
        "mean": float(means[-1]),
        "median": quantile(law, 0.5),
        "pseudo-median": pseudo_median(law),
        "trimmed mean": trimmed,
        "difference of trimmed means": difference_of_trimmed_means(design),
        "robust standardized difference": (
            winsorized_normal_sd(TRIM) * trimmed / math.sqrt(winsorized_variance)
        ),
        "d_z": float(means[-1]) / sd_of_difference(design),
        "d_av": float(means[-1]) / average_sd(design),
        "probability of a fall": float(law.cdf(np.array(0.0))),
        "relative effect": float(larger(design, same_subject=False)[0, -1]),
        "relative effect of the last occasion": float(relative_effects(design)[-1]),
        "rank-biserial correlation": 1 - 2 * sum_cdf(law)(0.0),
        "Kendall's W": kendall_w(design),
    }
    return {name: (value,) for name, value in single.items()} | {"means": tuple(means.tolist())}
