"""Usual variation of a marker: of the assay, from replicates; of stable people, from occasions.

Both are pooled variances of natural logarithms, so that one coefficient of variation holds over
the whole range, as it does when values vary in proportion to their level.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy import special

from robustrm._checks import check_level, check_names
from robustrm._format import counted, level_text, listing, percent
from robustrm.errors import TooFewError
from robustrm.results import plain
from robustrm.table import OccasionTable
from robustrm.ties import Floats


@dataclass(frozen=True, slots=True)
class Variation:
    """A coefficient of variation estimated from the study, with its interval.

    Parameters
    ----------
    what : str
        What varies, in words.
    variance : float
        Pooled variance of the natural logarithms.
    df : int
        Degrees of freedom behind it.
    n_sets, n_subjects : int
        Sets of values, one a subject (and occasion), and the subjects they come from.
    low, high : float or None
        Limits of the CV, by the chi-square distribution of a pooled normal variance; None where
        all values of every set are equal.
    level : float
        Level of the interval.
    n_left_out : int
        Values that could not be used: beyond a limit, or without a logarithm.
    """

    what: str
    variance: float
    df: int
    n_sets: int
    n_subjects: int
    low: float | None
    high: float | None
    level: float
    n_left_out: int = 0

    @property
    def cv(self) -> float:
        """Coefficient of variation as a fraction, √(exp(s²) − 1)."""
        return cv_of_variance(self.variance)

    def __str__(self) -> str:
        head = f"CV of {self.what} {percent(self.cv, 1)}"
        where = f"{counted(self.n_sets, 'set')} of {counted(self.n_subjects, 'subject')}"
        where += f", {self.df} degrees of freedom"
        if self.low is None or self.high is None:
            return f"{head} (interval not estimable; {where})"
        ends = f"{percent(self.low, 1)} to {percent(self.high, 1)}"
        return f"{head} ({level_text(self.level)} interval {ends}; {where})"

    def to_dict(self) -> dict[str, Any]:
        """Return plain values."""
        fields: dict[str, Any] = plain(self)
        return {"cv": plain(self.cv), **fields}


def variance_of_cv(cv: float) -> float:
    """Return the variance of the logarithm of a lognormal value with this CV: ln(1 + CV²)."""
    return math.log1p(cv**2)


def cv_of_variance(variance: float) -> float:
    """Return the CV of a lognormal value from the variance of its logarithm."""
    return math.sqrt(math.expm1(variance)) if variance < 700 else math.inf


def assay_variation(table: OccasionTable, *, level: float = 0.95) -> Variation:
    r"""Return the CV of the assay within a run, from the replicates of the table.

    Parameters
    ----------
    table : OccasionTable
        A table that was read with `replicates` declared; it keeps the values of every set.
    level : float, default 0.95
        Level of the interval.

    Returns
    -------
    Variation
        Pooled over all sets; the concentration plays no part.

    Raises
    ------
    TooFewError
        When no set of two positive values is kept.

    Notes
    -----
    Replicates of one sample differ by the assay alone: they say nothing of how a person varies.
    Measured side by side they give the CV within a run, which is smaller than that between runs.
    The interval supposes normal logarithms with one variance. Sets with a value beyond a limit
    are not kept.

    Examples
    --------
    >>> import io
    >>> from robustrm.reading import read_table
    >>> file = io.BytesIO(b"id,week,crp\nP1,0,2.0\nP1,0,2.2\nP1,6,1.1\nP1,6,1.0\n")
    >>> table = read_table(
    ...     file,
    ...     subject="id",
    ...     occasion="week",
    ...     value="crp",
    ...     order=["0", "6"],
    ...     replicates="geometric",
    ... )
    >>> found = assay_variation(table)
    >>> round(found.cv, 3), found.df, found.n_sets
    (0.067, 2, 2)
    """
    check_level(level)
    sets = [r for r in table.replicates if r.subject in table.subjects]
    sets = [r for r in sets if r.occasion in table.occasions]
    usable = [r for r in sets if min(r.values) > 0]
    if not usable:
        raise TooFewError(
            "The CV of the assay needs a set of at least 2 positive replicates, got none in the "
            "table. Read the file with `replicates` declared, or give `cv_assay` with its source."
        )
    return _pooled(
        "the assay within a run",
        [np.log(r.values) for r in usable],
        n_subjects=len({r.subject for r in usable}),
        level=level,
        n_left_out=sum(len(r.values) for r in sets if r not in usable),
    )


def stable_variation(
    table: OccasionTable, occasions: Sequence[str], *, level: float = 0.95
) -> Variation:
    """Return the CV of one person's values over occasions that the user declares stable.

    Parameters
    ----------
    table : OccasionTable
        On the raw scale.
    occasions : sequence of str
        Occasions between which nothing happened, such as visits before the start.
    level : float, default 0.95
        Level of the interval.

    Returns
    -------
    Variation
        Of single values as they stand in the table. It holds both the variation of the person
        and that of the assay, as one value against another does.

    Raises
    ------
    ArgumentError
        When an occasion is not known.
    TooFewError
        When nobody has two measured values on these occasions.

    Notes
    -----
    Nothing in the values can show that people were stable: the user says so. A common shift
    between the occasions is part of the variation, as it is of every later comparison, but then
    the sets are not independent and the interval is too narrow. Values beyond a limit are left
    out, which makes the CV too small where there are many.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[2.0, 2.6, 1.1], [5.0, 3.9, 4.4], [1.0, 1.4, 0.5]],
    ...     occasions=["week -4", "week 0", "week 6"],
    ... )
    >>> found = stable_variation(table, ["week -4", "week 0"])
    >>> round(found.cv, 3), found.df
    (0.204, 3)
    """
    check_level(level)
    names = check_names("stable", occasions, least=2)
    columns = [table.column("stable", name) for name in names]
    values = table.values[:, columns]
    measured = ~np.isnan(values) & ~table.censored[:, columns] & (values > 0)
    rows = [np.log(row[kept]) for row, kept in zip(values, measured, strict=True) if kept.sum() > 1]
    if not rows:
        raise TooFewError(
            f"The CV of stable people needs somebody with two measured values at {listing(names)}, "
            "got nobody. Name other occasions, or give `cv_within` and `cv_assay` with their "
            "source."
        )
    return _pooled(
        f"values of one person at {listing(names)}",
        rows,
        n_subjects=len(rows),
        level=level,
        n_left_out=int((~np.isnan(values) & ~measured).sum()),
    )


def _pooled(
    what: str, sets: Sequence[Floats], *, n_subjects: int, level: float, n_left_out: int
) -> Variation:
    """Return the pooled variance of logarithms: s² = Σ (m_i − 1) s_i² / Σ (m_i − 1)."""
    df = sum(values.size - 1 for values in sets)
    # equal values leave no rounding behind: their mean may not be one of them
    squares = math.fsum(float(np.var(v)) * v.size if np.ptp(v) > 0 else 0.0 for v in sets)
    variance = squares / df
    tail = (1 - level) / 2
    # df · s² / σ² is chi-square; chdtri takes the probability above
    ends = [squares / float(special.chdtri(df, p)) for p in (tail, 1 - tail)]
    low, high = (cv_of_variance(end) for end in ends) if squares > 0 else (None, None)
    return Variation(what, variance, df, len(sets), n_subjects, low, high, level, n_left_out)
