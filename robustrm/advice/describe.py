"""Descriptive diagnostics: shown to the reader, never used to choose.

Everything here looks at occasions, so a choice made from it would spend the error of the test that
it chooses.
"""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from robustrm.errors import DataError
from robustrm.kernels import anova
from robustrm.kernels.location import madn, skewness, trimmed_mean
from robustrm.kernels.shape import medcouple, mirrored_distances
from robustrm.results import Scale, plain
from robustrm.table import OccasionTable
from robustrm.ties import MERGE, Bools, Floats

OUTLYING = 2.24
"""√χ²(0.975, 1): the usual bound of the MAD-median rule."""


@dataclass(frozen=True, slots=True)
class Sample:
    """Shape of one sample: an occasion, or the differences between two.

    Parameters
    ----------
    name : str
        The occasion, or ``"later vs earlier"``.
    scale : {"raw", "log"}
        Scale of the numbers; differences of logs are log ratios.
    n : int
        Values.
    q1, median, q3, trimmed_mean, madn : float
        Quartiles, 20% trimmed mean, normalized median absolute deviation.
    skewness, medcouple : float
        Moment and robust skewness; 0 when symmetric. NaN where not defined.
    outlying : tuple of str
        Subjects further than 2.24 MADN from the median.
    """

    name: str
    scale: Scale
    n: int
    q1: float
    median: float
    q3: float
    trimmed_mean: float
    madn: float
    skewness: float
    medcouple: float
    outlying: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Residuals:
    """Normality and sphericity of the within-subject model on one scale.

    Parameters
    ----------
    scale : {"raw", "log"}
        Scale of the values.
    n : int
        Subjects with all occasions.
    shapiro_w, shapiro_p : float
        Shapiro-Wilk test of the residuals; they are not independent, so P is rough.
    skewness : float
        Of the residuals.
    mauchly_w, mauchly_p, epsilon_gg, epsilon_hf, epsilon_lower : float
        Sphericity.
    """

    scale: Scale
    n: int
    shapiro_w: float
    shapiro_p: float
    skewness: float
    mauchly_w: float
    mauchly_p: float
    epsilon_gg: float
    epsilon_hf: float
    epsilon_lower: float


@dataclass(frozen=True, slots=True)
class Description:
    """Everything descriptive about one table.

    Parameters
    ----------
    occasions, differences : tuple of Sample
        One an occasion on the raw scale; one a pair of occasions on each scale that exists.
    residuals : tuple of Residuals
        One a scale that exists.
    """

    occasions: tuple[Sample, ...]
    differences: tuple[Sample, ...]
    residuals: tuple[Residuals, ...]

    def to_dict(self) -> dict[str, Any]:
        """Return plain values."""
        result: dict[str, Any] = plain(self)
        return result


@dataclass(frozen=True, slots=True, eq=False)
class MirroredDifferences:
    """Distances of paired differences from their median: the i-th from below and from above.

    Parameters
    ----------
    scale : {"raw", "log"}
        Scale of the numbers; differences of logs are log ratios.
    n : int
        Subjects with both occasions.
    median : float
        Of the differences; NaN without subjects.
    below, above : array (⌊n/2⌋,)
        Distances, the largest first; equal in every pair where the differences are symmetric.
    limited : array (⌊n/2⌋,) of bool
        Whether a value beyond a limit is in one of the two differences.
    """

    scale: Scale
    n: int
    median: float
    below: Floats
    above: Floats
    limited: Bools


def describe(table: OccasionTable, *, substitute: str = "half") -> Description:
    """Describe a table on the raw scale, with `substitute` for what lies below a limit."""
    entered = table.in_natural_order().recensored().substitute(substitute)
    scales = tuple(_on_scales(entered).items())
    return Description(
        occasions=tuple(_occasion(entered, j) for j in range(entered.n_occasions)),
        differences=tuple(
            _difference(scaled, scale, pair)
            for scale, scaled in scales
            for pair in itertools.combinations(range(entered.n_occasions), 2)
        ),
        residuals=tuple(
            found for scale, scaled in scales if (found := _residuals(scaled, scale)) is not None
        ),
    )


def mirrored_differences(
    table: OccasionTable, first: str, second: str, *, scale: Scale, substitute: str = "half"
) -> MirroredDifferences:
    """Return how the differences second − first lie about their median, as a test enters them.

    Limits are those that the two occasions share. Two values below the limit count as no change.
    """
    pair = table.pair(first, second).substitute(substitute).on_scale(scale)
    differences = pair.paired(first, second)[0].values
    beyond = np.asarray(pair.censored.any(axis=1))
    order = np.lexsort((beyond, differences))
    ordered, beyond = differences[order], beyond[order]
    below, above = mirrored_distances(ordered)
    pairs = below.size
    return MirroredDifferences(
        scale=scale,
        n=ordered.size,
        median=float(np.median(ordered)) if ordered.size else float("nan"),
        below=below,
        above=above,
        limited=beyond[:pairs] | beyond[::-1][:pairs],
    )


def _on_scales(table: OccasionTable) -> Mapping[Scale, OccasionTable]:
    try:
        return {"raw": table, "log": table.log()}
    except DataError:  # a value that is not positive
        return {"raw": table}


def _occasion(table: OccasionTable, j: int) -> Sample:
    values = table.values[:, j]
    return _sample(table.occasions[j], table.scale, values, table.subjects)


def _difference(table: OccasionTable, scale: Scale, pair: tuple[int, int]) -> Sample:
    first, second = pair
    name = f"{table.occasions[second]} vs {table.occasions[first]}"
    return _sample(name, scale, table.values[:, second] - table.values[:, first], table.subjects)


def _sample(name: str, scale: Scale, values: Floats, subjects: Sequence[str]) -> Sample:
    known = ~np.isnan(values)
    y = values[known]
    if not y.size:
        return Sample(name, scale, 0, *(float("nan"),) * 7, outlying=())
    q1, median, q3 = (float(q) for q in np.quantile(y, [0.25, 0.5, 0.75]))
    spread = float(madn(y))
    far = np.abs(values - median) > OUTLYING * spread
    return Sample(
        name=name,
        scale=scale,
        n=int(y.size),
        q1=q1,
        median=median,
        q3=q3,
        trimmed_mean=float(trimmed_mean(y, 0.2)),
        madn=spread,
        skewness=float(skewness(y)) if y.size > 2 else float("nan"),
        medcouple=medcouple(y) if np.ptp(y) > 0 else float("nan"),
        outlying=tuple(s for s, out in zip(subjects, far, strict=True) if out) if spread else (),
    )


def _residuals(table: OccasionTable, scale: Scale) -> Residuals | None:
    from scipy import stats

    y = table.complete().values
    n, k = y.shape
    if n < 2:
        return None
    nan = float("nan")
    residuals = (y - y.mean(axis=1, keepdims=True) - y.mean(axis=0) + y.mean()).ravel()
    flat = bool(np.ptp(residuals) <= MERGE * np.abs(y).max())
    covariance = anova.contrast_covariance(y)
    box = nan if flat else float(anova.epsilon_greenhouse_geisser(covariance))
    mauchly_w, _, mauchly_p, _ = anova.mauchly(covariance, n - 1)
    shapiro_w, shapiro_p = (nan, nan) if flat or y.size < 3 else stats.shapiro(residuals)
    return Residuals(
        scale=scale,
        n=n,
        shapiro_w=float(shapiro_w),
        shapiro_p=float(shapiro_p),
        skewness=nan if flat else float(skewness(residuals)),
        mauchly_w=float(mauchly_w),
        mauchly_p=float(mauchly_p),
        epsilon_gg=box,
        epsilon_hf=float(anova.epsilon_huynh_feldt(np.asarray(box), k, n - 1)),
        epsilon_lower=1 / (k - 1),
    )
