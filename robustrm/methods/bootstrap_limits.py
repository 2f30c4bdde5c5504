"""Which limits a bootstrap gives, what takes their place, and how far the draws leave them open."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy import special

from robustrm.kernels import bootstrap
from robustrm.kernels.bootstrap import Limits
from robustrm.methods.estimators import Estimator, checked_estimates
from robustrm.ties import Bools, Floats, Ints

METHODS = ("percentile", "bca", "t")
KINDS = {"percentile": "percentile", "bca": "bca", "t": "bootstrap-t"}
TOGETHER = "simultaneous bootstrap-t"
NONE = "none"

_Z = float(special.ndtri(0.975))  # the error of the draws is told as a 95% interval


@dataclass(frozen=True)
class Resampling:
    """What is resampled, and how: y (n, k), estimates (m,), and the estimator behind them."""

    y: Floats
    estimator: Estimator
    observed: Floats
    level: float
    draws: int
    rng: np.random.Generator

    def run(self, standard_error: Estimator | None = None, numbers: int | None = None) -> Floats:
        """Return the estimates (B, m), with their standard errors if wanted (B, 2m).

        `numbers` is how many numbers one resample grows to on the way, if more than its own.
        """

        def both(y: Floats) -> Floats:
            if standard_error is None:
                return self.estimator(y)
            return np.concatenate([self.estimator(y), standard_error(y)], axis=-1)

        block = bootstrap.rows_in_block(numbers or self.y.size)
        return bootstrap.replicates(self.y, both, draws=self.draws, rng=self.rng, block=block)


@dataclass(frozen=True)
class Family:
    """Limits of one kind for m estimands.

    Parameters
    ----------
    kind : str
        What the interval is called.
    limits : Limits
        The limits.
    low_range, high_range : Limits
        Where each limit would lie after endless draws, 95% intervals.
    undefined : array (m,)
        Resamples that say nothing.
    extreme : array (2, m) of bool
        Whether the lower and the upper limit ask for a tail rarer than the draws hold.
    lacks : tuple of str
        Why an estimand has no limits of this kind; empty where it has.
    reach : float or None
        Simultaneous limits: how many standard errors they reach to both sides.
    """

    kind: str
    limits: Limits
    low_range: Limits
    high_range: Limits
    undefined: Ints
    extreme: Bools
    lacks: tuple[str, ...]
    reach: float | None = None


@dataclass(frozen=True)
class Found:
    """The limits of one estimand: those of `family` at `place`, where `asked` was asked for."""

    estimate: float
    family: Family | None
    place: int
    n_subjects: int
    draws: int
    asked: Family

    @property
    def kind(self) -> str:
        """What the interval became."""
        return NONE if self.family is None else self.family.kind

    @property
    def limits(self) -> tuple[float, float] | None:
        """The limits, where there are any."""
        return None if self.family is None else _pair(self.family.limits, self.place)

    @property
    def ranges(self) -> tuple[tuple[float, float], tuple[float, float]] | None:
        """Where endless draws would put the lower and the upper limit."""
        if self.family is None:
            return None
        both = self.family.low_range, self.family.high_range
        if any(limits.degenerate[self.place] for limits in both):
            return None
        return _pair(both[0], self.place), _pair(both[1], self.place)


def _pair(limits: Limits, place: int) -> tuple[float, float]:
    return float(limits.low[place]), float(limits.high[place])


def found_limits(
    sampling: Resampling,
    method: str,
    standard_error: Estimator | None = None,
    *,
    simultaneous: bool = False,
) -> tuple[Found, ...]:
    """Return the limits of every estimand by a method, or what takes their place."""
    if method == "t":
        families = _by_t(sampling, standard_error, simultaneous=simultaneous)
    else:
        ascending = bootstrap.ordered(sampling.run())
        families = [_percentile(sampling, ascending)]
        if method == "bca":
            families.insert(0, _bca(sampling, ascending))
    n, m = sampling.y.shape[0], sampling.observed.size
    chosen = [next((f for f in families if not f.limits.degenerate[j]), None) for j in range(m)]
    return tuple(
        Found(float(sampling.observed[j]), family, j, n, sampling.draws, families[0])
        for j, family in enumerate(chosen)
    )


def _percentile(sampling: Resampling, ascending: Floats) -> Family:
    tails = bootstrap.equal_tails(ascending, sampling.level)
    equal = bootstrap.all_equal(ascending)
    limits = bootstrap.without(bootstrap.order_statistics(ascending, tails), equal)
    sd = bootstrap.sampling_sd(tails.below, sampling.draws)
    undefined = np.count_nonzero(np.isnan(ascending), axis=-1)
    return Family(
        KINDS["percentile"],
        limits,
        bootstrap.quantile_range(ascending, tails.below, sd, _Z, low=True),
        bootstrap.quantile_range(ascending, 1 - tails.above, sd, _Z, low=False),
        undefined,
        np.zeros((2, equal.size), dtype=np.bool_),
        _reasons(limits, [(equal, "all resamples give the same estimate")], _TOO_MANY),
    )


_TOO_MANY = "too many resamples have no finite estimate"


def _bca(sampling: Resampling, ascending: Floats) -> Family:
    jackknifed = bootstrap.jackknife(sampling.y, sampling.estimator)
    correction = bootstrap.bca_correction(sampling.observed, ascending, jackknifed)
    tails = bootstrap.bca_tails(correction, sampling.level)
    equal = bootstrap.all_equal(ascending)
    limits = bootstrap.without(bootstrap.order_statistics(ascending, tails), equal)
    z = float(special.ndtri((1 + sampling.level) / 2))
    low_sd, high_sd = (bootstrap.bca_sd(correction, side, sampling.draws) for side in (-z, z))
    reasons = [
        (equal, "all resamples give the same estimate"),
        (np.isinf(correction.z0), "all resamples lie on one side of the estimate"),
        (np.isnan(correction.a), "leaving out one subject moves the estimate for none"),
        (np.isnan(tails.below), "the skewness found is too large for its correction"),
    ]
    with np.errstate(invalid="ignore"):
        extreme = np.stack(tails) * (sampling.draws + 1) < 1
    return Family(
        KINDS["bca"],
        limits,
        bootstrap.quantile_range(ascending, tails.below, low_sd, _Z, low=True),
        bootstrap.quantile_range(ascending, 1 - tails.above, high_sd, _Z, low=False),
        np.count_nonzero(np.isnan(ascending), axis=-1),
        extreme,
        _reasons(limits, reasons, _TOO_MANY),
    )


def _by_t(
    sampling: Resampling, standard_error: Estimator | None, *, simultaneous: bool
) -> list[Family]:
    """Return bootstrap-t limits and what may take their place."""
    n, m = sampling.y.shape[0], sampling.observed.size

    def jackknifed(y: Floats) -> Floats:
        return bootstrap.jackknife_se(bootstrap.jackknife(y, sampling.estimator))

    if standard_error is None:
        error: Estimator = jackknifed
        numbers = (n - 1) * sampling.y.size  # every resample, with each row left out
        se = error(sampling.y)
    else:
        error, numbers = standard_error, sampling.y.size
        se = checked_estimates("standard_error", error, sampling.y, m)
    drawn = sampling.run(error, numbers)
    estimates, errors = drawn[:, :m], drawn[:, m:]
    t = bootstrap.studentized(sampling.observed, estimates, errors)
    if simultaneous:
        return [_together(sampling, se, t)]
    return [_separate_t(sampling, se, t), _percentile(sampling, bootstrap.ordered(estimates))]


def _separate_t(sampling: Resampling, se: Floats, t: Floats) -> Family:
    ascending = bootstrap.ordered(t)
    tails = bootstrap.equal_tails(ascending, sampling.level)
    sd = bootstrap.sampling_sd(tails.below, sampling.draws)
    limits, high, low = (
        bootstrap.from_t(sampling.observed, se, quantiles)
        for quantiles in (
            bootstrap.order_statistics(ascending, tails),
            bootstrap.quantile_range(ascending, tails.below, sd, _Z, low=True),
            bootstrap.quantile_range(ascending, 1 - tails.above, sd, _Z, low=False),
        )
    )
    return Family(
        KINDS["t"],
        limits,
        low,
        high,
        np.count_nonzero(np.isnan(t), axis=0),
        np.zeros((2, se.size), dtype=np.bool_),
        _t_reasons(sampling.observed, se, limits),
    )


def _together(sampling: Resampling, se: Floats, t: Floats) -> Family:
    usable = bootstrap.has_se(sampling.observed, se)
    ascending = bootstrap.ordered(bootstrap.largest_t(t, usable))
    share = np.array([sampling.level])
    c = bootstrap.order_statistics(ascending, bootstrap.Tails(1 - share, 1 - share))
    sd = bootstrap.sampling_sd(share, sampling.draws)
    spread = bootstrap.quantile_range(ascending, share, sd, _Z, low=False)
    mirrored = Limits(-spread.high, -spread.low, spread.degenerate)
    limits = bootstrap.from_t(sampling.observed, se, Limits(-c.high, c.high, c.degenerate))
    return Family(
        TOGETHER,
        limits,
        bootstrap.from_t(sampling.observed, se, spread),
        bootstrap.from_t(sampling.observed, se, mirrored),
        np.count_nonzero(np.isnan(t), axis=0),
        np.zeros((2, se.size), dtype=np.bool_),
        _t_reasons(sampling.observed, se, limits),
        None if c.degenerate[0] else float(c.high[0]),
    )


def _t_reasons(observed: Floats, se: Floats, limits: Limits) -> tuple[str, ...]:
    none = ~bootstrap.has_se(observed, se)
    return _reasons(
        limits,
        [(none, "the estimate has no standard error above 0")],
        "too many resamples have no standard error above 0",
    )


def _reasons(
    limits: Limits, reasons: Sequence[tuple[Bools, str]], otherwise: str
) -> tuple[str, ...]:
    """Return the first reason that holds for each estimand without limits."""
    return tuple(
        next((words for holds, words in reasons if holds[j]), otherwise) if missing else ""
        for j, missing in enumerate(limits.degenerate.tolist())
    )
