"""Wilcoxon's signed-rank test with the Hodges-Lehmann estimate of the shift."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from robustrm._checks import Alternative, check_alternative, check_choice, check_level
from robustrm._format import counted, level_text, listing, number_range, p_cell, percent
from robustrm.kernels import walsh
from robustrm.kernels.null.forms import linear
from robustrm.kernels.null.tables import sign_tables
from robustrm.kernels.scores import signed_ranks
from robustrm.methods.additive import (
    AdditiveProblem,
    NullOptions,
    NullTail,
    Rng,
    complete_pair,
    normal_p,
)
from robustrm.methods.beyond import MOSTLY_BEYOND, is_mostly_beyond
from robustrm.results import Estimate, Note, TestResult
from robustrm.table import OccasionTable
from robustrm.ties import Differences, Floats

NAMES = ("pseudo-median difference", "pseudo-median ratio")
FRACTIONS = (0.01, 0.1, 0.25, 0.5, 1 / math.sqrt(2), 1.0)
MANY_UNKNOWN = 0.2


def signed_rank(
    table: OccasionTable,
    first: str,
    second: str,
    *,
    alternative: str = "two-sided",
    zeros: str = "pratt",
    substitute: str = "half",
    level: float = 0.95,
    null: str = "auto",
    draws: int | Sequence[int] | None = None,
    thresholds: Sequence[float] = (0.05,),
    rng: Rng = None,
) -> TestResult:
    """Test whether values shifted between two occasions, and estimate by how much.

    Parameters
    ----------
    table : OccasionTable
        Subjects with both occasions are used. On the log scale the differences are log
        ratios and the estimate is a ratio.
    first, second : str
        Occasions; the difference is second − first.
    alternative : {"two-sided", "greater", "less"}, default "two-sided"
        ``"greater"`` means that the second occasion is larger.
    zeros : {"pratt", "drop"}, default "pratt"
        Zero differences are ranked and then left out (Pratt), or left out before ranking
        (Wilcoxon).
    substitute : {"half", "root2", "limit"}, default "half"
        What enters for a value below the limit; the range over other substitutes is in
        ``details["substitutes"]`` and in a note.
    level : float, default 0.95
        Least level of the two-sided interval.
    null : {"auto", "exact", "monte carlo", "importance sampling", "saddlepoint"}, default "auto"
        Exact by convolution at every usual n.
        Importance sampling and saddlepoint are for far tails.
    draws : int or sequence of int, optional
        Monte Carlo draws, where they are used.
    thresholds : sequence of float, default (0.05,)
        Levels that the p value is compared with.
    rng : Generator, SeedSequence, int or None
        Randomness of Monte Carlo draws.

    Returns
    -------
    TestResult
        Statistic T⁺, the sum of the ranks of rises, with its exact conditional p value; the
        Hodges-Lehmann estimate with its closed exact interval and attained level. ``details``
        holds ``t_plus``, ``t_minus``, ``n_zero``, ``n_unknown``, ``n_sizeless``, ``n_tied``,
        ``zeros``, ``rank_biserial``, ``p_normal``, ``smallest_p`` and, where values lie below a
        limit, ``substitutes``.

    Raises
    ------
    TooFewError
        When no subject has both occasions.
    ArgumentError
        When an occasion or option is not known.

    Notes
    -----
    The p value conditions on the sizes of the differences, ties and zeros included: all sign
    patterns of the non-zero differences are equally likely. Ties are found in units of the
    reporting step (on logs from exact fractions), so 0.525 − 0.5 ties with 0.825 − 0.8.

    The test asks for differences symmetric about zero. The estimate is the pseudo-median, the
    median of all averages of two differences; it is not the difference of the medians. The
    interval uses all n differences and the null distribution without ties; closed, it holds
    its level with ties and zeros too. With 5 subjects no interval reaches 95%. If the interval
    and p disagree because of zeros, a note says so.

    The size of a difference with a member below a limit is only bounded, so the test depends
    on the substitute. With more than half of an occasion beyond a limit no shift is estimated.

    Under Pratt's rule the rank-biserial correlation is (T⁺ − T⁻) / (n(n+1)/2), else
    (T⁺ − T⁻) / (T⁺ + T⁻) over the non-zero differences.

    References
    ----------
    .. [1] Wilcoxon, F. (1945). Individual comparisons by ranking methods. Biometrics
       Bulletin 1, 80-83.
    .. [2] Pratt, J. W. (1959). Remarks on zeros and ties in the Wilcoxon signed rank
       procedures. Journal of the American Statistical Association 54, 655-667.
    .. [3] Hodges, J. L. and Lehmann, E. L. (1963). Estimates of location based on rank tests.
       Annals of Mathematical Statistics 34, 598-611.
    .. [4] Kerby, D. S. (2014). The simple difference formula. Comprehensive Psychology 3,
       11.IT.3.1.
    .. [5] Hornung, R. W. and Reed, L. D. (1990). Estimation of average concentration in the
       presence of nondetectable values. Applied Occupational and Environmental Hygiene 5, 46-51.

    Examples
    --------
    Seven exact doublings are seven equal log ratios:

    >>> table = OccasionTable.from_array(
    ...     [[0.1, 0.2], [0.3, 0.6], [0.7, 1.4], [1.1, 2.2], [1.3, 2.6], [1.7, 3.4], [1.9, 3.8]],
    ...     occasions=["before", "after"],
    ... )
    >>> result = signed_rank(table.log(), "before", "after")
    >>> result.p_value, result.details["n_tied"], round(result.estimate.value, 12)
    (0.015625, 7, 2.0)
    """
    direction = check_alternative(alternative)
    check_choice("zeros", zeros, ("pratt", "drop"))
    check_level(level)
    pair = complete_pair(table, first, second, "The signed-rank test")
    n = pair.n_subjects
    settings = _Settings(direction, zeros, level, NullOptions(null, draws, thresholds, rng))
    core = _core(pair, settings, substitute)
    spread = _over_substitutes(pair, settings)
    mostly_beyond = is_mostly_beyond(pair)
    estimate = None if mostly_beyond else _estimate(core, level, pair)
    return TestResult(
        method="signed_rank",
        statistic=core.test.observed_statistic,
        statistic_name=core.test.symbol,
        df=(),
        **core.null.fields(),
        n_subjects=n,
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
        notes=(
            *core.null.notes,
            *_zero_notes(core, zeros),
            *_estimate_notes(core, estimate, settings, mostly_beyond=mostly_beyond),
            *_substitute_notes(spread, estimate),
        ),
        details=_details(core, zeros, direction, spread),
    )


@dataclass(frozen=True, slots=True)
class _Settings:
    alternative: Alternative
    zeros: str
    level: float
    options: NullOptions


@dataclass(frozen=True, slots=True)
class _Core:
    test: AdditiveProblem
    gaps: Differences
    null: NullTail

    @property
    def n(self) -> int:
        return self.gaps.values.size

    @property
    def ranks(self) -> Floats:
        return np.asarray(np.abs(self.test.scores) / 2)

    @property
    def t_plus(self) -> float:
        return float(self.ranks[self.gaps.signs > 0].sum())

    @property
    def t_minus(self) -> float:
        return float(self.ranks[self.gaps.signs < 0].sum())

    @property
    def n_zero(self) -> int:
        return int((self.gaps.signs == 0).sum())

    @property
    def n_unknown(self) -> int:
        return int(self.gaps.unknown.sum())

    @property
    def n_sizeless(self) -> int:
        """Differences of a known direction whose size enters as zero: 10 and above 10."""
        codes = self.test.used.order_codes()
        return int(((self.gaps.signs == 0) & (codes[:, 0] != codes[:, 1])).sum())

    @property
    def centre(self) -> float:
        return float(walsh.pseudo_median(self.gaps.values))


def problem(
    table: OccasionTable,
    first: str,
    second: str,
    *,
    alternative: str = "two-sided",
    zeros: str = "pratt",
    substitute: str | float = "half",
) -> AdditiveProblem:
    """Return the test on a pair of occasions: scores are twice the signed ranks."""
    pair = complete_pair(table, first, second, "The signed-rank test").substitute(substitute)
    gaps, _ = pair.paired(first, second)
    scores = signed_ranks(gaps.sizes.astype(float), gaps.signs.astype(float), zeros)
    middle = float(np.abs(scores).sum()) / 4
    form = linear(1.0, side=check_alternative(alternative))
    return AdditiveProblem(
        pair, scores, sign_tables(scores), form, lambda line: np.asarray(line / 4 + middle), "T⁺"
    )


def _core(pair: OccasionTable, settings: _Settings, substitute: str | float) -> _Core:
    first, second = pair.occasions
    test = problem(
        pair,
        first,
        second,
        alternative=settings.alternative,
        zeros=settings.zeros,
        substitute=substitute,
    )
    return _Core(test, test.used.paired(first, second)[0], test.tail(settings.options))


def _estimate(core: _Core, level: float, pair: OccasionTable) -> Estimate:
    averages = walsh.walsh_averages(core.gaps.values)
    found = walsh.interval_rank(core.n, level)
    limits = None
    if found is not None:
        limits = (float(averages[found.rank - 1]), float(averages[-found.rank]))
    return Estimate.of_shift(
        NAMES,
        value=core.centre,
        limits=limits,
        level=None if found is None else found.level,
        kind="exact",
        unit=pair.unit,
        scale=pair.scale,
    )


def _details(
    core: _Core, zeros: str, alternative: Alternative, spread: dict[str, Any] | None
) -> dict[str, Any]:
    n = core.n
    whole = n * (n + 1) / 2 if zeros == "pratt" else core.t_plus + core.t_minus
    _, counts = np.unique(core.gaps.sizes[core.gaps.sizes > 0], return_counts=True)
    details: dict[str, Any] = {
        "t_plus": core.t_plus,
        "t_minus": core.t_minus,
        "n_zero": core.n_zero,
        "n_unknown": core.n_unknown,
        "n_sizeless": core.n_sizeless,
        "n_tied": int(counts[counts > 1].sum()),
        "zeros": zeros,
        "rank_biserial": (core.t_plus - core.t_minus) / whole if whole else 0.0,
        "p_normal": normal_p(normal_z(core.t_plus, core.ranks), alternative),
        **core.null.details(),
    }
    if spread is not None:
        details["substitutes"] = spread
    return details


def normal_z(t_plus: float, ranks: Floats) -> float:
    """Return T⁺ less its mean over its SD given the ranks, without continuity correction.

    Under the null T⁺ has mean Σ r / 2 and variance Σ r² / 4 (ties and zeros included).
    """
    deviation = math.sqrt(float((ranks**2).sum()) / 4)
    return (t_plus - float(ranks.sum()) / 2) / deviation if deviation else math.nan


def _over_substitutes(pair: OccasionTable, settings: _Settings) -> dict[str, Any] | None:
    """Return how estimate and p move as the substitute moves from near 0 to the limit."""
    if not pair.below.any():
        return None
    cores = [_core(pair, settings, fraction) for fraction in FRACTIONS]
    centres = [math.exp(c.centre) if pair.scale == "log" else c.centre for c in cores]
    p_values = [core.null.tail.p_value for core in cores]
    alpha = 1 - settings.level
    readings = {
        (p <= alpha, math.copysign(1, core.centre) if core.centre else 0.0)
        for p, core in zip(p_values, cores, strict=True)
    }
    return {
        "fractions": FRACTIONS,
        "estimate": (min(centres), max(centres)),
        "p_value": (min(p_values), max(p_values)),
        "p_values": tuple(p_values),
        "directions": tuple(float(np.sign(core.centre)) for core in cores),
        "reading": "unchanged" if len(readings) == 1 else "changes",
    }


def _zero_notes(core: _Core, zeros: str) -> list[Note]:
    notes = []
    n, known = core.n, core.n_zero - core.n_unknown - core.n_sizeless
    if known:
        rule = "ranked, then left out (Pratt)" if zeros == "pratt" else "left out before ranking"
        verb = "is" if known == 1 else "are"
        notes.append(Note("zeros", f"{known} of {n} differences {verb} zero: {rule}."))
    if core.n_sizeless:
        fact = f"{core.n_sizeless} of {n} differences known in direction only: one value lies "
        fact += "beyond the limit at which the other was measured."
        notes.append(Note("size unknown", fact, "Entered as zero differences."))
    if core.n_unknown:
        many = core.n_unknown > MANY_UNKNOWN * n
        notes.append(
            Note(
                "unknown differences",
                f"{core.n_unknown} of {counted(n, 'difference')} unknown, not zero: both values "
                "lie beyond the limit.",
                "Entered as zero differences.",
                "With so many, read the counts of falls and rises first." if many else "",
            )
        )
    return notes


def _estimate_notes(
    core: _Core, estimate: Estimate | None, settings: _Settings, *, mostly_beyond: bool
) -> list[Note]:
    n = core.n
    if mostly_beyond:
        return [MOSTLY_BEYOND]
    if estimate is None or estimate.low is None:
        return [
            Note(
                "no interval",
                f"With {counted(n, 'difference')} no exact interval reaches "
                f"{level_text(settings.level)}.",
                "The estimate stands without one.",
            )
        ]
    return _disagreement_note(core, estimate, settings)


def _disagreement_note(core: _Core, estimate: Estimate, settings: _Settings) -> list[Note]:
    if settings.alternative != "two-sided" or estimate.low is None or estimate.high is None:
        return []
    covers = estimate.low <= estimate.neutral <= estimate.high
    p = core.null.tail.p_value
    if covers == (p > 1 - settings.level):
        return []
    why = "zero or tied differences" if core.n_zero else "ties, or the steps of the exact levels"
    return [
        Note(
            "interval and p disagree",
            f"P = {p_cell(p)} while the {level_text(estimate.level or 0)} interval "
            f"{'includes' if covers else 'excludes'} no change.",
            f"The reason is {why}: the interval uses all differences and the untied null, "
            "p the differences as they are.",
        )
    ]


def _substitute_notes(spread: dict[str, Any] | None, estimate: Estimate | None) -> list[Note]:
    if spread is None:
        return []
    moved = "" if estimate is None else f"{estimate.name} {number_range(*spread['estimate'])}, "
    return [
        Note(
            "substitutes",
            f"With {listing([percent(f) for f in FRACTIONS])} of the limit entered: {moved}"
            f"P {number_range(*spread['p_value'])}.",
            "Before adjustment P stays on its side of the level and the direction holds."
            if spread["reading"] == "unchanged"
            else "Before adjustment P crosses the level, or the direction turns.",
        )
    ]
