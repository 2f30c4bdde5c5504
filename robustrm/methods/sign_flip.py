"""Sign flip: the exact test of a mean difference, with the interval that belongs to it."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from robustrm._checks import check_alternative, check_level
from robustrm._format import counted, level_text
from robustrm.kernels import subset_means
from robustrm.kernels.null.forms import linear
from robustrm.kernels.null.tables import sign_tables
from robustrm.methods.additive import AdditiveProblem, NullOptions, Rng, complete_pair, normal_p
from robustrm.methods.beyond import MOSTLY_BEYOND, is_mostly_beyond
from robustrm.results import Estimate, Note, TestResult
from robustrm.table import OccasionTable
from robustrm.ties import Floats

NAMES = ("mean difference", "ratio of geometric means")
RANDOM_SUBSETS = 99_999


def sign_flip(
    table: OccasionTable,
    first: str,
    second: str,
    *,
    alternative: str = "two-sided",
    substitute: str = "half",
    level: float = 0.95,
    null: str = "auto",
    draws: int | Sequence[int] | None = None,
    thresholds: Sequence[float] = (0.05,),
    rng: Rng = None,
) -> TestResult:
    """Test a mean difference between two occasions by flipping the signs of the differences.

    Parameters
    ----------
    table : OccasionTable
        Subjects with both occasions are used, on the table's scale: on logs the differences
        are log ratios.
    first, second : str
        Occasions; the difference is second − first.
    alternative : {"two-sided", "greater", "less"}, default "two-sided"
        ``"greater"`` means that the second occasion is larger.
    substitute : {"half", "root2", "limit"}, default "half"
        What enters for a value below the limit.
    level : float, default 0.95
        Least level of the two-sided interval.
    null : {"auto", "exact", "monte carlo", "importance sampling", "saddlepoint"}, default "auto"
        Exact to about 40 subjects, Monte Carlo beyond.
        Importance sampling and saddlepoint are for far tails.
    draws : int or sequence of int, optional
        Monte Carlo draws, or their stages.
    thresholds : sequence of float, default (0.05,)
        Levels that the p value is compared with.
    rng : Generator, SeedSequence, int or None
        Randomness of Monte Carlo draws, and of the interval beyond 40 subjects.

    Returns
    -------
    TestResult
        Statistic: the mean difference with its sign-flip p value; the estimate with the
        interval of all shifts that the test does not reject. ``details`` holds ``p_normal``
        and ``smallest_p``.

    Raises
    ------
    TooFewError
        When no subject has both occasions.
    ArgumentError
        When an occasion or option is not known.

    See Also
    --------
    signed_rank : The same for ranks of the differences, which resists outliers.

    Notes
    -----
    Exact when the differences are distributed symmetrically about a centre. The interval runs
    between two order statistics of the means of all 2ⁿ − 1 non-empty subsets of the
    differences; it attains 1 − 2c/2ⁿ for the largest whole c that keeps it at `level`, and
    none at 95% exists below 6 subjects. Beyond 40 subjects it is taken from 99,999 random
    subsets. The mean follows every outlier: on a skewed marker use logs.

    References
    ----------
    .. [1] Fisher, R. A. (1935). The Design of Experiments, section 21.
    .. [2] Hartigan, J. A. (1969). Using subsample values as typical values. Journal of the
       American Statistical Association 64, 1303-1317.

    Examples
    --------
    Darwin's maize, 15 pairs, eighths of an inch (Fisher 1935): 1726 of 32768.

    >>> gaps = [49, -67, 8, 16, 6, 23, 28, 41, 14, 29, 56, 24, 75, 60, -48]
    >>> table = OccasionTable.from_array(
    ...     [[100, 100 + gap] for gap in gaps], occasions=["self", "cross"]
    ... )
    >>> result = sign_flip(table, "self", "cross")
    >>> result.p_value * 32768
    1726.0
    """
    direction = check_alternative(alternative)
    check_level(level)
    test = problem(table, first, second, alternative=alternative, substitute=substitute)
    pair = test.used
    values = pair.paired(first, second)[0].values
    found = test.tail(NullOptions(null, draws, thresholds, rng))
    estimate = None if is_mostly_beyond(pair) else mean_shift(values, pair, level, rng)
    return TestResult(
        method="sign_flip",
        statistic=test.observed_statistic,
        statistic_name=test.symbol,
        df=(),
        **found.fields(),
        n_subjects=values.size,
        n_occasions=2,
        hypothesis=(
            f"The {'log ratios' if pair.scale == 'log' else 'differences'} are distributed "
            "symmetrically about zero."
        ),
        estimand=NAMES[pair.scale == "log"],
        scale=pair.scale,
        alternative=direction,
        estimate=estimate,
        subjects=pair.ids,
        notes=(*found.notes, *_no_interval(estimate, values.size, level)),
        details={"p_normal": normal_p(_z(test.scores), direction), **found.details()},
    )


def problem(
    table: OccasionTable,
    first: str,
    second: str,
    *,
    alternative: str = "two-sided",
    substitute: str = "half",
) -> AdditiveProblem:
    """Return the test on a pair of occasions: a subject's score is plus or minus its difference."""
    pair = complete_pair(table, first, second, "The sign flip").substitute(substitute)
    gaps, _ = pair.paired(first, second)
    # from sums of scores (steps of the data, or logs) to means in the unit of the values
    widest = int(np.argmax(np.abs(gaps.scores)))
    unit = float(gaps.values[widest] / gaps.scores[widest]) if gaps.scores.any() else 1.0
    factor = unit / gaps.values.size
    form = linear(1.0, side=check_alternative(alternative))
    tables = sign_tables(gaps.scores)
    symbol = "mean log ratio" if pair.scale == "log" else "mean difference"
    return AdditiveProblem(
        pair, gaps.scores, tables, form, lambda t: np.asarray(factor * t), symbol
    )


def mean_shift(values: Floats, pair: OccasionTable, level: float, rng: Rng) -> Estimate:
    """Return the mean difference (on logs a ratio) with the interval of the sign flip."""
    limits, attained = _interval(values, level, rng)
    return Estimate.of_shift(
        NAMES,
        value=float(values.mean()),
        unit=pair.unit,
        scale=pair.scale,
        kind="exact" if values.size <= subset_means.LARGEST else "random subsets",
        limits=limits,
        level=attained,
    )


def _interval(
    values: Floats, level: float, rng: Rng
) -> tuple[tuple[float, float] | None, float | None]:
    n = values.size
    whole = 2.0**n if n <= subset_means.LARGEST else RANDOM_SUBSETS + 1.0
    # a guard for rounding: a level such as 0.9375 is attained exactly at some n
    rank = int((1 - level) / 2 * whole * (1 + 1e-12))
    if rank < 1:
        return None, None
    if n <= subset_means.LARGEST:
        limits = (
            subset_means.subset_mean(values, rank),
            -subset_means.subset_mean(-values, rank),
        )
    else:
        means = subset_means.random_subset_means(values, RANDOM_SUBSETS, np.random.default_rng(rng))
        limits = (float(means[rank - 1]), float(means[-rank]))
    return limits, 1 - 2 * rank / whole


def _z(scores: Floats) -> float:
    deviation = float(np.sqrt(np.sum(scores**2)))
    return float(scores.sum()) / deviation if deviation else math.nan


def _no_interval(estimate: Estimate | None, n: int, level: float) -> tuple[Note, ...]:
    if estimate is None:
        return (MOSTLY_BEYOND,)
    if estimate.low is not None:
        return ()
    return (
        Note(
            "no interval",
            f"With {counted(n, 'difference')} no exact interval reaches {level_text(level)}.",
            "The estimate stands without one.",
        ),
    )
