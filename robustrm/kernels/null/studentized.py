"""The null distribution of a studentized sum under swaps, the one that is not additive.

Each subject adds a vector to a sum a, or takes it away: a = Σ ±v_l, as in the rest of this room.
But the statistic divides the total of a by its spread: it rises with

    r = A|A| / Q,    A = Σ_i a_i,    Q = Σ_i a_i²,

since t = √(n − 1) A / √(nQ − A²) does. r is a ratio of two quadratic forms of the sum, neither a
linear nor a quadratic form of it. Equal totals may differ in spread, so sums cannot be merged to
a distribution of A, and no distance on a tree stands for r: every pattern has to be looked at.

That costs little per pattern. The patterns are listed in two halves, and A and Q of a pair of half
sums come from those of the halves and one inner product, a matrix product for all pairs. Swapping
everybody turns the sign of r, so one subject is fixed. Whole numbers make equality exact: A² and
Q are exact below 2^53, and the one division rounds equal ratios alike.

References
----------
Konietschke F, Pauly M (2012). A studentized permutation test for the nonparametric Behrens-Fisher
problem in paired data. Electronic Journal of Statistics 6:1358-1372.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from robustrm.kernels.null import monte_carlo
from robustrm.kernels.null.engine import STAGES, Seed
from robustrm.kernels.null.forms import Side
from robustrm.kernels.null.results import Share, Tail
from robustrm.kernels.null.tables import Array, sign_tables
from robustrm.kernels.null.work import BUDGET, Cost, weigh

# Half sums on the shorter side: at most 2^LONGEST rows. BLOCK pairs are looked at together.
LONGEST = 14
BLOCK = 1 << 18
# Numbers in the half sums on the longer side: at most 256 MB.
MOST_NUMBERS = 2**25
# Five to ten nanoseconds a pattern: one operation.
PER_PATTERN = 1.0
# The smallest p is looked for beside a Monte Carlo answer if it takes at most so many operations.
BESIDE = 2.0**20


@dataclass(frozen=True)
class Counts:
    """Patterns, one subject fixed, by the size of r: what every tail is made of.

    Attributes
    ----------
    patterns : int
        How many were looked at; 0 if no swap changes anything.
    at_least, above : int
        Those with |r| at least as large as the observed one, and larger.
    top : int
        Those with the largest |r|.
    largest : float
        The largest |r|.
    observed : float
        r of the data as they are.
    """

    patterns: int
    at_least: int
    above: int
    top: int
    largest: float
    observed: float

    def share(self, side: Side) -> Share:
        """Share of all patterns that are at least as far out as the observed one."""
        toward = -self.observed if side == "less" else self.observed
        if side == "two-sided":
            return self._both(self.at_least, toward)
        # Every pattern has a mirror image with the other sign of r.
        weight = self.at_least if toward > 0 else 2 * self.patterns - self.above
        return Share(weight, 0, 2 * self.patterns) if self.patterns else Share(1, 0, 1)

    def smallest(self, side: Side) -> Share:
        """Share of all patterns that are as far out as any."""
        if side == "two-sided" or self.largest == 0:
            return self._both(self.top, self.largest)
        return Share(self.top, 0, 2 * self.patterns)

    def _both(self, weight: int, size: float) -> Share:
        """Share of both tails together; all of them where r is zero."""
        return Share(weight, 0, 2 * self.patterns, sides=2) if size else Share(1, 0, 1)


@dataclass(frozen=True)
class Studentized:
    """Tail probability, and the smallest one that these values could give (None: not known)."""

    tail: Tail
    smallest_p: float | None


def ratio(sums: Array) -> Array:
    """Return r of sums (..., n) of whole numbers; 0 where all are zero."""
    total, squares = sums.sum(axis=-1), np.square(sums).sum(axis=-1)
    return np.asarray(total * np.abs(total) / np.maximum(squares, 1.0))


def cost(columns: Array, budget: float = BUDGET) -> Cost:
    """Say what looking at every pattern would take."""
    # beyond a thousand the number of patterns is no float any more
    moved = min(max(int(columns.any(axis=0).sum()), 1), 1000)
    fits = 2.0 ** (moved - 1 - _shorter(moved)) * len(columns) <= MOST_NUMBERS
    return weigh(("every pair", math.ldexp(PER_PATTERN, moved - 1), fits), budget)


def tail(
    columns: Array,
    *,
    side: Side,
    null: Literal["auto", "exact", "monte carlo"] = "auto",
    budget: float = BUDGET,
    stages: Sequence[int] = STAGES,
    thresholds: Sequence[float] = (0.05,),
    rng: Seed = None,
    block: int | None = None,
) -> Studentized:
    """Say how often swaps give an r at least as extreme as the observed one.

    Parameters
    ----------
    columns : ndarray, shape (n, n)
        Column l is what subject l adds to the sum; multiples of a half whose sums, under every
        pattern of signs, are whole numbers. All signs are positive in the data.
    side : {"greater", "less", "two-sided"}
    null : {"auto", "exact", "monte carlo"}
        "auto" is exact within the budget, else Monte Carlo. "exact" beyond the budget answers NaN
        and computes nothing: ask `cost` first.
    budget, stages, thresholds, rng, block
        As for `engine.tail`.

    Returns
    -------
    Studentized
    """
    price = cost(columns, budget)
    size = 2 ** len(columns)
    if null == "exact" and not price.affordable:
        return Studentized(Tail(math.nan, "exact", price.how, size, math.nan), None)
    if null != "monte carlo" and price.affordable:
        counts = count(columns)
        share = counts.share(side)
        found = Tail(share.p_value, "exact", price.how, size, share.log_p)
        return Studentized(found, counts.smallest(side).p_value)
    hits = monte_carlo.count(
        monte_carlo.sampler(sign_tables(columns.T)),
        _counter(columns, side),
        sides=2 if side == "two-sided" else 1,
        stages=stages,
        thresholds=thresholds,
        rng=np.random.default_rng(rng),
        block=block,
    )
    log_p = math.log(hits.p_value)
    found = Tail(
        hits.p_value, "monte carlo", "monte carlo", size, log_p, hits.interval(0.99), hits.draws
    )
    beside = price.affordable and price.operations <= BESIDE
    return Studentized(found, count(columns).smallest(side).p_value if beside else None)


def _counter(columns: Array, side: Side) -> monte_carlo.Counter:
    """Make the function that counts, in a block of sums, both tails."""
    observed = float(ratio(columns.sum(axis=1)))

    def counted(sums: Array) -> tuple[int, int]:
        values = ratio(sums)
        upper, lower = int((values >= observed).sum()), int((values <= observed).sum())
        return (lower, upper) if side == "less" else (upper, lower)

    return counted


def count(columns: Array) -> Counts:
    """Look at every pattern with the first subject that moves fixed."""
    observed = float(ratio(columns.sum(axis=1)))
    moving = columns[:, columns.any(axis=0)].T
    if not len(moving):
        return Counts(0, 0, 0, 0, 0.0, observed)
    cut = len(moving) - _shorter(len(moving))
    long, short = _sums(moving[0], moving[1:cut]), _sums(np.zeros(len(columns)), moving[cut:])
    at_least = above = top = 0
    largest, floor = 0.0, abs(observed)
    for sizes in _sizes(long, short):
        at_least += int(np.count_nonzero(sizes >= floor))
        above += int(np.count_nonzero(sizes > floor))
        most = float(sizes.max())
        if most > largest:
            largest, top = most, 0
        if most == largest:
            top += int(np.count_nonzero(sizes == most))
    return Counts(2 ** (len(moving) - 1), at_least, above, top, largest, observed)


def _shorter(moved: int) -> int:
    """Subjects in the shorter half; the first of the others is fixed."""
    return min(LONGEST, (moved - 1) // 2)


def _sums(start: Array, columns: Array) -> Array:
    """List start ± every column, (2^columns, n)."""
    sums = start[None]
    for column in columns:
        sums = np.concatenate([sums + column, sums - column])
    return sums


def _sizes(long: Array, short: Array) -> Iterator[Array]:
    """Yield |r| of every pair of half sums, some rows of the longer half at a time."""
    totals, squares = short.sum(axis=1), np.square(short).sum(axis=1)
    doubled = 2 * short.T
    rows = max(1, BLOCK // len(short))
    for start in range(0, len(long), rows):
        part = long[start : start + rows]
        below = part @ doubled
        below += np.square(part).sum(axis=1)[:, None]
        below += squares
        sizes = part.sum(axis=1)[:, None] + totals
        sizes *= sizes
        # a zero spread has a zero total: the quotient is 0 then, as it is to be
        np.maximum(below, 1.0, out=below)
        sizes /= below
        yield sizes
