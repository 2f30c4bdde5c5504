"""Quade's test: ranks within subjects, weighted by how much each subject varies."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from robustrm.kernels.scores import quade_scores
from robustrm.methods.additive import (
    AdditiveProblem,
    NullOptions,
    Rng,
    complete_rows,
    f_details,
    f_problem,
    omnibus_result,
)
from robustrm.results import TestResult
from robustrm.table import OccasionTable


def quade(
    table: OccasionTable,
    *,
    substitute: str = "half",
    null: str = "auto",
    draws: int | Sequence[int] | None = None,
    thresholds: Sequence[float] = (0.05,),
    rng: Rng = None,
) -> TestResult:
    """Test whether the occasions rank alike, giving subjects with a wide range more weight.

    Parameters
    ----------
    table : OccasionTable
        The rows complete on all occasions are used. The ranges of the subjects are compared
        on the table's scale: take logs of a skewed marker first.
    substitute : {"half", "root2", "limit"}, default "half"
        What enters a subject's range for a value below the limit.
    null : {"auto", "exact", "monte carlo", "importance sampling"}, default "auto"
        Exact within the stated work budget, Monte Carlo beyond it.
        Importance sampling is for far tails.
    draws : int or sequence of int, optional
        Monte Carlo draws, or their stages.
    thresholds : sequence of float, default (0.05,)
        Levels that the p value is compared with.
    rng : Generator, SeedSequence, int or None
        Randomness of Monte Carlo draws.

    Returns
    -------
    TestResult
        Statistic F with its permutation p value. ``details`` holds ``p_f``, ``f_df``,
        ``weighted_sums`` (in the order of the occasions) and ``smallest_p``.

    Raises
    ------
    TooFewError
        Without a complete subject.
    BudgetError
        With ``null="exact"`` beyond the work budget.

    See Also
    --------
    friedman : The same with equal weights.

    Notes
    -----
    Subject i has weight q_i, the mid-rank of its range among the ranges, and scores
    S_ij = q_i (r_ij − (k+1)/2). With A = ΣΣ S², B = Σ_j S_j²/n, F = (n−1) B / (A − B) on
    k − 1 and (n−1)(k−1) degrees of freedom. When A = B all subjects rank alike, F is
    infinite and ``p_f`` is the exact p, (1/k!)^(n−1) without ties.

    The ranges must be comparable between subjects, which on the raw scale of a skewed marker
    they are not. The null is that of exchangeable occasions, not of equal medians.

    References
    ----------
    .. [1] Quade, D. (1979). Using weighted rankings in the analysis of complete blocks with
       additive block effects. Journal of the American Statistical Association 74, 680-683.
    .. [2] Conover, W. J. (1999). Practical Nonparametric Statistics, 3rd ed., section 5.8.

    Examples
    --------
    Seven stores and five brands (Conover 1999, pages 373-376, values from memory): F = 3.83.

    >>> sales = [
    ...     [5, 4, 7, 10, 12],
    ...     [1, 3, 1, 0, 2],
    ...     [16, 12, 22, 22, 35],
    ...     [5, 4, 3, 5, 4],
    ...     [10, 9, 7, 13, 10],
    ...     [19, 18, 28, 37, 58],
    ...     [10, 7, 6, 8, 7],
    ... ]
    >>> table = OccasionTable.from_array(sales, occasions=["A", "B", "C", "D", "E"])
    >>> result = quade(table, draws=9999, rng=1)
    >>> round(result.statistic, 2), round(result.details["p_f"], 4)
    (3.83, 0.0152)
    """
    found = problem(table, substitute=substitute)
    beside = f_details(found)
    if math.isinf(found.observed_statistic):
        beside["p_f"] = found.smallest_p
    return omnibus_result(
        found,
        NullOptions(null, draws, thresholds, rng),
        method="quade",
        df=beside["f_df"],
        estimand="consistency of the rank order of the occasions, weighted by subjects' ranges",
        details={**beside, "weighted_sums": tuple((found.observed / 4).tolist())},
    )


def problem(table: OccasionTable, *, substitute: str = "half") -> AdditiveProblem:
    """Return the test on a table: scores are four times Quade's."""
    used = complete_rows(table, "Quade's test")
    spans = used.substitute(substitute).spans().sizes.astype(np.float64)
    scores = quade_scores(used.order_codes(), spans)
    return f_problem(used, scores)
