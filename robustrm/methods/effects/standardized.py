"""Differences over their spread: robust, and parametric."""

from __future__ import annotations

import numpy as np
from scipy import special

from robustrm._checks import check_choice, check_count, check_level, check_share
from robustrm._format import fixed
from robustrm.kernels import effect_sizes as kernel
from robustrm.kernels.bootstrap import percentile, replicates
from robustrm.kernels.location import cut
from robustrm.kernels.noncentral_t import noncentrality_limits
from robustrm.methods.additive import Rng, complete_pair
from robustrm.methods.beyond import MOSTLY_BEYOND, is_mostly_beyond
from robustrm.methods.effects.effect import Effect, Measure, no_variation, too_few
from robustrm.results import Note
from robustrm.table import OccasionTable
from robustrm.ties import MERGE, Floats, power_of_two

LEAST = 10
"""Subjects from which the robust standardized difference is given."""

ROBUST = Measure(
    "robust standardized difference",
    "standardized",
    "trimmed mean over Winsorized SD, scaled to be the mean over the SD where normal",
)
COHEN = {
    "differences": Measure(
        "Cohen's d_z", "parametric", "mean difference over the SD of the differences"
    ),
    "occasions": Measure(
        "Cohen's d_av", "parametric", "mean difference over the root mean square of both SDs"
    ),
}


def robust_standardized_difference(
    table: OccasionTable,
    first: str,
    second: str,
    *,
    trim: float = 0.2,
    substitute: str = "half",
    level: float = 0.95,
    draws: int = 9999,
    rng: Rng = None,
) -> Effect:
    """Estimate the trimmed mean of the differences over their Winsorized spread.

    Parameters
    ----------
    table : OccasionTable
        Subjects with both occasions are used, on the table's scale.
    first, second : str
        Occasions; differences are second − first, on the log scale log ratios.
    trim : float, default 0.2
        Share cut, and pulled in, at each end.
    substitute : {"half", "root2", "limit"}, default "half"
        What enters for a value below the limit.
    level : float, default 0.95
        Level of the interval.
    draws : int, default 9999
        Bootstrap resamples.
    rng : Generator, SeedSequence, int or None
        Randomness of the resamples.

    Returns
    -------
    Effect
        With the percentile bootstrap interval. Not given below 10 subjects, when more than
        half of an occasion lies beyond a limit, or without Winsorized spread.

    Raises
    ------
    TooFewError
        When no subject has both occasions.

    Notes
    -----
    With g = ⌊trim · n⌋ values cut at each end it is c ȳ_t / s_w. The factor c is the SD of a
    standard normal law Winsorized by g/n, the share really cut (.642 at .2), so that for a
    normal law it is the mean over the SD. Of what is not normal it describes the middle, not
    the tails. The source recommends the percentile bootstrap.

    References
    ----------
    .. [1] Algina, J., Keselman, H. J. and Penfield, R. D. (2005). An alternative to Cohen's
       standardized mean difference effect size. Psychological Methods 10, 317-328.
    .. [2] Algina, J., Keselman, H. J. and Penfield, R. D. (2005). Effect sizes and their
       intervals: the two-level repeated measures case. Educational and Psychological
       Measurement 65, 241-258.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[50, 50 - d] for d in (-3, 0, 1, 2, 3, 4, 5, 7, 9, 30)], occasions=["a", "b"]
    ... )
    >>> round(robust_standardized_difference(table, "a", "b", rng=1).estimate.value, 3)
    -0.915
    """
    check_level(level)
    check_share("trim", trim)
    check_count("draws", draws, least=99)
    pair = complete_pair(table, first, second, f"The {ROBUST.name}").substitute(substitute)
    label, n = f"{second} vs {first}", pair.n_subjects
    if n < LEAST:
        return ROBUST.not_given(label, n, pair.scale, too_few(ROBUST.name, LEAST, n))
    if is_mostly_beyond(pair):
        return ROBUST.not_given(label, n, pair.scale, MOSTLY_BEYOND)
    d = pair.paired(first, second)[0].values
    d = d / power_of_two(d)
    value = float(kernel.robust_standardized(d, trim))
    if not np.isfinite(value):
        return ROBUST.not_given(label, n, pair.scale, _FLAT)
    drawn = replicates(
        d[:, None],
        lambda samples: kernel.robust_standardized(samples[..., 0], trim)[..., None],
        draws=draws,
        rng=np.random.default_rng(rng),
    )
    found = percentile(drawn, level)
    none = bool(found.degenerate[0])
    estimate = ROBUST.estimate(
        value,
        None if none else (float(found.low[0]), float(found.high[0])),
        level,
        "percentile bootstrap",
        scale=pair.scale,
        notes=(_NO_LIMITS,) if none else (),
    )
    g = cut(n, trim)
    remark = f"{g} of {n} cut at each end, factor {fixed(kernel.winsorized_normal_sd(g / n), 3)}"
    return ROBUST.effect(label, n, pair.scale, estimate, remark)


_NO_LIMITS = Note(
    "no interval",
    "Too many resamples have no Winsorized spread.",
    "The estimate stands without one.",
)


_FLAT = no_variation("After the extremes are pulled in, all differences are equal")


def standardized_mean_difference(
    table: OccasionTable,
    first: str,
    second: str,
    *,
    standardizer: str = "differences",
    substitute: str = "half",
    level: float = 0.95,
) -> Effect:
    """Estimate the mean difference over a standard deviation: Cohen's d, parametric.

    Parameters
    ----------
    table : OccasionTable
        Subjects with both occasions are used, on the table's scale.
    first, second : str
        Occasions; differences are second − first, on the log scale log ratios.
    standardizer : {"differences", "occasions"}, default "differences"
        The SD of the differences (d_z), or the root mean square of the SDs of the two
        occasions (d_av).
    substitute : {"half", "root2", "limit"}, default "half"
        What enters for a value below the limit.
    level : float, default 0.95
        Level of the interval.

    Returns
    -------
    Effect
        Cohen's d_z with the exact noncentral t interval, or d_av with Bonett's. Not given for one
        subject, when more than half of an occasion lies beyond a limit, or without spread.

    Raises
    ------
    TooFewError
        When no subject has both occasions.

    Notes
    -----
    d_z grows with the correlation of the occasions and is not comparable with d of independent
    groups; d_av does not. Both intervals ask for a normal law: d_z of the differences, d_av of
    the pairs, with any two variances. Neither number is corrected for its bias away from 0,
    a factor of about 1 + 3/(4n − 5).

    References
    ----------
    .. [1] Cohen, J. (1988). Statistical Power Analysis for the Behavioral Sciences, 2nd ed.,
       section 2.3.5.
    .. [2] Steiger, J. H. and Fouladi, R. T. (1997). Noncentrality interval estimation and the
       evaluation of statistical models. In Harlow, Mulaik and Steiger (eds.), What If There
       Were No Significance Tests?, chapter 9.
    .. [3] Bonett, D. G. (2008). Confidence intervals for standardized linear contrasts of
       means. Psychological Methods 13, 99-109.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[9, 7], [4, 3], [12, 12], [6, 5]], occasions=["before", "after"]
    ... )
    >>> estimate = standardized_mean_difference(table, "before", "after").estimate
    >>> round(estimate.value, 3), round(estimate.low, 2), round(estimate.high, 2)
    (-1.225, -2.53, 0.17)
    """
    check_choice("standardizer", standardizer, tuple(COHEN))
    check_level(level)
    measure = COHEN[standardizer]
    pair = complete_pair(table, first, second, measure.name).substitute(substitute)
    label, n = f"{second} vs {first}", pair.n_subjects
    reason = _cohen_reason(pair, measure.name, standardizer)
    if reason is not None:
        return measure.not_given(label, n, pair.scale, reason)
    if standardizer == "differences":
        value, low, high = _of_differences(pair.paired(first, second)[0].values, level)
        kind = "noncentral t"
    else:
        value, low, high = _of_occasions(pair.values, level)
        kind = "Bonett"
    estimate = measure.estimate(value, (low, high), level, kind, scale=pair.scale)
    return measure.effect(label, n, pair.scale, estimate)


def _cohen_reason(pair: OccasionTable, name: str, standardizer: str) -> Note | None:
    if pair.n_subjects < 2:
        return too_few(name, 2, pair.n_subjects)
    if is_mostly_beyond(pair):
        return MOSTLY_BEYOND
    if standardizer == "differences" and _is_constant(pair.paired(*pair.occasions)[0].values):
        return no_variation("All differences are equal")
    if standardizer == "occasions" and _is_constant(pair.values):
        return no_variation("On each occasion all values are equal")
    return None


def _is_constant(values: Floats) -> bool:
    scaled = values / power_of_two(values)
    return bool((np.ptp(scaled, axis=0) <= MERGE).all())


def _of_differences(d: Floats, level: float) -> tuple[float, float, float]:
    root = np.sqrt(d.size)
    value = float(kernel.standardized(d / power_of_two(d)))
    low, high = noncentrality_limits(value * root, d.size - 1, level)
    return value, float(low / root), float(high / root)


def _of_occasions(y: Floats, level: float) -> tuple[float, float, float]:
    value, error = kernel.average_standardized(y / power_of_two(y))
    margin = float(special.ndtri((1 + level) / 2) * error)
    return float(value), float(value) - margin, float(value) + margin
