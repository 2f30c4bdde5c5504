"""Far tails beyond the exact budget: importance sampling, or a saddlepoint for linear forms.

Before either, the corner: where few arrangements reach the observed statistic they are counted
(`corner`), and the answer is exact and says so. Whether there are few is read from the bound
exp(K - t x) of the tail, which costs no draw.
"""

from __future__ import annotations

import math
import sys
from collections.abc import Sequence
from typing import Literal

import numpy as np
import numpy.typing as npt

from robustrm.kernels.null import corner, importance, saddlepoint
from robustrm.kernels.null.forms import Linear, Quadratic
from robustrm.kernels.null.monte_carlo import Progress
from robustrm.kernels.null.problem import Problem
from robustrm.kernels.null.results import Tail
from robustrm.kernels.null.tables import Array
from robustrm.kernels.null.tilting import canonical, cumulants, stack, tilt_to

# The corner is tried where the bound leaves at most so many arrangements.
FEW = 1 << 22


def sampled(
    problem: Problem,
    observed: Array,
    value: float,
    *,
    stages: Sequence[int] = importance.STAGES,
    thresholds: Sequence[float] = (),
    rng: np.random.Generator,
    block: int | None = None,
    progress: Progress | None = None,
) -> Tail:
    """Find the tail by importance sampling, or by a count where few arrangements are in it.

    Parameters
    ----------
    problem : Problem
    observed : ndarray, shape (d,)
        Sum of the observed score vectors.
    value : float
        The form at `observed`.
    stages, thresholds, rng, block, progress
        As for `engine.tail`.

    Returns
    -------
    Tail
        NaN where a subject has too many arrangements to list (9 occasions and up).
    """
    if not problem.is_listable:
        return _nothing(problem, "importance sampling")
    alike = Problem(canonical(problem.tables), problem.form)
    low, high = _bounds(alike, value)
    if low == -math.inf:
        return _counted(problem, 0.0)
    tables = stack(alike.tables)
    place = math.sqrt(low) if isinstance(alike.form, Quadratic) else value
    proposal = importance.mixture(alike, tables, place)
    share = _corner(alike, low, high, -math.inf if proposal.is_end else proposal.log_bound)
    if share is not None:
        return _counted(problem, share)
    found = importance.estimate(
        tables,
        proposal,
        observed,
        _inside(alike, low, high),
        sides=2 if _side(alike) == "two-sided" else 1,
        stages=stages,
        thresholds=thresholds,
        rng=rng,
        block=block,
        progress=progress,
    )
    return Tail(
        _above_zero(found.log_p),
        "importance sampling",
        "importance sampling",
        problem.arrangements,
        found.log_p,
        found.interval(0.99),
        found.draws,
        found.effective,
    )


def approximated(problem: Problem, value: float) -> Tail:
    """Approximate the tail of a linear form by a saddlepoint, or count it where it is small.

    Parameters
    ----------
    problem : Problem
        With a linear form.
    value : float
        The observed sum.

    Returns
    -------
    Tail
        NaN for a quadratic form, and where a subject has too many arrangements to list.
    """
    if isinstance(problem.form, Quadratic) or not problem.is_listable:
        return _nothing(problem, "saddlepoint")
    low, high = _bounds(problem, value)
    # The rows of a linear problem hold the single score c . s.
    tables = stack(problem.rows)
    values, logs, counts = tables.vectors[None, ..., 0], tables.logs[None], tables.counts[None]
    place = np.array([value])
    tilt = tilt_to(place, values, logs, counts)
    log_bound = float((cumulants(tilt, values, logs, counts).log - tilt * place)[0])
    share = _corner(problem, low, high, log_bound)
    if share is not None:
        return _counted(problem, share)
    step = saddlepoint.steps(values, logs)
    log_p = float(saddlepoint.log_tails(place, values, logs, counts, step, problem.form.side)[0])
    return Tail(_above_zero(log_p), "saddlepoint", "saddlepoint", problem.arrangements, log_p)


def _side(problem: Problem) -> str:
    return problem.form.side if isinstance(problem.form, Linear) else "greater"


def _bounds(problem: Problem, value: float) -> tuple[float, float]:
    """Bounds just below and just above the observed value; -inf below where everything counts."""
    if isinstance(problem.form, Quadratic):
        low = problem.form.floor(value, problem.tables, exact=problem.exact)
        return (low if low > 0 else -math.inf), math.nan
    slack = problem.form.slack(problem.tables, exact=problem.exact)
    return value - slack, value + slack


def _inside(problem: Problem, low: float, high: float) -> importance.Inside:
    """Make the function that says which sums are in the tail that counts, and in the other."""
    form, exact, is_less = problem.form, problem.exact, _side(problem) == "less"

    def inside(sums: Array) -> tuple[npt.NDArray[np.bool_], npt.NDArray[np.bool_]]:
        values = form.values(sums, exact=exact)
        upper, lower = values >= low, values <= high
        return (lower, upper) if is_less else (upper, lower)

    return inside


def _corner(problem: Problem, low: float, high: float, log_bound: float) -> float | None:
    """Logarithm of p by a count, None where the bound leaves too many arrangements."""
    if log_bound + math.log(math.prod(problem.sizes)) > math.log(FEW):
        return None
    side = _side(problem)
    if side == "greater":
        return corner.log_share(problem, low)
    if side == "less":
        return corner.log_share(problem, -high, side=-1)
    return _smaller(problem, low, high)


def _smaller(problem: Problem, low: float, high: float) -> float | None:
    """Logarithm of twice the smaller tail, the far one first: below a half it is the smaller."""
    means = [float(np.average(row.vectors[:, 0], weights=row.weights)) for row in problem.rows]
    ways = [(low, 1), (-high, -1)]
    found = []
    for bound, side in ways if low + high > 2 * math.fsum(means) else ways[::-1]:
        share = corner.log_share(problem, bound, side=side)
        if share is None:
            return None
        found.append(share)
        if share < -math.log(2):
            break
    return min(0.0, min(found) + math.log(2))


def _counted(problem: Problem, log_p: float) -> Tail:
    return Tail(_above_zero(log_p), "exact", "corner", problem.arrangements, log_p)


def _above_zero(log_p: float) -> float:
    return max(math.exp(log_p), sys.float_info.min)


def _nothing(problem: Problem, how: Literal["importance sampling", "saddlepoint"]) -> Tail:
    return Tail(math.nan, how, how, problem.arrangements, math.nan)
