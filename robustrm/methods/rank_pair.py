"""Paired Brunner-Munzel test: which of two occasions tends to larger values, over all subjects."""

from __future__ import annotations

import math
import sys
from collections.abc import Sequence
from typing import Literal, cast

import numpy as np
from scipy import special

from robustrm._checks import Alternative, check_alternative, check_draws, check_level
from robustrm._format import counted, level_text, number_range, p_cell
from robustrm.errors import BudgetError, TooFewError
from robustrm.kernels import rank_pair as kernel
from robustrm.kernels.null import studentized
from robustrm.kernels.rank_model import logit_interval
from robustrm.methods.additive import NullOptions, NullTail, Rng, check_null, monte_carlo_notes
from robustrm.results import Estimate, Note, TestResult
from robustrm.table import OccasionTable
from robustrm.ties import Floats

NAME = "probability of a larger value"


def rank_pair(
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
    """Test whether a value of the second occasion tends to exceed one of the first.

    Parameters
    ----------
    table : OccasionTable
        Subjects with both occasions are used. Only the order of all values counts, so the
        scale and the size of values below a limit play no part.
    first, second : str
        Occasions; the probability is that a value of the second is the larger one.
    alternative : {"two-sided", "greater", "less"}, default "two-sided"
        ``"greater"`` means that the second occasion is larger.
    level : float, default 0.95
        Level of the two-sided interval.
    null : {"auto", "exact", "monte carlo"}, default "auto"
        Exact, by all swaps, to about 30 subjects that changed; Monte Carlo beyond.
    draws : int or sequence of int, optional
        Monte Carlo draws, or their stages.
    thresholds : sequence of float, default (0.05,)
        Levels that the p value is compared with.
    rng : Generator, SeedSequence, int or None
        Randomness of Monte Carlo draws.

    Returns
    -------
    TestResult
        Statistic T with the p value of swapping both values within subjects; the probability
        that a value of the second occasion is larger, with its interval. ``details`` holds
        ``p_t`` and ``t_df`` (t approximation), ``standard_error`` (of the probability),
        ``share_rose`` (of subjects, ties half) and ``smallest_p``.

    Raises
    ------
    TooFewError
        With fewer than two subjects that have both occasions.
    BudgetError
        With ``null="exact"`` beyond the work budget.
    ArgumentError
        When an occasion or option is not known.

    See Also
    --------
    sign_test : The probability of a fall within a subject, which is another question.

    Notes
    -----
    The estimate p = P(X₁ < X₂) + P(X₁ = X₂)/2 is about one value drawn from each of the two
    marginal distributions, independently: about two different people. It is not the share of
    subjects that rose. All may rise a little while p stays near a half, because subjects differ
    more than occasions; ``share_rose`` stands beside.

    With Z_i = F₁(X_i2) − F₂(X_i1) by the empirical distributions, T = √n (p − 1/2) / sd(Z).
    T is studentized, so that the p value by swaps is exact when the two occasions are
    exchangeable within subjects, and approximately right in larger samples for p = 1/2 alone,
    with unequal spread (Konietschke and Pauly 2012). Where sd(Z) is zero (every value of one
    occasion above every one of the other, or all placements in step), T is infinite, or 0 at
    p = 1/2; arrangements with an infinite T count as equally extreme, so p stays valid. Ties
    count half.

    The interval is p ± t·SE on the logit scale, turned back, with t of n − 1 degrees of
    freedom: it cannot leave (0, 1). It does not come from the swaps and need not agree with
    the p value. With p at 0 or 1, or sd(Z) at zero, there is none.

    References
    ----------
    .. [1] Munzel, U. and Brunner, E. (2002). An exact paired rank test. Biometrical Journal 44,
       584-593.
    .. [2] Konietschke, F. and Pauly, M. (2012). A studentized permutation test for the
       nonparametric Behrens-Fisher problem in paired data. Electronic Journal of Statistics 6,
       1358-1372.
    .. [3] Brunner, E., Domhof, S. and Langer, F. (2002). Nonparametric Analysis of Longitudinal
       Data in Factorial Experiments. Wiley.

    Examples
    --------
    All six rise, but people differ by more:

    >>> table = OccasionTable.from_array(
    ...     [[11, 21], [20, 24], [31, 45], [42, 43], [50, 58], [60, 71]],
    ...     occasions=["before", "after"],
    ... )
    >>> result = rank_pair(table, "before", "after")
    >>> print(result.estimate)
    probability of a larger value 0.639 (95% interval 0.545 to 0.724)
    >>> result.details["share_rose"], result.p_value
    (1.0, 0.03125)
    """
    direction = check_alternative(alternative)
    check_level(level)
    used = table.pair(first, second)
    n = used.n_subjects
    if n < 2:
        raise TooFewError(
            f"The paired Brunner-Munzel test of {second!r} against {first!r} needs at least 2 "
            f"subjects with both, got {n}."
        )
    codes = used.order_codes()
    columns = kernel.swap_columns(codes)
    found = _null(columns, direction, NullOptions(null, draws, thresholds, rng))
    placements = columns.sum(axis=1)
    t = float(kernel.statistic_of(placements))
    estimate = _estimate(placements, level)
    rose = np.sign(codes[:, 1] - codes[:, 0])
    return TestResult(
        method="rank_pair",
        statistic=t,
        statistic_name="T",
        df=(),
        **found.fields(),
        n_subjects=n,
        n_occasions=2,
        hypothesis=(
            "A value of the second occasion is as likely above one of the first as below it."
        ),
        estimand="relative effect of the two marginal distributions",
        scale=used.scale,
        alternative=direction,
        estimate=estimate,
        subjects=used.ids,
        notes=(
            *found.notes,
            *_notes(used, placements, estimate),
            *_disagreement(estimate, found.tail.p_value, direction, level),
        ),
        details={
            "p_t": _p_t(t, n - 1, direction),
            "t_df": n - 1,
            "standard_error": float(kernel.error_of(placements)),
            "share_rose": float(0.5 + rose.mean() / 2),
            "smallest_p": found.smallest_p,
        },
    )


def _null(columns: Floats, direction: Alternative, options: NullOptions) -> NullTail:
    """Return the tail of the studentized statistic under all swaps, or refuse what it costs."""
    check_null(options.null)
    stages = check_draws(options.draws)
    cost = studentized.cost(columns)
    if options.null == "exact" and not cost.affordable:
        raise BudgetError(
            f"`null` must be 'auto' or 'monte carlo' for this table, got 'exact': {cost.sentence}."
        )
    found = studentized.tail(
        columns,
        side=direction,
        null=cast(Literal["auto", "exact", "monte carlo"], options.null),
        stages=stages,
        thresholds=tuple(options.thresholds),
        rng=np.random.default_rng(options.rng),
    )
    notes = monte_carlo_notes(found.tail, options.thresholds)
    return NullTail(found.tail, found.smallest_p, notes)


def _estimate(placements: Floats, level: float) -> Estimate:
    """Return p with its logit interval, none where its standard error is zero."""
    value, error = kernel.effect_of(placements), kernel.error_of(placements)
    quantile = float(special.stdtrit(placements.size - 1, (1 + level) / 2))
    low, high = (float(limit) for limit in logit_interval(value, error, quantile))
    given = not math.isnan(low)
    return Estimate(
        name=NAME,
        value=float(value),
        low=low if given else None,
        high=high if given else None,
        level=level if given else None,
        kind="logit t",
        no_change=0.5,
    )


def _p_t(t: float, df: int, alternative: Alternative) -> float:
    """Return the t approximation; NaN where T is infinite."""
    if not math.isfinite(t):
        return math.nan
    tails = {"greater": -t, "less": t, "two-sided": -abs(t)}
    tail = float(special.stdtr(df, tails[alternative]))
    return max(2 * tail if alternative == "two-sided" else tail, sys.float_info.min)


def _notes(used: OccasionTable, placements: Floats, estimate: Estimate) -> list[Note]:
    notes = []
    if not placements.any() and (used.order_codes()[:, 0] == used.order_codes()[:, 1]).all():
        fact = "Every subject has the same value on both occasions."
        notes.append(Note("all tied", fact, "All arrangements are alike and P is 1."))
    elif estimate.low is None:
        notes.append(
            Note(
                "zero variance",
                "All values of one occasion lie above all of the other."
                if estimate.value in (0.0, 1.0)
                else "All subjects stand in the same place of the other occasion's values.",
                "The estimated variance is zero: no interval and no t approximation are given.",
                "P by swaps stands.",
            )
        )
    n = used.n_subjects
    unknown = int(sum(np.prod(side.sum(axis=0)) for side in (used.below, used.above)))
    if unknown:
        half = unknown / (2 * n * n)
        ends = number_range(estimate.value - half, estimate.value + half)
        notes.append(
            Note(
                "order unknown",
                f"{unknown} of the {counted(n * n, 'comparison')} behind the probability are of "
                "two values beyond the same limit.",
                f"They count half; whichever way they fall, it is {ends}.",
            )
        )
    return notes


def _disagreement(
    estimate: Estimate, p: float, alternative: Alternative, level: float
) -> list[Note]:
    if alternative != "two-sided" or estimate.low is None or estimate.high is None:
        return []
    covers = estimate.low <= 0.5 <= estimate.high
    if covers == (p > 1 - level):
        return []
    return [
        Note(
            "interval and p disagree",
            f"P = {p_cell(p)} while the {level_text(level)} interval "
            f"{'includes' if covers else 'excludes'} a half.",
            "The interval is an approximation on the logit scale, p comes from all swaps.",
        )
    ]
