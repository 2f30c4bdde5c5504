"""Sign test: how many subjects rose, how many fell."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from robustrm._checks import check_alternative, check_level
from robustrm._format import counted
from robustrm.kernels.null.forms import linear
from robustrm.kernels.null.tables import sign_tables
from robustrm.methods.additive import AdditiveProblem, NullOptions, Rng, complete_pair, normal_p
from robustrm.methods.effects import Directions, directions, probability_of_fall
from robustrm.results import Note, TestResult
from robustrm.table import OccasionTable


def sign_test(
    table: OccasionTable,
    first: str,
    second: str,
    *,
    alternative: str = "two-sided",
    level: float = 0.95,
    null: str = "auto",
    draws: int | Sequence[int] | None = None,
    thresholds: Sequence[float] = (0.05,),
    rng: Rng = None,
) -> TestResult:
    """Test whether rises and falls between two occasions are equally likely.

    Parameters
    ----------
    table : OccasionTable
        Subjects with both occasions are used. Only the direction of a change counts, so the
        scale and the size of values below a limit play no part.
    first, second : str
        Occasions; a rise is second above first.
    alternative : {"two-sided", "greater", "less"}, default "two-sided"
        ``"greater"`` means that the second occasion is larger.
    level : float, default 0.95
        Level of the interval.
    null : {"auto", "exact", "monte carlo", "importance sampling", "saddlepoint"}, default "auto"
        Exact (binomial) at every usual n. Importance sampling and saddlepoint are for far tails.
    draws : int or sequence of int, optional
        Monte Carlo draws, where they are used.
    thresholds : sequence of float, default (0.05,)
        Levels that the p value is compared with.
    rng : Generator, SeedSequence, int or None
        Randomness of Monte Carlo draws.

    Returns
    -------
    TestResult
        Statistic: the number of rises, with its exact binomial p value; the probability of a
        fall with a Clopper-Pearson interval. ``details`` holds ``n_rose``, ``n_fell``,
        ``n_unchanged``, ``n_unknown``, ``p_normal`` and ``smallest_p``.

    Raises
    ------
    TooFewError
        When no subject has both occasions.
    ArgumentError
        When an occasion or option is not known.

    Notes
    -----
    Subjects without a change, and those with both values beyond the same limit, say nothing
    about the direction and are left out of the test; they count half in the estimate, and the
    interval holds whichever way they are counted. Of m changes, all 2ᵐ sign patterns are
    equally likely under the null.

    References
    ----------
    .. [1] Dixon, W. J. and Mood, A. M. (1946). The statistical sign test. Journal of the
       American Statistical Association 41, 557-566.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[9, 7], [4, 3], [12, 8], [7, 5], [6, 6], [8, 9]], occasions=["before", "after"]
    ... )
    >>> result = sign_test(table, "before", "after")
    >>> result.statistic, result.p_value
    (1.0, 0.375)
    """
    direction = check_alternative(alternative)
    check_level(level)
    test = problem(table, first, second, alternative=alternative)
    pair = test.used
    found = test.tail(NullOptions(null, draws, thresholds, rng))
    moved = directions(pair, first, second)
    return TestResult(
        method="sign_test",
        statistic=test.observed_statistic,
        statistic_name=test.symbol,
        df=(),
        **found.fields(),
        n_subjects=pair.n_subjects,
        n_occasions=2,
        hypothesis="A rise and a fall are equally likely.",
        estimand="probability of a fall",
        scale=pair.scale,
        alternative=direction,
        estimate=probability_of_fall(pair, first, second, level=level).estimate,
        subjects=pair.ids,
        notes=(*found.notes, *_left_out(moved)),
        details={
            "n_rose": moved.rose,
            "n_fell": moved.fell,
            "n_unchanged": moved.unchanged,
            "n_unknown": moved.unknown,
            "p_normal": normal_p(_z(moved), direction),
            **found.details(),
        },
    )


def problem(
    table: OccasionTable, first: str, second: str, *, alternative: str = "two-sided"
) -> AdditiveProblem:
    """Return the test on a pair of occasions: scores 1 for a rise, −1 for a fall, else 0."""
    pair = complete_pair(table, first, second, "The sign test")
    codes = pair.order_codes()
    signs = np.sign(codes[:, 1] - codes[:, 0])
    changes = float(np.abs(signs).sum())
    form = linear(1.0, side=check_alternative(alternative))
    return AdditiveProblem(
        pair,
        signs,
        sign_tables(signs),
        form,
        lambda line: np.asarray((line + changes) / 2),
        "rises",
    )


def _z(moved: Directions) -> float:
    changes = moved.rose + moved.fell
    return (moved.rose - moved.fell) / math.sqrt(changes) if changes else math.nan


def _left_out(moved: Directions) -> tuple[Note, ...]:
    count = moved.unchanged + moved.unknown
    if not count:
        return ()
    fact = f"{counted(count, 'subject')} of {moved.n} left out of the test: {moved.unchanged} "
    fact += f"without a change, {moved.unknown} with both values beyond the limit."
    return (Note("no direction", fact, "They count half in the estimate."),)
