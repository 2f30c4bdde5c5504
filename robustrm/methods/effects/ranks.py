"""The rank-biserial correlation of matched pairs, with an exact interval."""

from __future__ import annotations

import numpy as np

from robustrm._checks import check_choice, check_level
from robustrm.kernels.scores import signed_ranks
from robustrm.kernels.signed_rank_share import LARGEST_SUM, share_limits
from robustrm.methods.additive import complete_pair
from robustrm.methods.effects.effect import Effect, Measure
from robustrm.results import Note
from robustrm.table import OccasionTable

RANK_BISERIAL = Measure(
    "matched-pairs rank-biserial correlation", "ranks", "−1 when all fell, 1 when all rose"
)


def rank_biserial(
    table: OccasionTable,
    first: str,
    second: str,
    *,
    zeros: str = "pratt",
    substitute: str = "half",
    level: float = 0.95,
) -> Effect:
    """Estimate how far the rises outweigh the falls, each weighted by the rank of its size.

    Parameters
    ----------
    table : OccasionTable
        Subjects with both occasions are used, on the table's scale.
    first, second : str
        Occasions; a rise is second > first.
    zeros : {"pratt", "drop"}, default "pratt"
        Under Pratt's rule zero differences are ranked and count in the denominator n(n+1)/2;
        ``"drop"`` leaves them out.
    substitute : {"half", "root2", "limit"}, default "half"
        What enters the size of a difference for a value below the limit.
    level : float, default 0.95
        Level of the interval.

    Returns
    -------
    Effect
        (T⁺ − T⁻) over the largest value it could take, from −1 (all fell) to 1 (all rose).

    Raises
    ------
    TooFewError
        When no subject has both occasions.

    Notes
    -----
    The interval is exact when each difference is a rise with the same probability whatever its
    size. It is the one that belongs to the signed-rank test: without zeros it excludes 0
    exactly when the two-sided exact p is at most 1 − `level`. It does not collapse when all
    subjects move one way, as resampling does. Its level is held after a shift of a symmetric
    law, where larger changes are the more consistent ones, and can fall short where they are
    the least consistent. Zero and unknown differences count as falls in the lower limit and as
    rises in the upper one. Beyond 180 ranks it is the score interval.

    Under Pratt's rule and when zeros are dropped it is another number. Compare like with like.

    References
    ----------
    .. [1] Kerby, D. S. (2014). The simple difference formula. Comprehensive Psychology 3,
       11.IT.3.1.
    .. [2] Clopper, C. J. and Pearson, E. S. (1934). The use of confidence or fiducial limits
       illustrated in the case of the binomial. Biometrika 26, 404-413.

    Examples
    --------
    Six of six fell. Were π the probability of a rise, all would fall with probability (1 − π)⁶,
    which is .025 at π = .459: the upper limit is 2 · .459 − 1.

    >>> table = OccasionTable.from_array(
    ...     [[91, 60], [40, 25], [120, 80], [66, 59], [33, 20], [75, 74]],
    ...     occasions=["week 0", "week 12"],
    ... )
    >>> estimate = rank_biserial(table, "week 0", "week 12").estimate
    >>> estimate.value, estimate.low, round(estimate.high, 3)
    (-1.0, -1.0, -0.081)
    """
    check_choice("zeros", zeros, ("pratt", "drop"))
    check_level(level)
    pair = complete_pair(table, first, second, f"The {RANK_BISERIAL.name}").substitute(substitute)
    gaps, _ = pair.paired(first, second)
    label = f"{second} vs {first}"
    moved = gaps.signs != 0
    if zeros == "drop" and not moved.any():
        reason = Note("no variation", "All differences are zero, and zeros are left out.")
        return RANK_BISERIAL.not_given(label, pair.n_subjects, pair.scale, reason)
    taken = moved | (zeros == "pratt")
    # every difference counted as a rise gives all the ranks, zeros too
    weights = signed_ranks(gaps.sizes[taken].astype(float), np.ones(int(taken.sum())), "pratt")
    signs = gaps.signs[taken]
    rises, falls = float(weights[signs > 0].sum()), float(weights[signs < 0].sum())
    whole = float(weights.sum())
    low, high = share_limits(weights.astype(np.int64), int(rises), int(whole - falls), level)
    estimate = RANK_BISERIAL.estimate(
        (rises - falls) / whole,
        (float(2 * low - 1), float(2 * high - 1)),
        level,
        "inverted signed-rank law" if whole <= LARGEST_SUM else "score",
        scale=pair.scale,
    )
    remark = _remark(pair, zeros, int((~moved).sum()))
    return RANK_BISERIAL.effect(label, pair.n_subjects, pair.scale, estimate, remark)


def _remark(pair: OccasionTable, zeros: str, n_zero: int) -> str:
    rule = {
        "pratt": "zero differences count in the denominator",
        "drop": "zero differences dropped",
    }[zeros]
    told = [rule]
    if n_zero and zeros == "pratt":
        told.append(f"the interval counts {n_zero} zero or unknown either way")
    if pair.below.any():
        told.append("the ranks of the sizes depend on what entered below the limit")
    return "; ".join(told)
