"""Permutation form of the within-subject F: the values are permuted within subjects."""

from __future__ import annotations

from collections.abc import Sequence

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


def mean_permutation(
    table: OccasionTable,
    *,
    substitute: str = "half",
    null: str = "auto",
    draws: int | Sequence[int] | None = None,
    thresholds: Sequence[float] = (0.05,),
    rng: Rng = None,
) -> TestResult:
    """Test whether the occasion means differ by permuting each subject's own values.

    Parameters
    ----------
    table : OccasionTable
        The rows complete on all occasions are used, on the table's scale.
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
        The within-subject F with its permutation p value. ``details`` holds ``p_f`` (from the
        uncorrected F distribution), ``f_df`` and ``smallest_p``.

    Raises
    ------
    TooFewError
        Without a complete subject.
    BudgetError
        With ``null="exact"`` beyond the work budget.

    See Also
    --------
    anova : The same statistic with its parametric distribution.
    row_flip : A test of the means that does not ask for exchangeable occasions.

    Notes
    -----
    F rises with Σ_j (Σ_i (y_ij − ȳ_i))² over the arrangements of a table, because the total
    variation within subjects does not change. The null is that of exchangeable occasions:
    with equal means but serial correlation or unequal spread p is too often small (up to
    about .09 at a nominal .05). On the raw scale of a skewed marker a few people decide the
    result.

    References
    ----------
    .. [1] Fisher, R. A. (1935). The Design of Experiments, section 21.
    .. [2] Pitman, E. J. G. (1938). Significance tests which may be applied to samples from
       any populations: III. Biometrika 29, 322-335.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[91, 72, 60], [40, 31, 25], [120, 125, 80], [66, 50, 59]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ... )
    >>> result = mean_permutation(table.log())
    >>> round(result.statistic, 2), round(result.p_value, 4), result.null
    (6.6, 0.0556, 'exact')
    """
    found = problem(table, substitute=substitute)
    beside = f_details(found)
    return omnibus_result(
        found,
        NullOptions(null, draws, thresholds, rng),
        method="mean_permutation",
        df=beside["f_df"],
        estimand="geometric means" if table.scale == "log" else "arithmetic means",
        details=beside,
    )


def problem(table: OccasionTable, *, substitute: str = "half") -> AdditiveProblem:
    """Return the test on a table: scores are the subject-centred values."""
    used = complete_rows(table, "The mean permutation test")
    scores = used.substitute(substitute).centred_scores()
    return f_problem(used, scores)
