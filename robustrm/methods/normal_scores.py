"""Normal scores within subjects: ranks replaced by quantiles of the normal distribution."""

from __future__ import annotations

from collections.abc import Sequence

from robustrm.kernels import scores as kernels
from robustrm.methods.additive import (
    AdditiveProblem,
    NullOptions,
    Rng,
    chi2_details,
    chi2_problem,
    complete_rows,
    omnibus_result,
)
from robustrm.results import TestResult
from robustrm.table import OccasionTable


def normal_scores(
    table: OccasionTable,
    *,
    null: str = "auto",
    draws: int | Sequence[int] | None = None,
    thresholds: Sequence[float] = (0.05,),
    rng: Rng = None,
) -> TestResult:
    """Test whether the occasions rank alike, giving the extreme ranks more weight.

    Parameters
    ----------
    table : OccasionTable
        The rows complete on all occasions are used. Only the order of a subject's own
        values counts, so the scale plays no part.
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
        The χ² form of the statistic with its permutation p value. ``details`` holds
        ``p_chi2``, ``score_sums`` (in the order of the occasions) and ``smallest_p``.

    Raises
    ------
    TooFewError
        Without a complete subject.
    BudgetError
        With ``null="exact"`` beyond the work budget.

    See Also
    --------
    friedman : The same with the ranks themselves.

    Notes
    -----
    Score a_ij = Φ⁻¹(r_ij / (k+1)) with mid-ranks r within the subject, centred by subject;
    the statistic is (k−1) Σ_j (Σ_i a_ij)² / ΣΣ a_ij². With three occasions and no ties the
    scores are proportional to the centred ranks and the test is Friedman's. The null is that
    of exchangeable occasions.

    References
    ----------
    .. [1] van der Waerden, B. L. (1952). Order tests for the two-sample problem and their
       power. Indagationes Mathematicae 14, 453-458.
    .. [2] Conover, W. J. (1999). Practical Nonparametric Statistics, 3rd ed., section 5.10.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[9, 7, 6, 5], [4, 3, 2, 1], [12, 8, 10, 5]],
    ...     occasions=["week 0", "week 2", "week 6", "week 12"],
    ... )
    >>> result = normal_scores(table)
    >>> round(result.statistic, 3), round(result.p_value, 4), result.null
    (8.335, 0.0069, 'exact')
    """
    found = problem(table)
    return omnibus_result(
        found,
        NullOptions(null, draws, thresholds, rng),
        method="normal_scores",
        df=(found.scores.shape[1] - 1,),
        estimand="consistency of the rank order of the occasions, extremes weighted",
        details={**chi2_details(found), "score_sums": tuple(found.observed.tolist())},
    )


def problem(table: OccasionTable) -> AdditiveProblem:
    """Return the test on a table."""
    used = complete_rows(table, "The normal-scores test")
    scores = kernels.normal_scores(used.order_codes())
    return chi2_problem(used, scores)
