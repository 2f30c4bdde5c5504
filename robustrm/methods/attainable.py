"""The smallest p value that a design can reach: said before the analysis, not after."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from robustrm._checks import check_choice, check_count
from robustrm._format import counted, number
from robustrm.errors import TooFewError
from robustrm.methods.adjusting import TITLES, adjusted
from robustrm.methods.closed import MOST_OCCASIONS, closed_scores, smallest_closed
from robustrm.methods.follow_up import declared_pairs
from robustrm.methods.null_distribution import problem_of
from robustrm.methods.registry import METHODS, P_ADJUSTMENTS
from robustrm.results import FollowUps
from robustrm.table import OccasionTable

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, slots=True)
class Attainable:
    """How small a p value can become, whatever the data say.

    Parameters
    ----------
    n_subjects : int
        Subjects in the best-filled comparison.
    n_comparisons : int
        Size of the family.
    adjust : str
        Adjustment over the family.
    smallest_p, smallest_p_adjusted : float
        The smallest p value of one comparison, and after the adjustment when all
        comparisons are at their smallest together.
    alpha : float
        The level asked for.
    """

    n_subjects: int
    n_comparisons: int
    adjust: str
    smallest_p: float
    smallest_p_adjusted: float
    alpha: float

    @property
    def reachable(self) -> bool:
        """Whether an adjusted p value can reach the level."""
        return self.smallest_p_adjusted <= self.alpha

    def __str__(self) -> str:
        subjects = counted(self.n_subjects, "subject")
        comparisons = counted(self.n_comparisons, "comparison")
        if self.smallest_p == 0:
            return "P values of this test have no smallest one."
        text = f"With {subjects} and {comparisons} the smallest p is {number(self.smallest_p)}"
        if self.adjust != "none" and self.n_comparisons > 1:
            text += f", after {TITLES[self.adjust]} {number(self.smallest_p_adjusted)}"
        if not self.reachable:
            text += f"; no comparison can reach {number(self.alpha)} that way"
        return text + "."

    def to_dict(self) -> dict[str, object]:
        """Return plain values and the sentence."""
        return {**dataclasses.asdict(self), "reachable": self.reachable, "sentence": str(self)}


def attainable_signed_rank(
    n_subjects: int,
    n_comparisons: int,
    *,
    adjust: str = "holm",
    sides: int = 2,
    alpha: float = 0.05,
) -> Attainable:
    """Say how small a signed-rank p value can become in a design, before there are data.

    Parameters
    ----------
    n_subjects, n_comparisons : int
        Subjects with both occasions, and comparisons in the family.
    adjust : str, default "holm"
        Adjustment over the family.
    sides : {1, 2}, default 2
        Sides of the test.
    alpha : float, default 0.05
        Level asked for.

    Returns
    -------
    Attainable
        Without zero differences: all 2ⁿ sign patterns are equally likely, so the smallest
        p is 2^(1−n) two-sided. Every zero difference doubles it.

    Examples
    --------
    >>> pilot = attainable_signed_rank(6, 3)
    >>> pilot.smallest_p, pilot.smallest_p_adjusted, pilot.reachable
    (0.03125, 0.09375, False)
    """
    check_count("n_subjects", n_subjects)
    check_count("n_comparisons", n_comparisons)
    check_choice("adjust", adjust, P_ADJUSTMENTS)
    smallest = min(1.0, sides * math.ldexp(1.0, -n_subjects))
    best = adjusted([smallest] * n_comparisons, adjust)
    return Attainable(n_subjects, n_comparisons, adjust, smallest, min(best), alpha)


def attainable(
    table: OccasionTable,
    *,
    family: str | Sequence[tuple[str, str]] = "first",
    alternative: str = "two-sided",
    substitute: str = "half",
) -> pd.DataFrame:
    """Say how small the p value of every test with a null of arrangements can become here.

    Parameters
    ----------
    table : OccasionTable
        The table on the scale of the analysis: its size, gaps, ties and zeros count, not the
        direction of its changes.
    family : {"first", "all", "successive"} or list of (earlier, later), default "first"
        Comparisons that are adjusted together.
    alternative : {"two-sided", "greater", "less"}, default "two-sided"
        Direction of the comparisons.
    substitute : {"half", "root2", "limit"}, default "half"
        What enters for a value below the limit.

    Returns
    -------
    DataFrame
        One row a test and adjustment: ``method``, ``label`` (the comparison, all occasions, or
        the family), ``n_subjects``, ``adjust``, ``smallest_p`` (NaN where it cannot be found
        within the work budget). An adjusted value is the smallest that any comparison can
        reach when all are at their smallest together. Tests that need a stated order are left
        out, and so are those with too few subjects and those whose p is an approximation.

    Raises
    ------
    ArgumentError
        When the family is not known.

    Examples
    --------
    >>> from robustrm.table import OccasionTable
    >>> table = OccasionTable.from_array(
    ...     [[9, 7, 6], [4, 3, 2], [12, 8, 5], [7, 5, 4], [6, 5, 3], [8, 4, 3]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ... )
    >>> rows = attainable(table, family="all").set_index(["method", "adjust"]).smallest_p
    >>> [float(rows["signed_rank", adjust]) for adjust in ("holm", "hommel")]
    [0.09375, 0.03125]
    >>> float(rows["sign_flip", "closed"])
    0.03125
    """
    import pandas as pd

    common = {"alternative": alternative, "substitute": substitute}
    rows: list[_Row] = []
    for entry in METHODS:
        if entry.is_additive and not entry.requires:
            options = {name: value for name, value in common.items() if name in entry.options}
            if entry.kind == "omnibus":
                rows.extend(_overall_row(table, entry.name, options))
            else:
                rows.extend(_family_rows(table, entry.name, family, options))
    if alternative == "two-sided" and table.n_occasions <= MOST_OCCASIONS:
        rows.extend(_closed_rows(table, family, substitute))
    return pd.DataFrame(rows, columns=["method", "label", "n_subjects", "adjust", "smallest_p"])


_Row = tuple[str, str, int, str, float]


def _overall_row(table: OccasionTable, name: str, options: dict[str, Any]) -> list[_Row]:
    try:
        problem = problem_of(table, name, **options)
    except TooFewError:
        return []
    return [(name, "all occasions", problem.used.n_subjects, "none", _or_nan(problem.smallest_p))]


def _family_rows(
    table: OccasionTable,
    name: str,
    family: str | Sequence[tuple[str, str]],
    options: dict[str, Any],
) -> list[_Row]:
    rows: list[_Row] = []
    for first, second in declared_pairs(table, family):
        label = f"{second} vs {first}"
        try:
            problem = problem_of(table, name, first=first, second=second, **options)
        except TooFewError:
            rows.append((name, label, 0, "none", math.nan))
        else:
            n = problem.used.n_subjects
            rows.append((name, label, n, "none", _or_nan(problem.smallest_p)))
    alone, largest = [row[-1] for row in rows], max(row[2] for row in rows)
    together = f"family of {len(rows)}"
    for adjust in P_ADJUSTMENTS[1:]:
        best = np.array(adjusted(alone, adjust))
        reached = float(np.nanmin(best)) if np.isfinite(best).any() else math.nan
        rows.append((name, together, largest, adjust, reached))
    return rows


def _closed_rows(
    table: OccasionTable, family: str | Sequence[tuple[str, str]], substitute: str
) -> list[_Row]:
    used = table.comparable().substitute(substitute)
    if not used.n_subjects:
        return []
    label = f"family of {len(declared_pairs(used, family))}"
    return [
        (name, label, used.n_subjects, "closed", smallest_closed(scores))
        for name, scores in closed_scores(used).items()
    ]


def _or_nan(value: float | None) -> float:
    return math.nan if value is None else value


def attainable_of(family: FollowUps) -> Attainable:
    """Say how small the p values of a family could have become on the table it was made on."""
    return Attainable(
        n_subjects=max(comparison.result.n_subjects for comparison in family),
        n_comparisons=len(family),
        adjust=family.adjust,
        smallest_p=family.smallest_p,
        smallest_p_adjusted=family.smallest_p_adjusted,
        alpha=round(1 - family.level, 12),
    )
