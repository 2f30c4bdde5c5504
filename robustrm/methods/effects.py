"""Effect sizes of the planned contrasts and the overall test, with intervals where they exist."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from robustrm.kernels.binomial import clopper_pearson
from robustrm.results import Comparison, Estimate, FollowUps, TestResult, plain
from robustrm.table import OccasionTable


@dataclass(frozen=True, slots=True)
class Effect:
    """One effect size and what it is about.

    Parameters
    ----------
    label : str
        What is compared, in words.
    estimate : Estimate
        The effect size.
    remark : str
        How to read it, with its zero rule or its null value.
    n_subjects : int
        Subjects behind it.
    """

    label: str
    estimate: Estimate
    remark: str
    n_subjects: int

    def to_dict(self) -> dict[str, Any]:
        """Return plain values."""
        result: dict[str, Any] = plain(self)
        return result


@dataclass(frozen=True, slots=True)
class Directions:
    """How many subjects fell, did not change, rose; and how many are unknown.

    Unknown are those with both values beyond the same limit: not "no change".
    """

    fell: int
    unchanged: int
    rose: int
    unknown: int

    @property
    def n(self) -> int:
        """All subjects with both occasions."""
        return self.fell + self.unchanged + self.rose + self.unknown


def directions(table: OccasionTable, first: str, second: str) -> Directions:
    """Count in which direction the subjects moved from `first` to `second`."""
    used = table.comparable((first, second))
    gaps, _ = used.paired(first, second)
    codes = used.order_codes()
    moved = np.sign(codes[:, 1] - codes[:, 0])
    return Directions(
        fell=int((moved < 0).sum()),
        unchanged=int(((moved == 0) & ~gaps.unknown).sum()),
        rose=int((moved > 0).sum()),
        unknown=int(((moved == 0) & gaps.unknown).sum()),
    )


def probability_of_fall(table: OccasionTable, first: str, second: str, *, level: float) -> Effect:
    """Estimate the probability that a subject's value at `second` is below that at `first`.

    Parameters
    ----------
    table : OccasionTable
        Subjects with both occasions are used; the scale plays no part.
    first, second : str
        Occasions.
    level : float
        Level of the Clopper-Pearson interval.

    Returns
    -------
    Effect
        Ties and unknown directions count half in the estimate; the interval takes the lower
        limit with all of them counted as no fall and the upper with all counted as falls, so
        it holds its level whatever they are.

    References
    ----------
    .. [1] Clopper, C. J. and Pearson, E. S. (1934). The use of confidence or fiducial limits
       illustrated in the case of the binomial. Biometrika 26, 404-413.
    """
    moved = directions(table, first, second)
    open_cases = moved.unchanged + moved.unknown
    low, _ = clopper_pearson(moved.fell, moved.n, level)
    _, high = clopper_pearson(moved.fell + open_cases, moved.n, level)
    remark = f"{moved.fell} fell, {moved.unchanged} did not change, {moved.rose} rose"
    if moved.unknown:
        remark += f", {moved.unknown} unknown (both beyond the limit)"
    return Effect(
        label=f"{second} vs {first}",
        estimate=Estimate(
            name="probability of a fall",
            value=(moved.fell + open_cases / 2) / moved.n,
            low=float(low),
            high=float(high),
            level=level,
            kind="Clopper-Pearson",
            no_change=0.5,
        ),
        remark=remark,
        n_subjects=moved.n,
    )


def effect_sizes(
    table: OccasionTable, primary: FollowUps, omnibus: TestResult | None
) -> tuple[Effect, ...]:
    """Return the effect sizes of every planned contrast, then that of the overall test."""
    effects: list[Effect] = []
    for comparison in primary:
        if comparison.result.n_subjects == 0:
            continue
        effects.append(
            probability_of_fall(table, comparison.first, comparison.second, level=primary.level)
        )
        if "rank_biserial" in comparison.result.details:
            effects.append(_rank_biserial(comparison))
    if omnibus is not None and "kendall_w" in omnibus.details:
        effects.append(_kendall_w(omnibus))
    return tuple(effects)


def _rank_biserial(comparison: Comparison) -> Effect:
    details = comparison.result.details
    return Effect(
        label=comparison.label,
        estimate=Estimate(
            "matched-pairs rank-biserial correlation",
            float(details["rank_biserial"]),
            None,
            None,
            None,
            "point estimate",
            scale=comparison.result.scale,
            no_change=0.0,
        ),
        remark=(
            "−1 when all fell, 1 when all rose; "
            + (
                "zero differences count in the denominator"
                if details["zeros"] == "pratt"
                else "zero differences dropped"
            )
        ),
        n_subjects=comparison.result.n_subjects,
    )


def _kendall_w(omnibus: TestResult) -> Effect:
    return Effect(
        label="all occasions",
        estimate=Estimate(
            "Kendall's W",
            float(omnibus.details["kendall_w"]),
            None,
            None,
            None,
            "point estimate",
        ),
        remark=(
            "agreement of the rank orders, 0 to 1; without any change it averages "
            f"1/n = {1 / omnibus.n_subjects:.3f}"
        ),
        n_subjects=omnibus.n_subjects,
    )
