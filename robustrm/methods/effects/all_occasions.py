"""Effect sizes about all occasions together, by ranks."""

from __future__ import annotations

import numpy as np

from robustrm._checks import check_count, check_level
from robustrm._format import number
from robustrm.kernels import effect_sizes as kernel
from robustrm.kernels.bootstrap import percentile, replicates
from robustrm.kernels.scores import rank_scores
from robustrm.methods.additive import Rng, complete_rows
from robustrm.methods.effects.effect import Effect, Measure
from robustrm.methods.rank_anova import rank_anova
from robustrm.results import Estimate, Note
from robustrm.table import OccasionTable
from robustrm.ties import Floats

ALL = "all occasions"
W = Measure("Kendall's W", "all occasions", "agreement of the rank orders, 0 to 1")
RELATIVE = Measure(
    "relative effect",
    "all occasions",
    "probability of exceeding a value drawn from all occasions; 0.5 without change",
)


def kendall_w(
    table: OccasionTable, *, level: float = 0.95, draws: int = 9999, rng: Rng = None
) -> Effect:
    """Estimate how far the subjects agree in the rank order of the occasions.

    Parameters
    ----------
    table : OccasionTable
        The rows complete on all occasions are used; only the order within a row counts.
    level : float, default 0.95
        Level of the interval.
    draws : int, default 9999
        Bootstrap resamples.
    rng : Generator, SeedSequence, int or None
        Randomness of the resamples.

    Returns
    -------
    Effect
        Kendall's W, from 0 to 1, with a rough interval. Not given where every subject has the
        same value on all occasions.

    Raises
    ------
    TooFewError
        Without a complete subject.

    Notes
    -----
    W = 1/n + (1 − 1/n) r̄, where r̄ is the mean rank correlation between two subjects (exactly
    without ties): without any change it averages 1/n, and it is too large at small n.

    The interval is about the concordance in the population, which r̄ estimates without bias.
    Whole subjects are resampled. A plain percentile interval would be biased upward twice: by
    the bias of W, and because a resample draws subjects twice, which agree with themselves.
    Both biases are known, (1 − W)/(n − 1) and (1 − W)/n, and are taken out of the resampled
    values before the percentiles are read; the limits are then kept within [0, 1]. Should the
    interval miss W, it is widened to end at W and a note says so. When all subjects rank alike
    no resample differs, and the lower limit is an exact bound instead. All this is rough
    below about 20 subjects, most of all where agreement is high.

    References
    ----------
    .. [1] Kendall, M. G. and Babington Smith, B. (1939). The problem of m rankings. Annals of
       Mathematical Statistics 10, 275-287.
    .. [2] Efron, B. and Tibshirani, R. J. (1993). An Introduction to the Bootstrap, chapters
       10 and 13.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[9, 7, 6], [4, 3, 5], [12, 8, 5], [7, 5, 4]], occasions=["a", "b", "c"]
    ... )
    >>> effect = kendall_w(table, rng=1)
    >>> effect.estimate.value, effect.estimate.low < 0.5 < effect.estimate.high
    (0.4375, True)
    """
    check_level(level)
    check_count("draws", draws, least=99)
    used = complete_rows(table, W.name)
    scores = rank_scores(used.order_codes()).astype(np.float64)
    n = used.n_subjects
    value = float(kernel.concordance(scores))
    if np.isnan(value):
        fact = "Every subject has the same value on all occasions."
        return W.not_given(ALL, n, None, Note("all tied", fact))
    value = 1.0 if value > 1 - 1e-12 else value
    estimate = _with_interval(scores, value, level, draws, rng)
    remark = f"without any change it averages 1/n = {1 / n:.3f}"
    if n > 1:
        remark += f"; less this bias {number((n * value - 1) / (n - 1))}"
    return W.effect(ALL, n, None, estimate, remark)


def _with_interval(scores: Floats, value: float, level: float, draws: int, rng: Rng) -> Estimate:
    n = len(scores)
    if value == 1:
        return _same_order(scores, level)
    drawn = replicates(
        scores.reshape(n, -1),
        lambda samples: kernel.concordance(samples)[..., None],
        draws=draws,
        rng=np.random.default_rng(rng),
    )
    limits = percentile(drawn, level)
    if bool(limits.degenerate[0]):
        return W.estimate(value, None, level, _KIND, no_change=1 / n, notes=(_NO_LIMITS,))
    low, high = (
        float(np.clip(kernel.less_bias(limit[0], value, n), 0, 1))
        for limit in (limits.low, limits.high)
    )
    return W.estimate(value, (low, high), level, _KIND, no_change=1 / n, notes=(_ROUGH,))


_KIND = "percentile bootstrap less bias"
_NO_LIMITS = Note(
    "no interval",
    "In too many resamples no subject changes.",
    "The estimate stands without one.",
)
_ROUGH = Note(
    "rough interval",
    "The interval is about the agreement in the population, without the upward bias that W has, "
    "so W may lie near its upper end.",
    "With few subjects it is rough.",
)


def _same_order(scores: Floats, level: float) -> Estimate:
    """Return W = 1 with an exact lower bound: no resample differs."""
    n, k = scores.shape
    squares = float(np.sum(scores[0] ** 2))
    note = Note(
        "same order",
        "All subjects rank the occasions alike, so resampling shows no variation.",
        "The lower limit is an exact bound: it lets all unseen orders be the opposite one.",
    )
    # the scores are twice the centred ranks, whose squares sum to (k³ − k)/12 without ties
    stretch = (k**3 - k) / 3 / squares
    low = kernel.agreement_limit(n, level, stretch)
    return W.estimate(1.0, (low, 1.0), level, "exact bound", no_change=1 / n, notes=(note,))


def relative_effects(table: OccasionTable, *, level: float = 0.95) -> tuple[Effect, ...]:
    """Estimate for every occasion how its values rank among those of all occasions.

    Parameters
    ----------
    table : OccasionTable
        The rows complete on all occasions are used; only the order of the values counts.
    level : float, default 0.95
        Level of each interval.

    Returns
    -------
    tuple of Effect
        One an occasion, in the order of the table: the probability that its value exceeds one
        drawn from all occasions and subjects, ties half, with a logit interval.

    Raises
    ------
    TooFewError
        With fewer than two complete subjects.

    See Also
    --------
    rank_anova : The test of equal marginal distributions, whose estimates these are.

    Notes
    -----
    Without change each is 1/2; together they average 1/2, so one that is higher makes another
    lower. It is about the occasions of the group, not about change within a subject.

    References
    ----------
    .. [1] Brunner, E., Domhof, S. and Langer, F. (2002). Nonparametric Analysis of Longitudinal
       Data in Factorial Experiments. Wiley.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[91, 72, 60], [40, 31, 25], [120, 125, 80], [66, 50, 59], [33, 21, 20]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ... )
    >>> [round(effect.estimate.value, 3) for effect in relative_effects(table)]
    [0.607, 0.487, 0.407]
    """
    found = rank_anova(table, level=level)
    values = found.details["relative_effects"]
    intervals = found.details["relative_effect_intervals"]
    return tuple(
        RELATIVE.effect(occasion, found.n_subjects, None, _relative(value, interval, level))
        for occasion, value, interval in zip(table.occasions, values, intervals, strict=True)
    )


def _relative(value: float, interval: tuple[float, float] | None, level: float) -> Estimate:
    reason = Note(
        "no interval",
        "The effect is as low or as high as it can be, or its ranks do not vary.",
        "The estimate stands without one.",
    )
    notes = (reason,) if interval is None else ()
    return RELATIVE.estimate(value, interval, level, "logit", no_change=0.5, notes=notes)
