"""The front door: tail, law, draws and smallest tail of an additive score statistic."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Literal

import numpy as np
import numpy.typing as npt

from robustrm.kernels.null import far_tails, importance, monte_carlo, sorted_halves, two_halves
from robustrm.kernels.null.forms import Form, Linear, Quadratic
from robustrm.kernels.null.problem import Problem
from robustrm.kernels.null.results import How, Law, Share, Tail, make_law
from robustrm.kernels.null.sorted_sums import law_of_sums
from robustrm.kernels.null.tables import Array, Table
from robustrm.kernels.null.work import BUDGET, Cost, cheapest, cost_of_law

STAGES = (9_999, 99_999, 999_999)
# Pairs of half sums looked at in search of the largest attainable statistic.
MOST_PAIRS = 2**30

Choice = Literal["auto", "exact", "monte carlo", "importance sampling", "saddlepoint"]
Seed = int | np.random.SeedSequence | np.random.BitGenerator | np.random.Generator | None


def tail(
    tables: Sequence[Table],
    observed: npt.ArrayLike,
    form: Form,
    *,
    null: Choice = "auto",
    budget: float = BUDGET,
    draws: int | None = None,
    stages: Sequence[int] | None = None,
    thresholds: Sequence[float] = (0.05,),
    rng: Seed = None,
    block: int | None = None,
    progress: monte_carlo.Progress | None = None,
) -> Tail:
    """Say how often the null gives a statistic at least as extreme as the observed one.

    Parameters
    ----------
    tables : sequence of ListedRow or PermutedRow
        One a subject, at least one; see `tables`.
    observed : array_like, shape (d,)
        Sum of the observed score vectors.
    form : Quadratic or Linear
        See `forms`; a quadratic form counts large values, a linear one the tail it names.
    null : {"auto", "exact", "monte carlo", "importance sampling", "saddlepoint"}
        "auto" is exact within the budget, else Monte Carlo. "exact" beyond the budget answers NaN
        and computes nothing: ask `plan_work` first, whose sentence says why. The last two are for
        far tails, see `far_tails`; where few arrangements are in the tail they count them, and
        the answer is exact. A saddlepoint of a quadratic form is NaN.
    budget : float, default 2e9
        Operations an exact answer may take (about 10 ns each).
    draws : int, optional
        Exactly so many draws; the default follows `stages`.
    stages, thresholds : sequence
        Go on to the next stage while the 99.9% interval of p contains a threshold. The default
        stages are 9,999, 99,999 and 999,999; 20,000 and 200,000 for importance sampling.
    rng : int, SeedSequence, BitGenerator, Generator or None
        See `numpy.random.default_rng`.
    block : int, optional
        Draws held at once; changes no result.
    progress : callable, optional
        Called with (draws done, draws of this stage).

    Returns
    -------
    Tail

    Notes
    -----
    Values equal to the observed one count. Whole-number scores are compared as whole numbers, real
    ones with an absolute tolerance of 1e-10 times the largest attainable magnitude. The two-sided p
    of a linear statistic is min(1, twice the smaller tail).

    Examples
    --------
    Darwin's maize, 15 pairs, in eighths of an inch (Fisher 1935, section 21):

    >>> from robustrm.kernels.null.forms import linear
    >>> from robustrm.kernels.null.tables import sign_tables
    >>> maize = [49, -67, 8, 16, 6, 23, 28, 41, 14, 29, 56, 24, 75, 60, -48]
    >>> round(tail(sign_tables(maize), sum(maize), linear(1)).p_value, 5)
    0.05267
    """
    problem = Problem(tuple(tables), form)
    total = np.atleast_1d(np.asarray(observed, np.float64))
    value = float(form.values(total, exact=problem.exact))
    if not (problem.is_finite and math.isfinite(value)):
        return _no_answer(problem, "monte carlo")
    if null == "saddlepoint":
        return far_tails.approximated(problem, value)
    if null == "importance sampling":
        return far_tails.sampled(
            problem,
            total,
            value,
            stages=_stages(draws, stages, importance.STAGES),
            thresholds=thresholds,
            rng=np.random.default_rng(rng),
            block=block,
            progress=progress,
        )
    if null != "monte carlo":
        cost = cheapest(problem, budget)
        if cost.affordable:
            return _exact_tail(problem, cost.how, value)
        if null == "exact":
            return _no_answer(problem, cost.how)
    return _drawn_tail(
        problem,
        value,
        stages=_stages(draws, stages, STAGES),
        thresholds=thresholds,
        rng=np.random.default_rng(rng),
        block=block,
        progress=progress,
    )


def _stages(draws: int | None, stages: Sequence[int] | None, usual: Sequence[int]) -> Sequence[int]:
    """Numbers of draws: exactly `draws`, else the stages given, else the usual ones."""
    if draws is not None:
        return (draws,)
    return usual if stages is None else stages


def law(tables: Sequence[Table], form: Form, *, budget: float = BUDGET) -> Law | None:
    """Give the whole null distribution of a whole-number statistic.

    Parameters
    ----------
    tables, form, budget
        As for `tail`.

    Returns
    -------
    Law or None
        None for real scores and beyond the budget: use `draws`.
    """
    problem = Problem(tuple(tables), form)
    cost = cost_of_law(problem, budget) if problem.is_finite else None
    return _law(problem) if cost is not None and cost.affordable else None


def draws(
    tables: Sequence[Table], form: Form, size: int, *, rng: Seed = None, block: int | None = None
) -> Array:
    """Draw the statistic from its null distribution, (size,)."""
    problem = Problem(tuple(tables), form)
    source = monte_carlo.sampler(problem.tables)
    generator = np.random.default_rng(rng)
    sums = monte_carlo.blocks(source, generator, size, block=block)
    return np.concatenate([form.values(part, exact=problem.exact) for part in sums])


def smallest_tail(tables: Sequence[Table], form: Form, *, budget: float = BUDGET) -> Tail | None:
    """Give the tail at the most extreme attainable statistic: no data can give a smaller p.

    Parameters
    ----------
    tables, form, budget
        As for `tail`.

    Returns
    -------
    Tail or None
        None where it cannot be found within the budget.
    """
    problem = Problem(tuple(tables), form)
    cost = cheapest(problem, budget)
    if not (problem.is_finite and cost.affordable):
        return None
    tails = [_exact_tail(problem, cost.how, value) for value in _extremes(problem, cost)]
    return min(tails, key=lambda candidate: candidate.log_p, default=None)


def _extremes(problem: Problem, cost: Cost) -> tuple[float, ...]:
    """Most extreme attainable values, empty if they cannot be found."""
    if isinstance(problem.form, Linear):
        low, high = sorted_halves.extremes(problem.rows)
        return {"greater": (high,), "less": (low,), "two-sided": (low, high)}[problem.form.side]
    aligned = problem.aligned_sum()
    if aligned is not None:
        return (float(problem.form.values(aligned, exact=problem.exact)),)
    if cost.how != "two halves":
        return (float(_law(problem).values[-1]),)
    if math.prod(problem.sizes) <= MOST_PAIRS * problem.sizes[problem.fixed]:
        return (two_halves.largest(*problem.halves),)
    return ()


def _law(problem: Problem) -> Law:
    """Law of the statistic by the recursion over sums."""
    sums = law_of_sums(problem.rows, problem.classes)
    if isinstance(problem.form, Quadratic):
        values = problem.form.values(sums.sums, exact=True)
        slack = 0.5 / problem.form.multiple
    else:
        values, slack = np.rint(sums.sums[:, 0]), 0.5
    return make_law(values, sums.weights, sums.exponent, sums.total, slack)


def _exact_tail(problem: Problem, how: How, value: float) -> Tail:
    """Exact tail by the given way."""
    if isinstance(problem.form, Quadratic):
        share = _upper(problem, problem.form, how, value)
    else:
        share = _chosen(problem.form, *_both(problem, problem.form, how, value))
    return Tail(share.p_value, "exact", how, problem.arrangements, share.log_p)


def _upper(problem: Problem, form: Quadratic, how: How, value: float) -> Share:
    """Share of the arrangements with a quadratic statistic of at least `value`."""
    if how != "two halves":
        return _law(problem).at_least(value)
    floor = form.floor(value, problem.tables, exact=problem.exact)
    weight, total = two_halves.upper_tail(*problem.halves, floor)
    return Share(weight, 0, total)


def _both(problem: Problem, form: Linear, how: How, value: float) -> tuple[Share, Share]:
    """Shares of the arrangements with a linear statistic at least, and at most, `value`."""
    if how == "convolution":
        null = _law(problem)
        return null.at_least(value), null.at_most(value)
    slack = form.slack(problem.tables, exact=problem.exact)
    upper, lower, total = sorted_halves.tails(problem.rows, value - slack, value + slack)
    return Share(upper, 0, total), Share(lower, 0, total)


def _chosen(form: Linear, upper: Share, lower: Share) -> Share:
    """Choose the tail that the form names, or count the smaller one twice."""
    if form.side == "two-sided":
        smaller = min(upper, lower, key=lambda share: share.weight)
        return Share(smaller.weight, smaller.exponent, smaller.total, sides=2)
    return upper if form.side == "greater" else lower


def _drawn_tail(
    problem: Problem,
    value: float,
    *,
    stages: Sequence[int],
    thresholds: Sequence[float],
    rng: np.random.Generator,
    block: int | None,
    progress: monte_carlo.Progress | None,
) -> Tail:
    """Monte Carlo tail with its 99% interval."""
    found = monte_carlo.count(
        monte_carlo.sampler(problem.tables),
        _counter(problem, value),
        sides=2 if isinstance(problem.form, Linear) and problem.form.side == "two-sided" else 1,
        stages=stages,
        thresholds=thresholds,
        rng=rng,
        block=block,
        progress=progress,
    )
    return Tail(
        found.p_value,
        "monte carlo",
        "monte carlo",
        problem.arrangements,
        math.log(found.p_value),
        found.interval(0.99),
        found.draws,
    )


def _counter(problem: Problem, value: float) -> monte_carlo.Counter:
    """Make the function that counts, in a block of sums, both tails."""
    form, exact = problem.form, problem.exact
    if isinstance(form, Quadratic):
        low, high = form.floor(value, problem.tables, exact=exact), math.nan
    else:
        slack = form.slack(problem.tables, exact=exact)
        low, high = value - slack, value + slack
    is_less = isinstance(form, Linear) and form.side == "less"

    def count(sums: Array) -> tuple[int, int]:
        values = form.values(sums, exact=exact)
        upper, lower = int((values >= low).sum()), int((values <= high).sum())
        return (lower, upper) if is_less else (upper, lower)

    return count


def _no_answer(problem: Problem, how: How) -> Tail:
    """Make the tail that says nothing."""
    is_drawn = how == "monte carlo"
    null: Literal["exact", "monte carlo"] = "monte carlo" if is_drawn else "exact"
    return Tail(math.nan, null, how, problem.arrangements, math.nan)
