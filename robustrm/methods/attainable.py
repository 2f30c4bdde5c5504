"""The smallest p value that a design can reach: said before the analysis, not after."""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass

from robustrm._checks import check_choice, check_count
from robustrm._format import counted, number
from robustrm.methods.adjusting import TITLES, adjusted
from robustrm.methods.registry import ADJUSTMENTS
from robustrm.results import FollowUps


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
    check_choice("adjust", adjust, ADJUSTMENTS)
    smallest = min(1.0, sides * math.ldexp(1.0, -n_subjects))
    best = adjusted([smallest] * n_comparisons, adjust)
    return Attainable(n_subjects, n_comparisons, adjust, smallest, min(best), alpha)


def attainable_of(family: FollowUps) -> Attainable:
    """Say how small the p values of a family could have become on the table it was made on."""
    return Attainable(
        n_subjects=max(comparison.result.n_subjects for comparison in family),
        n_comparisons=len(family),
        adjust=family.adjust,
        smallest_p=family.smallest_p,
        smallest_p_adjusted=family.smallest_p_adjusted,
        alpha=1 - family.level,
    )
