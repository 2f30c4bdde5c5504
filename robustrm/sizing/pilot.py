"""The variation of a marker within and between people, estimated from a pilot."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy import special

from robustrm._checks import check_level
from robustrm._format import counted, level_text, number, span
from robustrm.errors import TooFewError
from robustrm.kernels.anova import sums_of_squares
from robustrm.results import plain
from robustrm.table import OccasionTable


@dataclass(frozen=True, slots=True)
class PilotVariation:
    """Coefficients of variation from a pilot, with their intervals.

    Parameters
    ----------
    cv_within, cv_between : float
        Estimates as fractions; the assay is part of the variation within people.
    within, between : tuple of float
        Limits of their intervals.
    level : float
        Level of the intervals.
    n_subjects, n_occasions : int
        Complete subjects of the pilot, and its occasions.
    n_below : int
        Values below or above a limit among them, for which a substitute entered.
    """

    cv_within: float
    cv_between: float
    within: tuple[float, float]
    between: tuple[float, float]
    level: float
    n_subjects: int
    n_occasions: int
    n_below: int

    def __str__(self) -> str:
        beyond = counted(self.n_below, "value")
        entered = f", a substitute entered for {beyond} beyond a limit" if self.n_below else ""
        return (
            f"CV within people {number(self.cv_within)} ({level_text(self.level)} interval "
            f"{span(*self.within)}), between people {number(self.cv_between)} "
            f"({span(*self.between)}), from {counted(self.n_subjects, 'subject')} on "
            f"{self.n_occasions} occasions{entered}"
        )

    def to_dict(self) -> dict[str, Any]:
        """Return plain values."""
        result: dict[str, Any] = plain(self)
        return result


def pilot_variation(
    table: OccasionTable, *, substitute: str = "half", level: float = 0.95
) -> PilotVariation:
    """Estimate the variation within and between people from a pilot.

    Parameters
    ----------
    table : OccasionTable
        On the raw scale; its complete subjects are used.
    substitute : {"half", "root2", "limit"}, default "half"
        What enters for a value below the limit.
    level : float, default 0.95
        Level of the intervals.

    Returns
    -------
    PilotVariation

    Raises
    ------
    TooFewError
        When fewer than 3 subjects have all occasions.

    Notes
    -----
    Logarithms, less the mean of their occasion: a change that all share is no variation, one
    that differs from person to person is. With MSE the mean square of what subjects and occasions
    leave and MSS that of the subjects, the variance within is MSE, and between (MSS − MSE)/k, not
    below 0; CV = √(exp(variance) − 1). The interval within is that of a chi-square; the one
    between is that of Williams, whose level is at least twice `level` − 1 and usually about
    `level`. Both suppose normal logarithms.

    References
    ----------
    .. [1] Williams, J. S. (1962). A confidence interval for variance components. Biometrika 49,
       278-281.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[9, 7, 6], [4, 3, 3.5], [12, 8, 5], [30, 26, 16]], occasions=["a", "b", "c"]
    ... )
    >>> found = pilot_variation(table)
    >>> round(found.cv_within, 3), [round(limit, 3) for limit in found.within]
    (0.186, [0.119, 0.423])
    """
    check_level(level)
    used = table.comparable().on_scale("log").substitute(substitute)
    n, k = used.values.shape
    if n < 3:
        raise TooFewError(
            f"A pilot needs at least 3 subjects with all occasions, got {n}. Give `cv_within` and "
            "`cv_between` with their source."
        )
    parts = sums_of_squares(used.values)
    error_df, subject_df = (n - 1) * (k - 1), n - 1
    error, subject = float(parts.error), float(parts.subject)
    mse, mss = error / error_df, subject / subject_df
    tail = (1 - level) / 2
    within = [error / float(special.chdtri(error_df, p)) for p in (tail, 1 - tail)]
    between = [
        max(0.0, (subject - subject_df * mse * _f_above(subject_df, error_df, p)))
        / (k * float(special.chdtri(subject_df, p)))
        for p in (tail, 1 - tail)
    ]
    return PilotVariation(
        cv_within=_cv(mse),
        cv_between=_cv(max(0.0, (mss - mse) / k)),
        within=(_cv(within[0]), _cv(within[1])),
        between=(_cv(between[0]), _cv(between[1])),
        level=level,
        n_subjects=n,
        n_occasions=k,
        n_below=int(np.count_nonzero(used.censored)),
    )


def _f_above(df1: int, df2: int, above: float) -> float:
    """Return the value that F exceeds with probability `above`."""
    return float(special.fdtri(df1, df2, 1 - above))


def _cv(variance: float) -> float:
    return math.sqrt(math.expm1(variance)) if variance < 700 else math.inf
