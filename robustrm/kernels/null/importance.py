"""Far tails by importance sampling: draw where the tail is, and weigh each draw by what that did.

Rearrangements are drawn with tilted probabilities (`tilting`), so that the mean of the sum lies at
the observed distance. One tilt serves a linear form. A quadratic form has its tail all around, so
there is a net of directions, a tilt for each, and the draws come from their mixture. A draw with
sum s has the weight 1 / q(s), q(s) = sum over the tilts of share x exp(tilt . s - K): the balance
heuristic (Veach & Guibas 1995), which no single tilt can spoil. All is computed in logarithms.

Where occasions can be relabelled freely the net covers one sector and q is the mean over all the
relabelled mixtures (`orbit_means`): relabelling a draw changes neither its statistic nor its
weight.

A share of the draws is not tilted, so no weight exceeds 1 / that share. The observed arrangement is
counted as one more draw, so that p is never 0 (compare Harrison 2012).

References
----------
Harrison MT (2012). Conservative hypothesis tests and confidence intervals using importance
sampling. Biometrika 99:57-69.
Siegmund D (1976). Importance sampling in the Monte Carlo study of sequential tests. Annals of
Statistics 4:673-684 (exponential tilts for tails).
Veach E, Guibas LJ (1995). Optimally combining sampling techniques for Monte Carlo rendering.
Proceedings of SIGGRAPH 95:419-428.
"""

from __future__ import annotations

import functools
import math
import sys
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from robustrm.kernels.null.forms import Quadratic
from robustrm.kernels.null.monte_carlo import Progress
from robustrm.kernels.null.orbit_means import log_orbit_means, numbers_held
from robustrm.kernels.null.problem import Problem
from robustrm.kernels.null.symmetry import Classes, sort_within
from robustrm.kernels.null.tables import Array, read_only
from robustrm.kernels.null.tilting import Stack, cumulants, tilt_to

STAGES = (20_000, 200_000)
# Numbers a block of draws, and the tilted tables, may hold in their widest array.
BLOCK = 1 << 20
MOST_NUMBERS = 1 << 23
# Directions of a quadratic form: as many as it takes to come this near to every one (radians), or
# nearer, so that none is more standard deviations of the sum away than `DEVIATIONS`.
NEAR = 0.25
DEVIATIONS = 1.5
MOST_DIRECTIONS = 256
CANDIDATES = 4_000
# Share of the draws that are not tilted, and share that is spread evenly over the directions.
UNTILTED = 0.05
EVEN = 0.1
# No tilt moves the mean farther than this share of the way to the end of its support.
FARTHEST = 0.97
# Weights are added up in portions of so many draws whatever the block is.
PORTION = 1_024
# Two-sided 99% and 99.9% points of the normal law.
QUANTILES = {0.99: 2.5758293035489004, 0.999: 3.2905267314919255}


@dataclass(frozen=True, eq=False)
class Mixture:
    """Tilts (t, d) sorted within classes, their K (t,) and the logarithms of their shares (t,).

    `log_bound` is the bound exp(K - t place) of the tail along the direction where it is largest;
    `is_end` says that the place is next to the end of the support, where the bound is loose.
    """

    tilts: Array
    norms: Array
    logs: Array
    classes: Classes
    log_bound: float
    is_end: bool

    def log_density(self, sums: Array) -> Array:
        """Logarithm of q, the density of the draws relative to the null, at sums (b, d)."""
        powers = log_orbit_means(self.tilts, sort_within(sums, self.classes), self.classes)
        powers += self.logs - self.norms
        top = powers.max(axis=1)
        return np.asarray(top + np.log(np.exp(powers - top[:, None]).sum(axis=1)))


def mixture(problem: Problem, tables: Stack, place: float) -> Mixture:
    """Choose the tilts that bring the sum to the observed length (or value) `place`."""
    form, classes = problem.form, problem.classes
    if isinstance(form, Quadratic):
        most = _most_directions(tables)
        found = _tilted(tables, _net(form, classes, most, NEAR), place)
        near = _near(found.gains.max())
        if near < NEAR:
            found = _tilted(tables, _net(form, classes, most, near), place)
    else:
        directions = form.coefficients[None, :]
        classes = tuple((j,) for j in range(form.dimension))
        if place < _mean(tables, directions)[0]:
            directions, place = -directions, -place
        found = _tilted(tables, directions, place)
    shares = np.exp(found.gains - found.gains.max())
    shares = (1 - EVEN) * shares / shares.sum() + EVEN / len(shares)
    return Mixture(
        read_only(np.vstack([np.zeros(form.dimension), found.tilts])),
        read_only(np.r_[0.0, found.norms]),
        read_only(np.log(np.r_[UNTILTED, (1 - UNTILTED) * shares])),
        classes,
        float(found.gains.max()),
        bool(place >= FARTHEST * found.ends.max()),
    )


def _near(log_bound: float) -> float:
    """Choose how near the net has to come, by halves, from the bound exp(-x^2 / 2) of the tail."""
    wanted = DEVIATIONS / math.sqrt(max(-2 * log_bound, 1.0))
    return NEAR * 2.0 ** -max(math.ceil(math.log2(NEAR / wanted)), 0)


def _most_directions(tables: Stack) -> int:
    return max(8, min(MOST_DIRECTIONS, MOST_NUMBERS // tables.logs.size))


def _mean(tables: Stack, directions: Array) -> Array:
    """Mean of the sum along each direction."""
    means = (np.exp(tables.logs)[..., None] * tables.vectors).sum(axis=1)
    return np.asarray(directions @ (tables.counts @ means))


@dataclass(frozen=True, eq=False)
class _Tilted:
    """Tilts (t, d), their K, the logarithm of the bound K - t place, and the end of the support."""

    tilts: Array
    norms: Array
    gains: Array
    ends: Array


def _tilted(tables: Stack, directions: Array, place: float) -> _Tilted:
    """Tilt along each direction, as many at once as memory holds."""
    width = max(1, BLOCK // tables.logs.size)
    parts = [
        _some_tilted(tables, directions[start : start + width], place)
        for start in range(0, len(directions), width)
    ]
    return _Tilted(*(np.concatenate(column) for column in zip(*parts, strict=True)))


def _some_tilted(
    tables: Stack, directions: Array, place: float
) -> tuple[Array, Array, Array, Array]:
    values = np.einsum("td,gmd->tgm", directions, tables.vectors)
    real = np.where(np.isfinite(tables.logs), values, -np.inf)
    end = (real.max(axis=-1) * tables.counts).sum(axis=-1)
    middle = _mean(tables, directions)
    to = np.clip(place, middle, middle + FARTHEST * (end - middle))
    strengths = tilt_to(to, values, tables.logs, tables.counts, tolerance=1e-4)
    strengths = np.maximum(strengths, 0.0)
    norms = cumulants(strengths, values, tables.logs, tables.counts).log
    return strengths[:, None] * directions, norms, norms - strengths * place, end


def _net(form: Quadratic, classes: Classes, most: int, near: float) -> Array:
    key = form.projection.tobytes(), form.projection.shape
    return _directions(key[0], key[1], classes, most, near)


@functools.lru_cache(maxsize=32)
def _directions(
    content: bytes, shape: tuple[int, int], classes: Classes, most: int, near: float
) -> Array:
    """Directions L'u with u on the unit sphere, sorted within the classes, near to every other.

    Farthest-point selection from random candidates (of a fixed seed: the net is no random draw).
    """
    projection = np.frombuffer(content).reshape(shape)
    points = np.random.default_rng(0).normal(size=(CANDIDATES, shape[0]))
    points /= np.linalg.norm(points, axis=1, keepdims=True)
    sorted_tilts = sort_within(points @ projection, classes)
    places = sorted_tilts @ np.linalg.pinv(projection)
    chosen, gap = [0], np.linalg.norm(places - places[0], axis=1)
    while len(chosen) < most and gap.max() > near:
        chosen.append(int(gap.argmax()))
        gap = np.minimum(gap, np.linalg.norm(places - places[chosen[-1]], axis=1))
    return read_only(sorted_tilts[chosen])


@dataclass(frozen=True, eq=False)
class Drawer:
    """Tilted tables as running totals, ready to be bisected.

    `ladders[g]` holds, tilt after tilt, the cumulative probabilities of table g plus the number of
    the tilt; `members[i]` names the table of subject i.
    """

    ladders: tuple[Array, ...]
    vectors: Array
    members: tuple[int, ...]
    shares: Array

    @property
    def width(self) -> int:
        """Uniform numbers one draw takes."""
        return 1 + len(self.members)

    def sums(self, uniform: Array) -> Array:
        """Turn uniform numbers, (b, width), into sums of score vectors, (b, d)."""
        longest = self.vectors.shape[1]
        tilt = np.searchsorted(self.shares, uniform[:, 0] * self.shares[-1], side="right")
        tilt = np.minimum(tilt, len(self.shares) - 1)
        total = np.zeros((len(uniform), self.vectors.shape[2]))
        for group, column in zip(self.members, uniform[:, 1:].T, strict=True):
            place = np.searchsorted(self.ladders[group], tilt + column, side="right")
            total += self.vectors[group][np.minimum(place - tilt * longest, longest - 1)]
        return total


def drawer(tables: Stack, proposal: Mixture) -> Drawer:
    """Tilt every table in every way."""
    ladders: list[Array] = []
    for vectors, logs in zip(tables.vectors, tables.logs, strict=True):
        powers = proposal.tilts @ vectors.T + logs
        shares = np.exp(powers - powers.max(axis=1, keepdims=True))
        steps = np.cumsum(shares, axis=1)
        steps /= steps[:, -1:]
        ladders.append(np.asarray(steps + np.arange(len(steps))[:, None], np.float64).ravel())
    members = np.repeat(np.arange(len(tables.counts)), tables.counts.astype(np.int64))
    return Drawer(
        tuple(ladders),
        tables.vectors,
        tuple(members.tolist()),
        np.cumsum(np.exp(proposal.logs)),
    )


@dataclass(frozen=True)
class Weighed:
    """Sums of the weights, and of their squares, of the draws in one tail.

    Weights are relative to that of the observed arrangement, exp(`log_unit`), which is one of them.
    """

    log_unit: float
    draws: int
    total: float
    squares: float
    sides: int = 1

    @property
    def log_p(self) -> float:
        """Natural logarithm of the estimate."""
        share = self.log_unit + math.log(self.total / (self.draws + 1)) + math.log(self.sides)
        return min(0.0, share)

    @property
    def effective(self) -> float:
        """Effective sample size: so many equally weighted draws lie in the tail (Kish 1965)."""
        return self.total**2 / self.squares

    def interval(self, level: float) -> tuple[float, float]:
        """Give the normal interval of log p, back-transformed; `level` is .99 or .999."""
        spread = math.sqrt(max(1 / self.effective - 1 / (self.draws + 1), 0.0))
        reach = min(QUANTILES[level] * spread, 700.0)
        low, high = (math.exp(max(self.log_p + step, -745.0)) for step in (-reach, reach))
        return max(low, sys.float_info.min), min(1.0, max(high, sys.float_info.min))


class _Portions:
    """Adds weights in portions of a fixed number of draws, so that blocks change no digit."""

    def __init__(self) -> None:
        self.waiting = np.zeros(0)
        self.sums = np.array([1.0, 1.0])

    def add(self, weights: Array) -> None:
        """Take the weights of the next draws, zero outside the tail."""
        self.waiting = np.concatenate([self.waiting, weights])
        while len(self.waiting) >= PORTION:
            self.sums = self.sums + self._sums(self.waiting[:PORTION])
            self.waiting = self.waiting[PORTION:]

    def totals(self) -> tuple[float, float]:
        """Return the sum of the weights so far, and of their squares."""
        total, squares = self.sums + self._sums(self.waiting)
        return float(total), float(squares)

    def _sums(self, weights: Array) -> Array:
        return np.array([weights.sum(), np.square(weights).sum()])


# Says of a block of sums (b, d) which lie in the upper and which in the lower tail.
Inside = Callable[[Array], tuple[npt.NDArray[np.bool_], npt.NDArray[np.bool_]]]


def estimate(
    tables: Stack,
    proposal: Mixture,
    observed: Array,
    inside: Inside,
    *,
    sides: int = 1,
    stages: Sequence[int] = STAGES,
    thresholds: Sequence[float] = (),
    rng: np.random.Generator,
    block: int | None = None,
    progress: Progress | None = None,
) -> Weighed:
    """Draw stage by stage until no threshold is in doubt.

    Parameters
    ----------
    tables, proposal
        From `tilting.stack` and `mixture`.
    observed : ndarray, shape (d,)
        Observed sum of the score vectors.
    inside : callable
        Which sums of a block are at least, and which are at most, as large as the observed one.
    sides : int, default 1
        With 2 the tail with the smaller estimate is counted twice.
    stages, thresholds, rng, progress
        As for `monte_carlo.count`.
    block : int, optional
        Draws held at once; changes no result.

    Returns
    -------
    Weighed
    """
    source = drawer(tables, proposal)
    log_unit = -float(proposal.log_density(observed[None, :])[0])
    kept, done = (_Portions(), _Portions()), 0
    found = Weighed(log_unit, 0, 1.0, 1.0, sides)
    for stage in stages:
        for sums in _blocks(source, proposal, rng, stage - done, block):
            for part, hits in zip(kept, inside(sums), strict=True):
                part.add(_weights(proposal, sums, hits, log_unit))
            done += len(sums)
            if progress is not None:
                progress(done, stage)
        both = [Weighed(log_unit, done, *part.totals(), sides) for part in kept]
        found = min(both, key=lambda tail: tail.total) if sides == 2 else both[0]
        low, high = found.interval(0.999)
        if not any(low <= threshold <= high for threshold in thresholds):
            break
    return found


def _weights(proposal: Mixture, sums: Array, hits: npt.NDArray[np.bool_], log_unit: float) -> Array:
    """Weights of the draws in a tail, zero for the others."""
    weights = np.zeros(len(sums))
    if hits.any():
        weights[hits] = np.exp(-proposal.log_density(sums[hits]) - log_unit)
    return weights


def _blocks(
    source: Drawer, proposal: Mixture, rng: np.random.Generator, draws: int, block: int | None
) -> Iterator[Array]:
    """Draw sums, (block, d) at a time."""
    width = max(source.width, len(proposal.tilts) * numbers_held(proposal.classes))
    rows = block or max(1, BLOCK // width)
    for start in range(0, draws, rows):
        yield source.sums(rng.random((min(rows, draws - start), source.width)))
