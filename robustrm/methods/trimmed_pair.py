"""Yuen's comparison of the trimmed means of two dependent occasions."""

from __future__ import annotations

import numpy as np

from robustrm._checks import check_alternative, check_level
from robustrm.kernels import trimmed as kernel
from robustrm.methods.trimming import (
    check_left,
    occasion_details,
    share_text,
    shift_result,
)
from robustrm.results import TestResult
from robustrm.table import OccasionTable
from robustrm.ties import MERGE, Floats, power_of_two


def trimmed_pair(
    table: OccasionTable,
    first: str,
    second: str,
    *,
    trim: float = 0.2,
    alternative: str = "two-sided",
    substitute: str = "half",
    level: float = 0.95,
) -> TestResult:
    """Compare the trimmed means of two occasions (Yuen's test for dependent samples).

    The estimand is the difference of two trimmed means, each of one occasion. The trimmed mean
    of the differences is another quantity: see `trimmed_difference`.

    Parameters
    ----------
    table : OccasionTable
        Subjects with both occasions are used, on the table's scale.
    first, second : str
        Occasions; the difference is second − first, on logs the ratio second / first.
    trim : float, default 0.2
        Share γ cut at each end of each occasion, in [0, 0.5): g = ⌊γn⌋ values.
    alternative : {"two-sided", "greater", "less"}, default "two-sided"
        ``"greater"`` means that the second occasion is larger.
    substitute : {"half", "root2", "limit"}, default "half"
        What enters for a value below the limit.
    level : float, default 0.95
        Level of the two-sided interval.

    Returns
    -------
    TestResult
        With the difference of the trimmed means, or the ratio of the trimmed geometric means,
        and its t interval on h − 1 degrees of freedom. ``details`` holds ``trimmed_means`` and
        ``winsorized_sds`` (first, second) and ``standard_error``, all on the table's scale,
        ``trim``, ``g`` (cut at each end) and ``h`` (left).

    Raises
    ------
    TooFewError
        With fewer than two subjects that have both occasions, or fewer than two left.
    ArgumentError
        When an occasion or option is not known.

    See Also
    --------
    trimmed_difference : The trimmed mean of the differences, another estimand.
    trimmed_anova : The same comparison over all occasions.

    Notes
    -----
    With Winsorized variances s²_w1, s²_w2 and covariance s_w12 over the n subjects,
    d_j = (n − 1)s²_wj/(h(h − 1)) and d_12 = (n − 1)s_w12/(h(h − 1)), the statistic is
    t = (ȳ_t2 − ȳ_t1)/√(d_1 + d_2 − 2d_12) on h − 1 degrees of freedom [1]_, [2]_. Each occasion
    is cut and Winsorized apart, so other subjects may be cut at each, and the pairing enters by
    the covariance. It asks for no symmetry and no equal spread. The t distribution is an
    approximation: with fewer than about 8 subjects, or with many equal values, it is rough.
    Without trimming this is the paired t test.

    References
    ----------
    .. [1] Yuen, K. K. (1974). The two-sample trimmed t for unequal population variances.
       Biometrika 61, 165-170.
    .. [2] Wilcox, R. R. (2012). Introduction to Robust Estimation and Hypothesis Testing, 3rd
       ed., section 5.9: dependent samples. Section cited from memory.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[9.1, 7.2], [4.0, 3.1], [12.0, 12.5], [6.6, 5.0], [3.3, 2.1], [47.5, 26.0]],
    ...     occasions=["before", "after"],
    ... )
    >>> result = trimmed_pair(table.log(), "before", "after")
    >>> round(result.statistic, 3), result.df
    (-1.83, (3.0,))
    """
    direction = check_alternative(alternative)
    check_level(level)
    used = table.pair(first, second).substitute(substitute)
    title = f"The comparison of trimmed means of {second!r} against {first!r}"
    check_left(used.n_subjects, trim, title=title, whom="with both")
    size = power_of_two(used.values)
    y = used.values / size  # t does not depend on it, and no square leaves the floats
    value, error = (float(part) * size for part in kernel.trimmed_mean_difference(y, trim))
    share = share_text(trim)
    return shift_result(
        used,
        value,
        error,
        is_defined=not _is_constant(y, trim),
        method="trimmed_pair",
        trim=trim,
        alternative=direction,
        level=level,
        names=(f"difference of {share} trimmed means", f"ratio of {share} trimmed geometric means"),
        hypotheses=(
            f"The two occasions have equal {share} trimmed means.",
            f"The ratio of {share} trimmed geometric means is 1.",
        ),
        details=occasion_details(y, trim, size),
    )


def _is_constant(y: Floats, trim: float) -> bool:
    """Whether the Winsorized differences agree to rounding: t is then not defined."""
    w = kernel.winsorized_rows(y, trim)
    gaps = w[:, 1] - w[:, 0]
    noise = 4 * float(np.finfo(np.float64).eps * np.max(np.abs(w)))
    return float(np.ptp(gaps)) <= max(MERGE * float(np.max(np.abs(gaps))), 2 * noise)
