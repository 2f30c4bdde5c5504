"""Whole-row sign flip: an omnibus test that does not ask for exchangeable occasions."""

from __future__ import annotations

from collections.abc import Sequence

from robustrm.kernels.null.tables import sign_tables
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


def row_flip(
    table: OccasionTable,
    *,
    substitute: str = "half",
    null: str = "auto",
    draws: int | Sequence[int] | None = None,
    thresholds: Sequence[float] = (0.05,),
    rng: Rng = None,
) -> TestResult:
    """Test whether the occasions differ by mirroring whole subjects.

    Parameters
    ----------
    table : OccasionTable
        The rows complete on all occasions are used, on the table's scale: logs for a skewed
        marker, where symmetry is nearer the truth.
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
        The within-subject F with its sign-flip p value. ``details`` holds ``p_f``, ``f_df``
        and ``smallest_p``.

    Raises
    ------
    TooFewError
        Without a complete subject.
    BudgetError
        With ``null="exact"`` beyond the work budget.

    See Also
    --------
    mean_permutation : The same statistic under exchangeable occasions.

    Notes
    -----
    Each subject's row of deviations from its own mean is kept or mirrored as a whole. That is
    exact when every subject's contrasts are distributed symmetrically about zero, whatever
    their covariance: serial correlation, subject-specific trends and unequal spread are
    allowed. It is the companion of every permutation test when the occasions are ordered in
    time. The smallest p is 2^(1−n), so it needs about 8 subjects to be of use.

    References
    ----------
    .. [1] Fisher, R. A. (1935). The Design of Experiments, section 21.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[91, 72, 60], [40, 31, 25], [120, 125, 80], [66, 50, 59]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ... )
    >>> result = row_flip(table.log())
    >>> result.p_value, result.null
    (0.125, 'exact')
    """
    found = problem(table, substitute=substitute)
    beside = f_details(found)
    return omnibus_result(
        found,
        NullOptions(null, draws, thresholds, rng),
        method="row_flip",
        df=beside["f_df"],
        hypothesis=(
            "Every subject's contrasts between occasions are distributed symmetrically about "
            "zero, whatever their covariance."
        ),
        estimand="geometric means" if table.scale == "log" else "arithmetic means",
        details=beside,
    )


def problem(table: OccasionTable, *, substitute: str = "half") -> AdditiveProblem:
    """Return the test on a table: a subject's centred row is itself or its mirror image."""
    used = complete_rows(table, "The whole-row sign flip")
    scores = used.substitute(substitute).centred_scores()
    return f_problem(used, scores, sign_tables(scores))
