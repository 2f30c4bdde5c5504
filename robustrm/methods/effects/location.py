"""By how much the values changed: median, geometric means and percent."""

from __future__ import annotations

import dataclasses

import numpy as np

from robustrm._checks import check_level
from robustrm._format import counted, level_text
from robustrm.errors import TooFewError
from robustrm.kernels.order_intervals import Interpolation, interpolated_limits, interpolation
from robustrm.methods.additive import complete_pair
from robustrm.methods.beyond import MOSTLY_BEYOND, is_mostly_beyond
from robustrm.methods.effects.effect import Effect, Measure
from robustrm.methods.paired_t import NAMES, paired_t
from robustrm.results import Estimate, Note
from robustrm.table import OccasionTable

_HALVES = "half of the subjects changed by less, half by more"
MEDIANS = {
    "raw": Measure("median difference", "location", _HALVES),
    "log": Measure("median ratio", "location", _HALVES),
}
GEOMETRIC = Measure(NAMES[1], "location", "from the mean of the logs, back-transformed")
PERCENT = Measure("percent change", "location", "of geometric means; a halving is −50%")


def median_difference(
    table: OccasionTable,
    first: str,
    second: str,
    *,
    substitute: str = "half",
    level: float = 0.95,
) -> Effect:
    """Estimate the median of the differences, on the log scale the median ratio.

    Parameters
    ----------
    table : OccasionTable
        Subjects with both occasions are used, on the table's scale.
    first, second : str
        Occasions; differences are second − first, ratios second / first.
    substitute : {"half", "root2", "limit"}, default "half"
        What enters for a value below the limit.
    level : float, default 0.95
        Level of the interval.

    Returns
    -------
    Effect
        The median with the interpolated sign interval. Not given when more than half of an
        occasion lies beyond a limit.

    Raises
    ------
    TooFewError
        When no subject has both occasions.

    Notes
    -----
    It asks nothing of the law of the differences, not even symmetry. It is the median of the
    differences, which is neither the difference of the medians nor the pseudo-median of the
    signed-rank test. The exact intervals between order statistics attain levels in steps; the
    interval is interpolated between the two neighbours, whose levels the remark states. There
    is none at 95% below 6 subjects. On logs the median of an even number of ratios is the
    geometric mean of the middle two.

    References
    ----------
    .. [1] Hettmansperger, T. P. and Sheather, S. J. (1986). Confidence intervals based on
       interpolated order statistics. Statistics & Probability Letters 4, 75-79.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[50, 50 - d] for d in (1, 2, 4, 8, 16, 32)], occasions=["before", "after"]
    ... )
    >>> estimate = median_difference(table, "before", "after").estimate
    >>> estimate.value, round(estimate.low, 2), round(estimate.high, 2)
    (-6.0, -26.29, -1.36)
    """
    check_level(level)
    measure = MEDIANS[table.scale]
    pair = complete_pair(table, first, second, f"The {measure.name}").substitute(substitute)
    label, n = f"{second} vs {first}", pair.n_subjects
    if is_mostly_beyond(pair):
        return measure.not_given(label, n, pair.scale, MOSTLY_BEYOND)
    d = pair.paired(first, second)[0].values
    found = interpolation(n, level)
    limits = None
    if found is not None:
        low, high = interpolated_limits(d, found)
        limits = (float(low), float(high))
    estimate = Estimate.of_shift(
        (MEDIANS["raw"].name, MEDIANS["log"].name),
        value=float(np.median(d)),
        limits=limits,
        level=None if found is None else level,
        kind="interpolated order statistics",
        unit=pair.unit,
        scale=pair.scale,
    )
    if found is None:
        fact = f"With {counted(n, 'difference')} no interval reaches {level_text(level)}."
        note = Note("no interval", fact, "The estimate stands without one.")
        return measure.effect(label, n, pair.scale, dataclasses.replace(estimate, notes=(note,)))
    return measure.effect(label, n, pair.scale, estimate, _attained(found, level))


def _attained(found: Interpolation, level: float) -> str:
    if found.inward <= 1e-9:
        return f"attains {level_text(found.outer)} exactly"
    inner = level_text(max(found.inner, 0.0))
    return (
        f"{level_text(level)} by interpolation between exact {level_text(found.outer)} and {inner}"
    )


def geometric_mean_ratio(
    table: OccasionTable,
    first: str,
    second: str,
    *,
    substitute: str = "half",
    level: float = 0.95,
) -> Effect:
    """Estimate the ratio of the geometric means of two occasions.

    Parameters
    ----------
    table : OccasionTable
        Subjects with both occasions are used; their logarithms are taken.
    first, second : str
        Occasions; the ratio is second / first.
    substitute : {"half", "root2", "limit"}, default "half"
        What enters for a value below the limit.
    level : float, default 0.95
        Level of the interval.

    Returns
    -------
    Effect
        The mean log ratio and its t interval, back-transformed. Not given when more than half
        of an occasion lies beyond a limit, or for one subject.

    Raises
    ------
    TooFewError
        When no subject has both occasions.
    DataError
        When a value is zero or negative.

    Notes
    -----
    Only the centre and the limits are back-transformed, never a standard deviation. The t
    interval asks for log ratios that are near normal.

    References
    ----------
    .. [1] Bland, J. M. and Altman, D. G. (1996). Transformations, means, and confidence
       intervals. BMJ 312, 1079.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[8, 4], [6, 6], [4, 8], [8, 2]], occasions=["before", "after"]
    ... )
    >>> estimate = geometric_mean_ratio(table, "before", "after").estimate
    >>> round(estimate.value, 4), round(estimate.low, 3), round(estimate.high, 2)
    (0.7071, 0.17, 2.94)
    """
    logs = table.on_scale("log")
    label = f"{second} vs {first}"
    n = complete_pair(logs, first, second, f"The {GEOMETRIC.name}").n_subjects
    try:
        found = paired_t(logs, first, second, substitute=substitute, level=level)
    except TooFewError as error:
        return GEOMETRIC.not_given(label, n, "log", Note("too few subjects", str(error)))
    if found.estimate is None:
        return GEOMETRIC.not_given(label, n, "log", MOSTLY_BEYOND)
    estimate = dataclasses.replace(found.estimate, notes=found.notes)
    return GEOMETRIC.effect(label, n, "log", estimate)


def percent_change(
    table: OccasionTable,
    first: str,
    second: str,
    *,
    substitute: str = "half",
    level: float = 0.95,
) -> Effect:
    """Estimate the change in percent: 100 times the ratio of geometric means less 1.

    Parameters
    ----------
    table : OccasionTable
        Subjects with both occasions are used; their logarithms are taken.
    first, second : str
        Occasions; a positive change is second > first.
    substitute : {"half", "root2", "limit"}, default "half"
        What enters for a value below the limit.
    level : float, default 0.95
        Level of the interval.

    Returns
    -------
    Effect
        The ratio of geometric means and its limits in percent.

    Raises
    ------
    TooFewError
        When no subject has both occasions.
    DataError
        When a value is zero or negative.

    See Also
    --------
    geometric_mean_ratio : The same as a ratio.

    Notes
    -----
    Percent changes are not symmetric: a halving is −50%, a doubling +100%. It is not the mean
    of the subjects' percent changes, which a few large rises dominate.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[8, 4], [6, 6], [4, 8], [8, 2]], occasions=["before", "after"]
    ... )
    >>> round(percent_change(table, "before", "after").estimate.value, 1)
    -29.3
    """
    found = geometric_mean_ratio(table, first, second, substitute=substitute, level=level)
    ratio = found.estimate
    if not found.is_given:
        return PERCENT.not_given(found.label, found.n_subjects, "log", ratio.notes[0])
    low, high = (None if limit is None else 100 * (limit - 1) for limit in (ratio.low, ratio.high))
    estimate = dataclasses.replace(
        ratio,
        name=PERCENT.name,
        value=100 * (ratio.value - 1),
        low=low,
        high=high,
        unit="%",
        no_change=0.0,
    )
    return PERCENT.effect(found.label, found.n_subjects, "log", estimate)
