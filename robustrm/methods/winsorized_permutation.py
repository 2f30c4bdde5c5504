"""Permutation of Winsorized means: extreme subject-centred values pulled in."""

from __future__ import annotations

from collections.abc import Sequence

from robustrm._checks import check_share
from robustrm.kernels.scores import winsorized_scores
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


def winsorized_permutation(
    table: OccasionTable,
    *,
    winsorize: float = 0.1,
    substitute: str = "half",
    null: str = "auto",
    draws: int | Sequence[int] | None = None,
    thresholds: Sequence[float] = (0.05,),
    rng: Rng = None,
) -> TestResult:
    """Test whether the occasions differ by Winsorized subject-centred values.

    Parameters
    ----------
    table : OccasionTable
        The rows complete on all occasions are used, on the table's scale.
    winsorize : float, default 0.1
        Share of all nk centred values pulled in at each end, in [0, 0.5).
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
        The within-subject F of the Winsorized values with its permutation p value.
        ``details`` holds ``p_f``, ``f_df``, ``winsorize`` and ``smallest_p``.

    Raises
    ------
    ArgumentError
        When `winsorize` is outside [0, 0.5).
    TooFewError
        Without a complete subject.
    BudgetError
        With ``null="exact"`` beyond the work budget.

    See Also
    --------
    mean_permutation : The same without pulling in.

    Notes
    -----
    Of all nk values less their subject's means, the g = ⌊winsorize · nk⌋ outermost at each end are
    pulled in to the next, and all are centred again by subject. The clip points do not depend on
    how a subject's values are arranged over the occasions, so the permutation p value is
    exact. The null is that of exchangeable occasions.

    References
    ----------
    .. [1] Huber, P. J. (1981). Robust Statistics. Wiley.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[91, 72, 60], [40, 31, 25], [120, 125, 80], [66, 50, 59]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ... )
    >>> result = winsorized_permutation(table.log())
    >>> round(result.p_value, 4), result.null
    (0.0556, 'exact')
    """
    found = problem(table, winsorize=winsorize, substitute=substitute)
    beside = f_details(found)
    return omnibus_result(
        found,
        NullOptions(null, draws, thresholds, rng),
        method="winsorized_permutation",
        df=beside["f_df"],
        estimand="Winsorized means of the subject-centred values",
        details={**beside, "winsorize": winsorize},
    )


def problem(
    table: OccasionTable, *, winsorize: float = 0.1, substitute: str = "half"
) -> AdditiveProblem:
    """Return the test on a table: scores are the Winsorized subject-centred values."""
    check_share("winsorize", winsorize)
    used = complete_rows(table, "The Winsorized permutation test")
    scores = winsorized_scores(used.substitute(substitute).centred_scores(), winsorize)
    return f_problem(used, scores)
