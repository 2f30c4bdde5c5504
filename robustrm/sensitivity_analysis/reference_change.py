"""Reference change value: how far two values of one stable person usually lie apart."""

from __future__ import annotations

import math

import numpy as np
from scipy import special

from robustrm._checks import check_count, check_level
from robustrm.errors import ArgumentError
from robustrm.sensitivity_analysis.variation import variance_of_cv

LARGEST_CV = 3.0


def reference_change(
    cv_within: float, cv_assay: float, *, replicates: int = 1, level: float = 0.95
) -> tuple[float, float]:
    r"""Return the ratios between which two values of one stable person usually lie.

    Parameters
    ----------
    cv_within : float
        Coefficient of variation within a person, as a fraction (0.42, not 42).
    cv_assay : float
        Coefficient of variation of the assay, as a fraction. 0 when `cv_within` was found from
        single measurements and so holds the assay already.
    replicates : int, default 1
        Measurements averaged on each occasion. Only variation within a run is divided by it:
        give 1 with a CV between runs.
    level : float, default 0.95
        Share of stable people whose ratio lies between the limits.

    Returns
    -------
    tuple of float
        Lowest and highest ratio, second value over first.

    Raises
    ------
    ArgumentError
        When a CV is negative or larger than 3, or another option breaks its rule.

    Notes
    -----
    With lognormal values, σ² = ln(1 + CV_I²) + ln(1 + CV_A²)/m and the limits are
    exp(±z √2 σ). The symmetric form ±z √2 √(CV_I² + CV_A²) of [1]_ gives impossible falls of
    more than 100% for a marker that varies much; the asymmetric one of [2]_ does not. (A form with
    ln(1 + CV_I² + CV_A²) differs by the product of the squares.) The limits hold for people whose
    CV is the one given, in a steady state, and for two values: with more than two, false
    positives add up.

    References
    ----------
    .. [1] Fraser, C. G. and Harris, E. K. (1989). Generation and application of data on
       biological variation in clinical chemistry. Critical Reviews in Clinical Laboratory
       Sciences 27, 409-437.
    .. [2] Fokkema, M. R., Herrmann, Z., Muskiet, F. A. J. and Moecks, J. (2006). Reference change
       values for brain natriuretic peptides revisited. Clinical Chemistry 52, 1602-1603.

    Examples
    --------
    >>> low, high = reference_change(0.42, 0.05)
    >>> print(f"{low - 1:+.0%} to {high - 1:+.0%}")
    -68% to +208%
    """
    _check_cv("cv_within", cv_within)
    _check_cv("cv_assay", cv_assay)
    check_count("replicates", replicates)
    check_level(level)
    variance = variance_of_cv(cv_within) + variance_of_cv(cv_assay) / replicates
    reach = -float(special.ndtri((1 - level) / 2)) * math.sqrt(2 * variance)
    return math.exp(-reach), math.exp(reach)


def _check_cv(argument: str, cv: object) -> None:
    if (
        isinstance(cv, bool)
        or not isinstance(cv, (int, float, np.number))
        or not 0 <= cv < math.inf
    ):
        raise ArgumentError(f"`{argument}` must be a fraction of at least 0, got {cv!r}.")
    if cv > LARGEST_CV:
        hint = f" Did you mean {cv / 100:g}?" if cv / 100 <= LARGEST_CV else ""
        raise ArgumentError(
            f"`{argument}` must be a fraction of at most {LARGEST_CV:g}, got {cv!r}.{hint}"
        )
