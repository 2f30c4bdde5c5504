"""What an exact answer would cost.

One operation is about 10 ns on a common computer of 2024: a pair of numbers sorted and merged. The
constants below were fitted to timings (see tests/benchmarks/bench_null.py).
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from robustrm.kernels.null.forms import Form, Linear, Quadratic
from robustrm.kernels.null.problem import Problem
from robustrm.kernels.null.results import How
from robustrm.kernels.null.sorted_sums import Lattice, lattice
from robustrm.kernels.null.tables import Table
from robustrm.kernels.null.two_halves import split

# About twenty seconds.
BUDGET = 2e9
# Distinct sums kept at once by the recursion, and half sums listed: at most about 1 GB.
MOST_SUMS = 2**24
MOST_HALF_SUMS = 2**22
MOST_HALF_NUMBERS = 2**23
# Counts below this are exact in float64.
LARGEST_COUNT = 2**53
# Keys and steps must fit their integers.
LARGEST_KEY = 2**62
LARGEST_STEP = 2**30


# Name, operations, and whether it fits in memory and in the integers used.
Way = tuple[How, float, bool]


@dataclass(frozen=True)
class Cost:
    """Cheapest exact way and what it takes.

    Attributes
    ----------
    how : str
    operations : float
        Estimate, within a factor of about three; inf beyond 1e300.
    affordable : bool
        Within the budget and within memory.
    sentence : str
        For a message: ``exact would need about 3.2e12 operations (budget 2e9)``.
    """

    how: How
    operations: float
    affordable: bool
    sentence: str


def plan_work(tables: Sequence[Table], form: Form, *, budget: float = BUDGET) -> Cost:
    """Find the cheapest exact way to the null distribution, without going it.

    Parameters
    ----------
    tables : sequence of ListedRow or PermutedRow
    form : Quadratic or Linear
    budget : float, default 2e9
        Operations an exact answer may take.

    Returns
    -------
    Cost
    """
    return cheapest(Problem(tuple(tables), form), budget)


def cheapest(problem: Problem, budget: float) -> Cost:
    """Compare the exact ways; one that fits in memory goes before one that does not."""
    return weigh(min(_ways(problem), key=lambda way: (not way[2], way[1])), budget)


def cost_of_law(problem: Problem, budget: float) -> Cost | None:
    """Weigh the recursion, which alone gives the whole law; None where it does not apply."""
    if not (problem.is_listable and problem.exact):
        return None
    return weigh((recursion_name(problem), *_recursion(problem)), budget)


def weigh(way: Way, budget: float) -> Cost:
    """Say whether a way is affordable."""
    how, operations, fits = way
    sentence = f"exact would need about {_short(operations)} operations (budget {_short(budget)})"
    if not fits and operations <= budget:
        sentence = "exact would need more memory than the engine allows itself"
    return Cost(how, operations, fits and operations <= budget, sentence)


def _short(number: float) -> str:
    """Write 3.2e+12 as 3.2e12."""
    if math.isinf(number):
        return "more than 1e300"
    digits, power = f"{number:.1e}".split("e")
    return f"{digits.removesuffix('.0')}e{int(power)}"


def _ways(problem: Problem) -> Iterator[Way]:
    """Go through the exact ways that apply."""
    is_line = isinstance(problem.form, Linear)
    if not problem.is_listable:
        first, second = _half_sizes([table.size for table in problem.tables])
        yield "sorted halves" if is_line else "two halves", _as_float(50 * (first + second)), False
        return
    if problem.exact:
        yield recursion_name(problem), *_recursion(problem)
    if isinstance(problem.form, Quadratic):
        yield "two halves", *_two_halves(problem, len(problem.form.projection))
    else:
        yield "sorted halves", *_sorted_halves(problem)


def recursion_name(problem: Problem) -> How:
    """Name the recursion: it sorts its sums only if some occasions can be relabelled."""
    sorts = any(len(members) > 1 for members in problem.classes)
    return "sorted sums" if sorts else "convolution"


def _as_float(number: float) -> float:
    """Turn a large whole number into a float, inf beyond 1e300."""
    return float(number) if number < 10**300 else math.inf


def _recursion(problem: Problem) -> tuple[float, bool]:
    """Add a vector to a sum, sort it and merge: about six operations."""
    source = problem.rows if isinstance(problem.form, Linear) else problem.tables
    grid = lattice(source, problem.classes)
    fits = bool((grid.ceilings < LARGEST_STEP).all())
    kept, work = float(problem.orbits[0]), 0.0
    for subject in range(1, len(problem.sizes)):
        work += kept * problem.sizes[subject]
        kept = min(kept * problem.sizes[subject], _lattice_points(grid, subject))
        fits = fits and math.prod(grid.radices(subject)) < LARGEST_KEY and kept <= MOST_SUMS
    return 6 * work, fits


def _lattice_points(grid: Lattice, subject: int) -> float:
    """Estimate the number of sorted sums of a given total: multisets over possible totals."""
    points = 1.0
    for part in grid.moving:
        size, values = len(part), float(grid.ceilings[subject, part[-1]] + 1)
        multisets = math.prod((values + j) / (j + 1) for j in range(size))
        points *= max(multisets / values, 1.0) if part[-1] in grid.dependent else multisets
    return points


def _half_sizes(sizes: Sequence[int]) -> tuple[int, int]:
    """Count the half sums on either side, before any are merged."""
    first, second = split(sizes)
    return math.prod(sizes[i] for i in first), math.prod(sizes[i] for i in second)


def _two_halves(problem: Problem, dimension: int) -> tuple[float, bool]:
    """Two trees in D dimensions meet in about pairs^(1 - 1/(2D)) places.

    A meeting takes five operations where the law is densest, one or less in its far tail.
    """
    sizes = list(problem.sizes)
    sizes[problem.fixed] = problem.orbits[problem.fixed]
    first, second = _half_sizes(sizes)
    totals = [table.total for table in problem.tables]
    if problem.orbits[problem.fixed] == 1:
        totals[problem.fixed] = 1
    fits = max(first, second) <= MOST_HALF_SUMS and math.prod(totals) < LARGEST_COUNT
    meetings = math.exp(min((1 - 0.5 / max(dimension, 1)) * math.log(first * second), 690.0))
    return 5 * meetings + 40 * _as_float(first + second), fits


def _sorted_halves(problem: Problem) -> tuple[float, bool]:
    """List, merge, sort and bisect: about thirty operations a number."""
    first, second = _half_sizes(problem.sizes)
    return 30 * _as_float(first + second), max(first, second) <= MOST_HALF_NUMBERS
