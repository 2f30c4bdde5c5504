"""How many subjects fell and rose: effect sizes that need the order of two values alone."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from robustrm._checks import check_level
from robustrm.kernels.binomial import clopper_pearson
from robustrm.methods.additive import complete_pair
from robustrm.methods.effects.effect import Effect, Measure
from robustrm.table import OccasionTable

FALL = Measure("probability of a fall", "direction", "0.5 without change; no change counts half")


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
    used = table.pair(first, second)
    gaps, _ = used.paired(first, second)
    codes = used.order_codes()
    moved = np.sign(codes[:, 1] - codes[:, 0])
    return Directions(
        fell=int((moved < 0).sum()),
        unchanged=int(((moved == 0) & ~gaps.unknown).sum()),
        rose=int((moved > 0).sum()),
        unknown=int(((moved == 0) & gaps.unknown).sum()),
    )


def probability_of_fall(
    table: OccasionTable, first: str, second: str, *, level: float = 0.95
) -> Effect:
    """Estimate the probability that a subject's value at `second` is below that at `first`.

    Parameters
    ----------
    table : OccasionTable
        Subjects with both occasions are used; the scale plays no part.
    first, second : str
        Occasions.
    level : float, default 0.95
        Level of the Clopper-Pearson interval.

    Returns
    -------
    Effect
        Ties and unknown directions count half in the estimate; the interval takes the lower
        limit with all of them counted as no fall and the upper with all counted as falls, so
        it holds its level whatever they are.

    Raises
    ------
    TooFewError
        When no subject has both occasions.

    References
    ----------
    .. [1] Clopper, C. J. and Pearson, E. S. (1934). The use of confidence or fiducial limits
       illustrated in the case of the binomial. Biometrika 26, 404-413.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[91, 60], [40, 25], [120, 80], [66, 59], [33, 20], [75, 75]],
    ...     occasions=["week 0", "week 12"],
    ... )
    >>> effect = probability_of_fall(table, "week 0", "week 12")
    >>> round(effect.estimate.value, 3), round(effect.estimate.low, 3), effect.estimate.high
    (0.917, 0.359, 1.0)
    """
    check_level(level)
    complete_pair(table, first, second, "The probability of a fall")
    moved = directions(table, first, second)
    open_cases = moved.unchanged + moved.unknown
    low, _ = clopper_pearson(moved.fell, moved.n, level)
    _, high = clopper_pearson(moved.fell + open_cases, moved.n, level)
    remark = f"{moved.fell} fell, {moved.unchanged} did not change, {moved.rose} rose"
    if moved.unknown:
        remark += f", {moved.unknown} unknown (both beyond the limit)"
    estimate = FALL.estimate(
        (moved.fell + open_cases / 2) / moved.n,
        (float(low), float(high)),
        level,
        "Clopper-Pearson",
        no_change=0.5,
    )
    return FALL.effect(f"{second} vs {first}", moved.n, None, estimate, remark)
