"""Friedman's test of whether the occasions tend to rank alike within subjects."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

from robustrm.kernels.score_statistics import between, f_of, total
from robustrm.kernels.scores import rank_scores
from robustrm.methods.additive import (
    AdditiveProblem,
    NullOptions,
    Rng,
    chi2_details,
    chi2_problem,
    complete_rows,
    f_details,
    omnibus_result,
)
from robustrm.results import TestResult
from robustrm.table import OccasionTable


def friedman(
    table: OccasionTable,
    *,
    null: str = "auto",
    draws: int | Sequence[int] | None = None,
    thresholds: Sequence[float] = (0.05,),
    rng: Rng = None,
) -> TestResult:
    """Test whether the occasions tend to rank alike within subjects.

    Parameters
    ----------
    table : OccasionTable
        The rows complete on all occasions are used. Only the order of a subject's own
        values counts, so the scale plays no part.
    null : {"auto", "exact", "monte carlo", "importance sampling"}, default "auto"
        Exact within the stated work budget, Monte Carlo beyond it.
        Importance sampling is for far tails.
    draws : int or sequence of int, optional
        Monte Carlo draws; default 9,999, raised to 99,999 and 999,999 while the p value is
        not resolved against a threshold.
    thresholds : sequence of float, default (0.05,)
        Levels that the p value is compared with.
    rng : Generator, SeedSequence, int or None
        Randomness of Monte Carlo draws.

    Returns
    -------
    TestResult
        Statistic χ² with tie correction and its permutation p value. ``details`` holds
        ``kendall_w``, ``rank_sums`` (in the order of the occasions), ``p_chi2``,
        ``iman_davenport_f``, ``iman_davenport_df``, ``p_iman_davenport``, ``smallest_p``.

    Raises
    ------
    TooFewError
        Without a complete subject.
    BudgetError
        With ``null="exact"`` beyond the work budget.

    See Also
    --------
    signed_rank : Compares two occasions and estimates the shift.

    Notes
    -----
    The null distribution rearranges each subject's own values over the occasions, ties kept,
    so it is exact at any n. It tests exchangeable occasions: unequal spread or correlation
    can also make p small (level up to about .065 at a nominal .05 with equal means but serial
    correlation or unequal spread), and "the medians differ" is not what it shows. Kendall's
    W averages 1/n without any change. When all subjects rank the occasions alike, F is
    infinite and its p value is the exact one.

    References
    ----------
    .. [1] Friedman, M. (1937). The use of ranks to avoid the assumption of normality implicit
       in the analysis of variance. Journal of the American Statistical Association 32, 675-701.
    .. [2] Conover, W. J. (1999). Practical Nonparametric Statistics, 3rd ed., section 5.8.
    .. [3] Iman, R. L. and Davenport, J. M. (1980). Approximations of the critical region of
       the Friedman statistic. Communications in Statistics A9, 571-595.

    Examples
    --------
    Four subjects who rank three occasions alike; Friedman's table has P = 0.0046 at 8.0.

    >>> table = OccasionTable.from_array(
    ...     [[9, 7, 6], [4, 3, 2], [12, 8, 5], [7, 5, 4]], occasions=["week 0", "week 6", "week 12"]
    ... )
    >>> result = friedman(table)
    >>> result.statistic, round(result.p_value, 4), result.null
    (8.0, 0.0046, 'exact')
    """
    found = problem(table)
    n, k = found.scores.shape
    chi2 = found.observed_statistic
    return omnibus_result(
        found,
        NullOptions(null, draws, thresholds, rng),
        method="friedman",
        df=(k - 1,),
        estimand="consistency of the rank order of the occasions within subjects",
        details={
            "kendall_w": chi2 / (n * (k - 1)),
            "rank_sums": tuple(((found.observed + n * (k + 1)) / 2).tolist()),
            **chi2_details(found),
            **_iman_davenport(found),
        },
    )


def problem(table: OccasionTable) -> AdditiveProblem:
    """Return the test on a table."""
    used = complete_rows(table, "Friedman's test")
    scores = rank_scores(used.order_codes())
    return chi2_problem(used, scores)


def _iman_davenport(found: AdditiveProblem) -> dict[str, Any]:
    n = found.scores.shape[0]
    f = float(f_of(between(found.scores), total(found.scores), n))
    beside = f_details(found, f)
    # all subjects rank alike: no arrangement is more extreme, and the exact p is the smallest
    p = found.smallest_p if math.isinf(f) else beside["p_f"]
    return {"iman_davenport_f": f, "iman_davenport_df": beside["f_df"], "p_iman_davenport": p}
