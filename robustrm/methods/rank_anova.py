"""Rank ANOVA-type test of the marginal distributions of the occasions."""

from __future__ import annotations

import math
import sys
from typing import Any

import numpy as np
from scipy import special

from robustrm._checks import check_level
from robustrm._format import fixed, p_phrase
from robustrm.errors import TooFewError
from robustrm.kernels import rank_model as kernel
from robustrm.kernels.anova import f_tail
from robustrm.kernels.hotelling import t_squared
from robustrm.results import Note, TestResult
from robustrm.table import OccasionTable
from robustrm.ties import Floats

SMALL = 20
"""Fewer subjects than this: the p value with finite denominator df is said beside."""


def rank_anova(table: OccasionTable, *, level: float = 0.95) -> TestResult:
    """Test whether the marginal distributions of the occasions differ, by overall ranks.

    Parameters
    ----------
    table : OccasionTable
        The rows complete on all occasions are used. Only the order of all values counts, so
        the scale and the size of values below a limit play no part.
    level : float, default 0.95
        Level of the intervals of the relative effects.

    Returns
    -------
    TestResult
        Statistic F with its asymptotic p value (``df`` ends in infinity). ``details`` holds
        ``relative_effects``, their ``relative_effect_errors`` and
        ``relative_effect_intervals`` (pairs, at ``level``), all in the order of the occasions;
        ``p_f`` and ``f_df`` with finite denominator degrees of freedom; the Wald-type
        ``wald``, ``wald_df``, ``p_wald``.

    Raises
    ------
    TooFewError
        With fewer than two complete subjects.
    ArgumentError
        When `level` is not in (0, 1).

    See Also
    --------
    friedman : Ranks within subjects, by arrangement; its p value is exact.
    rank_pair : The same relative effect for two occasions.

    Notes
    -----
    The values of all subjects and occasions are ranked together, N = nk. The relative effect of
    occasion j, p_j = (mean rank − 1/2)/N, estimates the probability that a value of that occasion
    exceeds one drawn from all occasions, ties half; without change it is 1/2. With V the
    covariance of the rank rows over N² and T = I − J/k, F = n p'Tp / tr(TV) is referred to
    F with tr(TV)²/tr(TVTV) and infinitely many degrees of freedom. F equals that of a
    within-subject analysis of variance of the ranks, its df (k − 1) times Box's epsilon.

    **The null hypothesis is that of equal marginal distributions**, with any dependence between
    occasions. It is not one of equal location: with unequal spread V is not the variance of p,
    and the test rejects too often at equal medians.

    Below 20 subjects the asymptotic p tends to be too small; the p value with (n − 1)·df1
    denominator degrees of freedom, that of the Greenhouse-Geisser correction, is said beside.
    The Wald-type statistic n p'C'(CVC')⁻¹Cp rejects far too often unless n is large.

    The intervals do not rest on the null. The variance of p_j is that of
    H(X_ij) − (1/k) Σ_s F_j(X_is), by the empirical distributions, over n; p_j lies between
    1/(2k) and 1 − 1/(2k), and its place between them gets a logit interval with the t quantile
    of n − 1 degrees of freedom.

    References
    ----------
    .. [1] Brunner, E., Domhof, S. and Langer, F. (2002). Nonparametric Analysis of Longitudinal
       Data in Factorial Experiments. Wiley.
    .. [2] Brunner, E. and Puri, M. L. (2001). Nonparametric methods in factorial designs.
       Statistical Papers 42, 1-52.
    .. [3] Akritas, M. G. and Brunner, E. (1997). A unified approach to rank tests for mixed
       models. Journal of Statistical Planning and Inference 61, 249-277.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[91, 72, 60], [40, 31, 25], [120, 125, 80], [66, 50, 59], [33, 21, 20]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ... )
    >>> result = rank_anova(table)
    >>> round(result.statistic, 2), round(result.df[0], 2), result.df[1]
    (11.59, 1.58, inf)
    >>> [round(p, 3) for p in result.details["relative_effects"]]
    [0.607, 0.487, 0.407]
    """
    check_level(level)
    used = table.comparable()
    n, k = used.values.shape
    if n < 2:
        raise TooFewError(
            f"The rank ANOVA-type test needs at least 2 subjects with all {k} occasions, got {n}."
        )
    codes = used.order_codes()
    ranks = kernel.overall_midranks(codes)
    f, df1 = (float(part) for part in kernel.anova_type(ranks))
    df = (df1, math.inf)
    beside = {"p_f": _p_value(f, df1, (n - 1) * df1), "f_df": (df1, (n - 1) * df1)}
    effects = _effects(codes, ranks, level)
    return TestResult(
        method="rank_anova",
        statistic=f,
        statistic_name="F",
        df=df,
        p_value=_p_value(f, *df),
        null="asymptotic",
        n_subjects=n,
        n_occasions=k,
        hypothesis="The occasions have equal marginal distributions.",
        estimand="relative effects of the occasions",
        scale=used.scale,
        subjects=used.ids,
        notes=_notes(f, n, beside),
        details={**effects, **beside, **_wald(ranks)},
    )


def _p_value(f: float, df1: float, df2: float) -> float:
    if math.isnan(f):
        return math.nan
    if math.isinf(df2):
        tail = float(special.chdtrc(df1, df1 * f))
    else:
        tail = float(f_tail(np.asarray(f), df1, df2))
    return max(tail, sys.float_info.min)  # an underflow is not an impossibility


def _effects(codes: Floats, ranks: Floats, level: float) -> dict[str, Any]:
    """Return the relative effects with their intervals; None where an error is zero."""
    effects, errors = kernel.relative_effects(ranks), kernel.effect_errors(codes)
    quantile = float(special.stdtrit(len(codes) - 1, (1 + level) / 2))
    limits = np.transpose(kernel.effect_intervals(effects, errors, quantile)).tolist()
    return {
        "relative_effects": tuple(effects.tolist()),
        "relative_effect_errors": tuple(errors.tolist()),
        "relative_effect_intervals": tuple(
            None if math.isnan(low) else (low, high) for low, high in limits
        ),
        "level": level,
    }


def _wald(ranks: Floats) -> dict[str, Any]:
    """Return the Wald-type statistic: T² of the rank rows, referred to chi-square."""
    wald, df = float(t_squared(ranks)), ranks.shape[1] - 1
    p = math.nan if math.isnan(wald) else max(special.chdtrc(df, wald), sys.float_info.min)
    return {"wald": wald, "wald_df": df, "p_wald": float(p)}


def _notes(f: float, n: int, beside: dict[str, Any]) -> tuple[Note, ...]:
    if math.isnan(f):
        return (
            Note(
                "zero variance",
                "The ranks of all subjects change by the same amounts, so F is not defined.",
                "No p value is given.",
            ),
        )
    if n >= SMALL:
        return ()
    df1, df2 = (fixed(df) for df in beside["f_df"])
    return (
        Note(
            "few subjects",
            f"With {n} subjects, below {SMALL}, the asymptotic P tends to be too small.",
            f"With {df1} and {df2} degrees of freedom it is: {p_phrase(beside['p_f'])}.",
        ),
    )
