"""Aligned ranks: subject-centred values ranked together."""

from __future__ import annotations

from collections.abc import Sequence

from robustrm.kernels.scores import aligned_scores
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


def aligned_ranks(
    table: OccasionTable,
    *,
    substitute: str = "half",
    null: str = "auto",
    draws: int | Sequence[int] | None = None,
    thresholds: Sequence[float] = (0.05,),
    rng: Rng = None,
) -> TestResult:
    """Test whether the occasions differ by ranks of the subject-centred values.

    Parameters
    ----------
    table : OccasionTable
        The rows complete on all occasions are used. Values are centred on the table's scale:
        take logs of a skewed marker first.
    substitute : {"half", "root2", "limit"}, default "half"
        What enters for a value below the limit.
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
        ``p_chi2``, ``rank_sums`` (in the order of the occasions) and ``smallest_p``.

    Raises
    ------
    TooFewError
        Without a complete subject.
    BudgetError
        With ``null="exact"`` beyond the work budget.

    See Also
    --------
    friedman : Ranks within subjects only.

    Notes
    -----
    Each value less its subject's mean is ranked among all nk of them; R_j are the sums by
    occasion. With v_ij the rank less its subject's mean rank, the statistic is
    (k−1) Σ_j (R_j − mean)² / Σ_ij v_ij²; without ties that is
    (k−1)[Σ_j R_j² − kn²(kn+1)²/4] / [kn(kn+1)(2kn+1)/6 − Σ_i R_i²/k]. Comparing values
    between subjects makes it more powerful than Friedman's test at small k.

    The null is that of exchangeable occasions: with equal means but serial correlation or
    unequal spread p is too often small (up to about .075 at a nominal .05). Equality of aligned
    values is judged in whole multiples of the reporting step; on logs, values closer than
    1e-10 of the largest are tied.

    References
    ----------
    .. [1] Hodges, J. L. and Lehmann, E. L. (1962). Rank methods for combination of independent
       experiments in analysis of variance. Annals of Mathematical Statistics 33, 482-497.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[91, 72, 60], [40, 31, 25], [120, 125, 80], [66, 50, 59]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ... )
    >>> result = aligned_ranks(table.log())
    >>> round(result.statistic, 3), round(result.p_value, 4), result.null
    (5.131, 0.0833, 'exact')
    """
    found = problem(table, substitute=substitute)
    n, k = found.scores.shape
    return omnibus_result(
        found,
        NullOptions(null, draws, thresholds, rng),
        method="aligned_ranks",
        df=(k - 1,),
        estimand="shift of the subject-centred values between occasions, by ranks",
        details={
            **chi2_details(found),
            "rank_sums": tuple((found.observed / (2 * k) + n * (n * k + 1) / 2).tolist()),
        },
    )


def problem(table: OccasionTable, *, substitute: str = "half") -> AdditiveProblem:
    """Return the test on a table: scores are 2k times the centred ranks."""
    used = complete_rows(table, "The aligned-ranks test")
    scores = aligned_scores(used.substitute(substitute).centred_scores())
    return chi2_problem(used, scores)
