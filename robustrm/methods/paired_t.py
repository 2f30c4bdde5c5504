"""Paired t test: the parametric comparison of two occasions, shown beside."""

from __future__ import annotations

import math
import sys

import numpy as np
from scipy import special

from robustrm._checks import Alternative, check_alternative, check_level
from robustrm.errors import TooFewError
from robustrm.methods.beyond import MOSTLY_BEYOND, is_mostly_beyond
from robustrm.results import Estimate, Note, TestResult
from robustrm.table import OccasionTable
from robustrm.ties import MERGE, power_of_two


def paired_t(
    table: OccasionTable,
    first: str,
    second: str,
    *,
    alternative: str = "two-sided",
    substitute: str = "half",
    level: float = 0.95,
) -> TestResult:
    """Compare the means of two occasions by the paired t test.

    Parameters
    ----------
    table : OccasionTable
        Subjects with both occasions are used, on the table's scale.
    first, second : str
        Occasions; the difference is second − first, on logs the ratio second / first.
    alternative : {"two-sided", "greater", "less"}, default "two-sided"
        ``"greater"`` means that the second occasion is larger.
    substitute : {"half", "root2", "limit"}, default "half"
        What enters for a value below the limit.
    level : float, default 0.95
        Level of the two-sided interval.

    Returns
    -------
    TestResult
        With the mean difference, or the ratio of geometric means, and its t interval.

    Raises
    ------
    TooFewError
        With fewer than two subjects that have both occasions.
    ArgumentError
        When an occasion or option is not known.

    Notes
    -----
    Asks for normally distributed differences. With a skewed marker that is nearer the truth
    on logs; the estimand then is the ratio of geometric means.

    References
    ----------
    .. [1] Student (1908). The probable error of a mean. Biometrika 6, 1-25.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[9.1, 7.2], [4.0, 3.1], [12.0, 12.5], [6.6, 5.0]], occasions=["before", "after"]
    ... )
    >>> result = paired_t(table, "before", "after")
    >>> round(result.statistic, 3), result.df
    (-1.824, (3.0,))
    """
    direction = check_alternative(alternative)
    check_level(level)
    used = table.pair(first, second).substitute(substitute)
    gaps, _ = used.paired(first, second)
    n = gaps.values.size
    if n < 2:
        raise TooFewError(
            f"The paired t test of {second!r} against {first!r} needs at least 2 subjects "
            f"with both, got {n}."
        )
    size = power_of_two(gaps.values)
    mean = float(np.mean(gaps.values / size)) * size
    error = float(np.std(gaps.values / size, ddof=1)) / math.sqrt(n) * size
    # differences of derived values that agree to rounding are equal
    constant = float(np.ptp(gaps.values / size)) <= MERGE
    t = math.nan if constant else mean / error
    margin = float(special.stdtrit(n - 1, (1 + level) / 2)) * error
    mostly_beyond = is_mostly_beyond(used)
    estimate = Estimate.of_shift(
        NAMES,
        value=mean,
        limits=None if constant else (mean - margin, mean + margin),
        level=None if constant else level,
        kind="t",
        unit=used.unit,
        scale=used.scale,
    )
    return TestResult(
        method="paired_t",
        statistic=t,
        statistic_name="t",
        df=(float(n - 1),),
        p_value=t_p_value(t, n - 1, direction),
        null="parametric",
        n_subjects=n,
        n_occasions=2,
        hypothesis=(
            "The ratio of geometric means is 1."
            if used.scale == "log"
            else "The mean difference is zero."
        ),
        estimand=NAMES[used.scale == "log"],
        scale=used.scale,
        alternative=direction,
        estimate=None if mostly_beyond else estimate,
        subjects=used.ids,
        notes=(*((_CONSTANT,) if constant else ()), *((MOSTLY_BEYOND,) if mostly_beyond else ())),
    )


NAMES = ("mean difference", "ratio of geometric means")

_CONSTANT = Note(
    "no variation",
    "All differences are equal, so t is not defined.",
    "No p value and no interval are given.",
)


def t_p_value(t: float, df: int, alternative: Alternative) -> float:
    """Return the p value of t in one direction or both; NaN where t is not defined."""
    if math.isnan(t):
        return math.nan
    tails = {"greater": -t, "less": t, "two-sided": -abs(t)}
    tail = float(special.stdtr(df, tails[alternative]))
    tail = min(1.0, 2 * tail) if alternative == "two-sided" else tail
    return max(tail, sys.float_info.min)  # an underflow is not an impossibility
