"""Page's trend test of whether values rise over the occasions in a stated order."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from robustrm._checks import check_alternative, check_member, check_names
from robustrm.errors import ArgumentError
from robustrm.kernels.null.forms import linear
from robustrm.kernels.null.tables import permutation_tables
from robustrm.kernels.scores import rank_scores
from robustrm.methods.additive import (
    AdditiveProblem,
    NullOptions,
    Rng,
    complete_rows,
    normal_p,
    omnibus_result,
)
from robustrm.results import TestResult
from robustrm.table import OccasionTable
from robustrm.ties import Floats


def page_trend(
    table: OccasionTable,
    *,
    order: Sequence[str],
    scores: Sequence[float] | None = None,
    alternative: str = "two-sided",
    null: str = "auto",
    draws: int | Sequence[int] | None = None,
    thresholds: Sequence[float] = (0.05,),
    rng: Rng = None,
) -> TestResult:
    """Test for a trend over the occasions in an order stated beforehand.

    Parameters
    ----------
    table : OccasionTable
        The rows complete on the occasions of `order` are used. Only the order of a subject's
        own values counts, so the scale plays no part.
    order : sequence of str
        The occasions in the order in which values are expected to rise. Required: a trend
        read off the data is no test.
    scores : sequence of float, optional
        One number an occasion, in `order`, such as the weeks; default 1, 2, ..., k.
    alternative : {"two-sided", "greater", "less"}, default "two-sided"
        ``"greater"`` means rising in the stated order.
    null : {"auto", "exact", "monte carlo", "importance sampling", "saddlepoint"}, default "auto"
        Exact within the stated work budget, Monte Carlo beyond it.
        Importance sampling and saddlepoint are for far tails.
    draws : int or sequence of int, optional
        Monte Carlo draws, or their stages.
    thresholds : sequence of float, default (0.05,)
        Levels that the p value is compared with.
    rng : Generator, SeedSequence, int or None
        Randomness of Monte Carlo draws.

    Returns
    -------
    TestResult
        Statistic L with its exact conditional p value, ties included. ``details`` holds
        ``rank_sums`` (in `order`), ``z``, ``p_normal``, ``mean_spearman`` (without ties the
        average over subjects of the rank correlation with the order; default scores only) and
        ``smallest_p``.

    Raises
    ------
    ArgumentError
        When `order` does not name the occasions, or `scores` do not fit it.
    TooFewError
        Without a complete subject.
    BudgetError
        With ``null="exact"`` beyond the work budget.

    Notes
    -----
    L = Σ_j c_j R_j with rank sums R_j and occasion scores c_j. Without ties its mean is
    nk(k+1)²/4 and its variance n k²(k+1)²(k−1)/144 with scores 1..k; the normal approximation
    beside uses the permutation variance, which is right with ties too. The two-sided p is
    twice the smaller tail. The null is that of exchangeable occasions; a small p says that
    ranks rise (or fall) in the stated order on average, not that every step does.

    References
    ----------
    .. [1] Page, E. B. (1963). Ordered hypotheses for multiple treatments: a significance test
       for linear ranks. Journal of the American Statistical Association 58, 216-230.

    Examples
    --------
    Cotton strength on five levels of potash (Hollander & Wolfe 1973, values from memory).

    >>> strength = [
    ...     [7.46, 7.17, 7.76, 8.14, 7.63],
    ...     [7.68, 7.57, 7.73, 8.15, 8.0],
    ...     [7.21, 7.8, 7.74, 7.87, 7.93],
    ... ]
    >>> levels = ["144", "108", "72", "54", "36"]
    >>> table = OccasionTable.from_array(strength, occasions=levels)
    >>> result = page_trend(table, order=levels, alternative="greater")
    >>> result.statistic, round(result.p_value, 6)
    (158.0, 0.002492)
    """
    direction = check_alternative(alternative)
    found = problem(table, order=order, scores=scores, alternative=alternative)
    n, k = found.scores.shape
    ranks = (found.scores + k + 1) / 2
    _, weights = _declared(table, order, scores)
    z = trend_z(ranks, weights)
    details = {
        "rank_sums": tuple(ranks.sum(axis=0).tolist()),
        "z": z,
        "p_normal": normal_p(z, direction),
    }
    if scores is None:
        # Page (1963): L and the average Spearman correlation are linear in each other
        page = found.observed_statistic
        details["mean_spearman"] = 12 * page / (n * k * (k**2 - 1)) - 3 * (k + 1) / (k - 1)
    return omnibus_result(
        found,
        NullOptions(null, draws, thresholds, rng),
        method="page_trend",
        estimand=f"trend of the ranks in the order {', '.join(found.used.occasions)}",
        alternative=direction,
        details=details,
    )


def problem(
    table: OccasionTable,
    *,
    order: Sequence[str],
    scores: Sequence[float] | None = None,
    alternative: str = "two-sided",
) -> AdditiveProblem:
    """Return the test on a table: twice the centred mid-ranks, weighted by occasion scores."""
    labels, weights = _declared(table, order, scores)
    used = complete_rows(table.select(occasions=labels), "Page's trend test")
    n, k = used.values.shape
    doubled = rank_scores(used.order_codes())
    middle = n * (k + 1) * float(weights.sum()) / 2
    return AdditiveProblem(
        used,
        doubled,
        permutation_tables(doubled),
        linear(weights, side=check_alternative(alternative)),
        lambda line: np.asarray(line / 2 + middle),
        "L",
    )


def _declared(
    table: OccasionTable, order: Sequence[str], scores: Sequence[float] | None
) -> tuple[tuple[str, ...], Floats]:
    labels = check_names("order", order, least=2)
    for label in labels:
        check_member("order", label, table.occasions)
    weights = np.arange(1.0, len(labels) + 1) if scores is None else np.array(scores, float)
    if weights.shape != (len(labels),) or not np.isfinite(weights).all():
        raise ArgumentError(
            f"`scores` must hold one finite number for each of the {len(labels)} occasions of "
            f"`order`, got {scores!r}."
        )
    if (np.diff(weights) < 0).any() or weights[0] == weights[-1]:
        raise ArgumentError(f"`scores` must rise in the stated order, got {scores!r}.")
    return labels, weights


def trend_z(ranks: Floats, weights: Floats) -> float:
    """Return (L − mean) / SD under permutations of the mid-ranks (n, k), ties included."""
    k = ranks.shape[-1]
    centred = ranks - (k + 1) / 2
    lines = weights - weights.mean()
    variance = float(np.sum(centred**2) / (k - 1) * np.sum(lines**2))
    return float(centred.sum(axis=0) @ lines) / math.sqrt(variance) if variance else math.nan
