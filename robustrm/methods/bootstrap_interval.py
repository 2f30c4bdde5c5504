"""Bootstrap intervals of any estimand: percentile, BCa and bootstrap-t, separate or together."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Sequence

import numpy as np

from robustrm._checks import check_choice, check_count, check_level
from robustrm.errors import ArgumentError, TooFewError
from robustrm.kernels import bootstrap
from robustrm.methods.additive import Rng
from robustrm.methods.beyond import MOSTLY_BEYOND
from robustrm.methods.bootstrap_limits import METHODS, NONE, Found, Resampling, found_limits
from robustrm.methods.bootstrap_notes import beyond_limits, interval_notes, substitute_notes
from robustrm.methods.estimators import (
    Estimator,
    checked_estimates,
    checked_finite,
    estimand_names,
    quiet,
)
from robustrm.results import Estimate, Note
from robustrm.table import OccasionTable
from robustrm.ties import Floats


def bootstrap_interval(
    table: OccasionTable,
    estimator: Estimator,
    *,
    method: str = "percentile",
    standard_error: Estimator | None = None,
    simultaneous: bool = False,
    names: Sequence[str] | None = None,
    draws: int = 9_999,
    level: float = 0.95,
    substitute: str = "half",
    back_transform: bool = False,
    rng: Rng = None,
) -> tuple[Estimate, ...]:
    """Estimate anything that can be computed from a table, with bootstrap intervals.

    Parameters
    ----------
    table : OccasionTable
        Subjects with a value on every occasion are used, on the table's scale.
    estimator : callable
        Maps samples (..., n, k) of n subjects on k occasions to estimates (..., m). It works on
        the last two axes: many samples come at once, with axes before.
    method : {"percentile", "bca", "t"}, default "percentile"
        Percentile, bias-corrected and accelerated, or bootstrap-t.
    standard_error : callable, optional
        For ``"t"``: standard errors of the estimates, of the same form. If not given, a jackknife
        inside every resample, which asks for n times the work and for a smooth estimator: it
        fails for medians.
    simultaneous : bool, default False
        For ``"t"``: limits that hold `level` for all m estimands together.
    names : sequence of str, optional
        What is estimated, one name an estimand.
    draws : int, default 9999
        Number of resamples.
    level : float, default 0.95
        Level of the two-sided intervals.
    substitute : {"half", "root2", "limit"}, default "half"
        What enters for a value below the limit.
    back_transform : bool, default False
        On a table of logs: exponentiate estimates and limits, so that differences of logs become
        ratios.
    rng : int, Generator or None
        Seed or generator of the resamples. The same seed gives the same limits.

    Returns
    -------
    tuple of Estimate
        One an estimand. `kind` says which interval it became, `notes` what to know of it. The
        unit is not known and left out.

    Raises
    ------
    TooFewError
        With fewer than two complete subjects.
    ArgumentError
        When an option is not known, the estimator is not of the form asked for, or an estimate
        is not finite.

    Notes
    -----
    Whole rows are resampled, subjects with replacement, once for all estimands, so what the
    occasions of a subject have in common is kept. Limits are order statistics of the resamples,
    rounded outward.

    Where BCa or bootstrap-t is not defined, the percentile interval stands in its place; where
    all resamples agree there is none. A family of simultaneous limits takes no other kind in.

    With few subjects and heavy tails bootstrap intervals hold less than their level. A mean keeps
    no level at all if its variance is infinite. The bootstrap fails for the largest or smallest
    value, and is coarse for medians of few subjects. Where an exact interval exists, such as that
    of :func:`signed_rank`, prefer it at pilot size.

    References
    ----------
    .. [1] Efron, B. (1987). Better bootstrap confidence intervals. J Am Stat Assoc 82, 171-185.
    .. [2] Efron, B. and Tibshirani, R. J. (1993). An Introduction to the Bootstrap. Chapman &
       Hall.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[9.1, 7.2], [4.0, 3.1], [12.0, 12.5], [6.6, 5.0], [3.3, 2.1], [8.0, 6.2]],
    ...     occasions=["before", "after"],
    ... )
    >>> def log_ratio(y):
    ...     return (y[..., 1] - y[..., 0]).mean(axis=-1)[..., None]
    >>> (ratio,) = bootstrap_interval(
    ...     table.log(),
    ...     log_ratio,
    ...     method="bca",
    ...     names=["ratio of geometric means"],
    ...     back_transform=True,
    ...     rng=1,
    ... )
    >>> print(ratio)
    ratio of geometric means 0.788 (95% interval 0.723 to 0.905)
    """
    check_choice("method", method, METHODS)
    check_level(level)
    _check_together(method, standard_error, simultaneous=simultaneous)
    _check_draws(draws, 1 - level if simultaneous else (1 - level) / 2, level)
    if back_transform and table.scale != "log":
        raise ArgumentError(
            "`back_transform` must be False for a table on the raw scale, got True. Start from "
            "table.log()."
        )
    used, estimate = _start(table, estimator, substitute)
    observed = checked_estimates("estimator", estimate, used.values)
    labels = estimand_names(names, observed.size)
    checked_finite("estimator", observed, labels)
    found = found_limits(
        Resampling(used.values, estimate, observed, level, draws, np.random.default_rng(rng)),
        method,
        None if standard_error is None else quiet("standard_error", standard_error),
        simultaneous=simultaneous,
    )
    beyond = beyond_limits(used, estimate, observed)
    moved = substitute_notes(table, estimate, labels, exponentiate=back_transform)
    return tuple(
        _estimate(name, one, level, notes, hidden=hidden, exponentiate=back_transform)
        for name, one, notes, hidden in zip(labels, found, moved, beyond, strict=True)
    )


def _check_together(method: str, standard_error: Estimator | None, *, simultaneous: bool) -> None:
    if standard_error is not None and method != "t":
        raise ArgumentError(
            f"`standard_error` must be left out with method {method!r}: bootstrap-t alone uses "
            "it. Choose method='t'."
        )
    if simultaneous and method != "t":
        raise ArgumentError(
            f"`simultaneous` must be False with method {method!r}, got True: limits that hold "
            "together come from the largest |t|. Choose method='t'."
        )


def _check_draws(draws: int, tail: float, level: float) -> None:
    least = max(99, math.ceil(1 / tail * (1 - 1e-12)) - 1)
    if check_count("draws", draws) < least:
        raise ArgumentError(
            f"`draws` must be at least {least} for limits at level {level:g}, got {draws}."
        )


def _start(
    table: OccasionTable, estimator: Estimator, substitute: str
) -> tuple[OccasionTable, Estimator]:
    used = table.comparable().substitute(substitute)
    if used.n_subjects < 2:
        raise TooFewError(
            f"The bootstrap needs at least 2 subjects with all {table.n_occasions} occasions, got "
            f"{used.n_subjects}."
        )
    return used, quiet("estimator", estimator)


def _estimate(
    name: str,
    found: Found,
    level: float,
    notes: tuple[Note, ...],
    *,
    hidden: bool,
    exponentiate: bool,
) -> Estimate:
    limits = None if hidden else found.limits
    estimate = Estimate.of_shift(
        (name, name),
        value=math.nan if hidden else found.estimate,
        limits=limits,
        level=None if limits is None else level,
        kind=NONE if hidden else found.kind,
        unit=None,
        scale="log" if exponentiate else "raw",
    )
    told = (
        (MOSTLY_BEYOND,)
        if hidden
        else (*interval_notes(found, level, exponentiate=exponentiate), *notes)
    )
    return dataclasses.replace(estimate, notes=told)


def bootstrap_replicates(
    table: OccasionTable,
    estimator: Estimator,
    *,
    draws: int = 9_999,
    substitute: str = "half",
    rng: Rng = None,
) -> Floats:
    """Return the estimates in every resample behind :func:`bootstrap_interval`.

    Parameters
    ----------
    table : OccasionTable
        Subjects with a value on every occasion are used, on the table's scale.
    estimator : callable
        Maps samples (..., n, k) to estimates (..., m), as in :func:`bootstrap_interval`.
    draws : int, default 9999
        Number of resamples.
    substitute : {"half", "root2", "limit"}, default "half"
        What enters for a value below the limit.
    rng : int, Generator or None
        Seed or generator. With the same seed these are the resamples of the interval.

    Returns
    -------
    array (draws, m)
        One row a resample, one column an estimand; NaN where the estimator gives none.

    Raises
    ------
    TooFewError
        With fewer than two complete subjects.
    ArgumentError
        When an option is not known or the estimator is not of the form asked for.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[9.1, 7.2], [4.0, 3.1], [12.0, 12.5], [6.6, 5.0]], occasions=["before", "after"]
    ... )
    >>> bootstrap_replicates(table, lambda y: y.mean(axis=-2), draws=99, rng=1).shape
    (99, 2)
    """
    check_count("draws", draws)
    used, estimate = _start(table, estimator, substitute)
    checked_estimates("estimator", estimate, used.values)
    return bootstrap.replicates(used.values, estimate, draws=draws, rng=np.random.default_rng(rng))
