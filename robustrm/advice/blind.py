"""Figures about the data that do not depend on which value belongs to which occasion."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from robustrm.advice.view import BlindView
from robustrm.kernels import shape
from robustrm.results import plain
from robustrm.ties import Bools, Floats


@dataclass(frozen=True, slots=True)
class Shape:
    """Shape of the pooled values less their subject's mean, on one scale.

    Parameters
    ----------
    tail_weight : float
        Hogg's Q: 2.58 for a normal law, more with heavier tails.
    tail_balance : float
        Hogg's Q₃: 1 when symmetric, more with a long upper tail.
    within_sd : float
        Pooled SD of a subject's values, change between occasions included.
    between_sd : float
        SD of the subjects' means, less what their values within contribute; at least 0.
    """

    tail_weight: float
    tail_balance: float
    within_sd: float
    between_sd: float


@dataclass(frozen=True, slots=True)
class BlindFigures:
    """What advice may use.

    Parameters
    ----------
    n_subjects, n_complete, n_occasions : int
        Subjects, those with all occasions, occasions.
    share_missing : float
        Share of the cells without a value.
    share_below, share_above : float
        Shares of the values beyond a limit.
    share_tied : float
        Share of the pairs of measured values of one subject that are equal.
    lowest : float
        Smallest value; limits count as values.
    slope : float
        Median slope of log spread on log level over the subjects: near 1 the spread grows in
        proportion to the level, near 0 it does not. NaN where levels are not positive.
    shape : mapping of {"raw", "log"} to Shape
        Shape of the subject-centred values; no entry where a logarithm does not exist.
    """

    n_subjects: int
    n_complete: int
    n_occasions: int
    share_missing: float
    share_below: float
    share_above: float
    share_tied: float
    lowest: float
    slope: float
    shape: Mapping[str, Shape]

    @property
    def share_at_limit(self) -> float:
        """Share of the values beyond any limit."""
        return self.share_below + self.share_above

    def to_dict(self) -> dict[str, Any]:
        """Return plain values."""
        result: dict[str, Any] = plain(self)
        return result


@dataclass(frozen=True, slots=True, eq=False)
class SpreadLevel:
    """Spread against level, one point a subject, with the line whose slope the advice tells.

    Parameters
    ----------
    level, spread : array (m,)
        Median and SD of each subject that has both; a value beyond a limit is the limit.
    limited : array (m,) of bool
        Whether one of the subject's values lies beyond a limit.
    slope, intercept : float
        Of the line in natural logarithms: Theil-Sen slope, median of the residuals. NaN below
        three subjects, or where their levels are equal.
    left_out : mapping of str to int
        Why subjects have no point, and how many of them.
    """

    level: Floats
    spread: Floats
    limited: Bools
    slope: float
    intercept: float
    left_out: Mapping[str, int]

    @property
    def middle(self) -> tuple[float, float]:
        """Median level and median spread; means of two middle ones are geometric."""
        level, spread = np.median(np.log(self.level)), np.median(np.log(self.spread))
        return float(np.exp(level)), float(np.exp(spread))

    def fitted(self, level: Floats) -> Floats:
        """Return the spread that the line tells at a level."""
        return np.asarray(np.exp(self.intercept) * level**self.slope)

    def through_middle(self, level: Floats, slope: float) -> Floats:
        """Return the spread at a level on the line of another slope through the middle."""
        at, height = self.middle
        return np.asarray(height * (level / at) ** slope)


@dataclass(frozen=True, slots=True, eq=False)
class CentredValues:
    """Pooled values less their subject's mean, in order, against normal quantiles.

    Parameters
    ----------
    values : array (m,)
        In order, on the scale of the view; a value beyond a limit is the limit.
    quantiles : array (m,)
        Standard normal quantiles at Blom's positions.
    below, above : array (m,) of bool
        Which of the values lie beyond a limit.
    intercept, slope : float
        Of the line through the quartiles; NaN without values.
    shape : Shape
        Tail weight and tail balance.
    n_subjects : int
        Subjects with at least two values; the others tell nothing here.
    """

    values: Floats
    quantiles: Floats
    below: Bools
    above: Bools
    intercept: float
    slope: float
    shape: Shape
    n_subjects: int


def blind_figures(view: BlindView) -> BlindFigures:
    """Return the figures of a view; each is unchanged when a subject's values change places."""
    observed = view.observed
    n_values = int(observed.sum())
    several = observed.sum(axis=1) >= 2
    rows = view.values[several]
    lowest = float(np.nanmin(view.values)) if n_values else math.nan
    shapes = {"raw": _shape(rows)}
    if lowest > 0:
        shapes["log"] = _shape(np.log(rows))
    return BlindFigures(
        n_subjects=len(view.values),
        n_complete=int((~view.missing).all(axis=1).sum()),
        n_occasions=view.values.shape[1],
        share_missing=_share(view.missing.sum(), view.missing.size),
        share_below=_share(view.below.sum(), n_values),
        share_above=_share(view.above.sum(), n_values),
        share_tied=_share_tied(view),
        lowest=lowest,
        slope=spread_level(view).slope,
        shape=shapes,
    )


def _share(part: Any, whole: int) -> float:
    return float(part / whole) if whole else 0.0


def _share_tied(view: BlindView) -> float:
    """Return the share of equal pairs among the pairs of measured values of one subject."""
    k = view.values.shape[1]
    measured = np.where(view.censored, np.nan, view.values)
    first, second = np.triu_indices(k, 1)
    gaps = measured[:, second] - measured[:, first]
    return _share((gaps == 0).sum(), int((~np.isnan(gaps)).sum()))


def spread_level(view: BlindView) -> SpreadLevel:
    """Take the median as level and the SD as spread, which stay in use with three values."""
    several = view.observed.sum(axis=1) >= 2
    rows = view.values[several]
    level, spread = np.zeros(0), np.zeros(0)
    if len(rows):
        level = np.nanmedian(rows, axis=1)
        # the SD of equal values is not always 0 in floats: 0.1, 0.1, 0.1 have a mean above 0.1
        flat = np.nanmax(rows, axis=1) - np.nanmin(rows, axis=1) <= _noise(rows)
        spread = np.where(flat, 0.0, np.nanstd(rows, axis=1, ddof=1))
    used = (level > 0) & (spread > 0)
    slope = shape.spread_level_slope(level, spread)
    reasons = {
        "with fewer than two values": int((~several).sum()),
        "without spread": int((spread == 0).sum()),
        "with a median of zero or less": int(((level <= 0) & (spread > 0)).sum()),
    }
    return SpreadLevel(
        level=level[used],
        spread=spread[used],
        limited=view.censored[several].any(axis=1)[used],
        slope=slope,
        intercept=slope
        if math.isnan(slope)
        else shape.spread_level_intercept(level, spread, slope),
        left_out={why: count for why, count in reasons.items() if count},
    )


def centred_values(view: BlindView) -> CentredValues:
    """Return the pooled subject-centred values of a view with their normal quantiles."""
    several = view.observed.sum(axis=1) >= 2
    rows, below, above = (
        array[several] for array in (_centred(view.values), view.below, view.above)
    )
    present = ~np.isnan(rows)
    values, below, above = rows[present], below[present], above[present]
    order = np.lexsort((above, ~below, values))  # of equal values the bounds stand outside
    line = shape.quartile_line(values) if values.size else (math.nan, math.nan)
    return CentredValues(
        values=values[order],
        quantiles=shape.normal_positions(values.size),
        below=below[order],
        above=above[order],
        intercept=line[0],
        slope=line[1],
        shape=_shape(view.values[several]),
        n_subjects=int(several.sum()),
    )


def _centred(rows: Floats) -> Floats:
    """Return rows less their means, without what rounding leaves of equal values."""
    counts = np.maximum((~np.isnan(rows)).sum(axis=1), 1)
    centred = rows - (np.nansum(rows, axis=1) / counts)[:, None]
    return np.where(np.abs(centred) <= _noise(rows)[:, None], 0.0, centred)


def _noise(rows: Floats) -> Floats:
    """Return a bound on the rounding error of the mean of each row."""
    largest = np.max(np.abs(np.nan_to_num(rows)), axis=1, initial=0.0)
    return np.asarray(4 * rows.shape[1] * np.finfo(float).eps * largest)


def _shape(rows: Floats) -> Shape:
    if not len(rows):
        return Shape(math.nan, math.nan, math.nan, math.nan)
    means = np.nanmean(rows, axis=1)
    centred = _centred(rows)
    pooled = centred[~np.isnan(centred)]
    within = float((pooled**2).sum() / (pooled.size - len(rows)))
    each = pooled.size / len(rows)  # values a subject, on average
    between = float(means.var(ddof=1)) - within / each if len(rows) > 1 else 0.0
    return Shape(
        tail_weight=float(shape.tail_weight(pooled)),
        tail_balance=float(shape.tail_balance(pooled)),
        within_sd=math.sqrt(within),
        between_sd=math.sqrt(max(between, 0.0)),
    )
