"""What the order of the values alone decides: bounds over every order that the data allow."""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from robustrm.kernels import walsh
from robustrm.methods.additive import Rng
from robustrm.methods.friedman import friedman
from robustrm.methods.sign_test import sign_test
from robustrm.methods.signed_rank import signed_rank
from robustrm.table import OccasionTable
from robustrm.ties import Bools, Floats, Ints

MOST_STATES = 100_000
"""Most different rank sums that are followed; with more no bounds are given."""
MOST_OCCASIONS = 7
"""Most occasions whose orders are listed (7! = 5040 a subject)."""


@dataclass(frozen=True, slots=True)
class Bounds:
    """Lowest and highest P and estimate over all that is not known.

    Parameters
    ----------
    p : tuple of float
        Lowest and highest.
    estimate : tuple of float or None
        Lowest and highest; on logs ratios, infinite where nothing bounds them.
    n_open : int
        Subjects whose order, or size of change, is not known.
    """

    p: tuple[float, float]
    estimate: tuple[float, float] | None
    n_open: int


# ── any value: the signed-rank test ───────────────────────────────────────────────────────


def signed_rank_bounds(pair: OccasionTable, *, alternative: str, zeros: str) -> Bounds:
    """Return the bounds of the signed-rank test with every value anywhere beyond its own limit.

    T⁺ counts the positive Walsh averages and the Hodges-Lehmann estimate is their median (Tukey
    1949): both rise with every difference, so their ends are those of the differences. Between
    the ends T⁺ takes the values step by step; where they enclose its mean, P reaches 1. Exact
    but for ties between an end and a measured difference.
    """
    low, high = _differences(pair)
    is_open = low < high
    found = [
        signed_rank(
            _table_of(_beside_zero(gaps, is_open, side)),
            "0",
            "1",
            alternative=alternative,
            zeros=zeros,
        )
        for gaps, side in ((low, 1), (high, -1))
    ]
    p_values = [result.p_value for result in found]
    middles = [float(walsh.pseudo_median(gaps)) for gaps in (low, high)]
    highest = max(p_values)
    if alternative == "two-sided":
        sides = [result.details["t_plus"] - result.details["t_minus"] for result in found]
        highest = 1.0 if sides[0] <= 0 <= sides[1] else highest
    if pair.scale == "log":
        with np.errstate(over="ignore"):
            middles = [float(np.exp(middle)) for middle in middles]
    return Bounds((min(p_values), highest), (middles[0], middles[1]), int(is_open.sum()))


def _differences(pair: OccasionTable) -> tuple[Floats, Floats]:
    """Return the lowest and highest difference of every subject, infinite where unbounded."""
    low, high = _ranges(pair)
    if pair.scale == "raw":  # concentrations and counts are not negative
        positive = pair.below & (pair.values >= 0)
        low = np.where(positive, 0.0, low)
    return low[:, 1] - high[:, 0], high[:, 1] - low[:, 0]


def _ranges(table: OccasionTable) -> tuple[Floats, Floats]:
    low = np.where(table.below, -np.inf, table.values)
    return low, np.where(table.above, np.inf, table.values)


def _beside_zero(gaps: Floats, is_open: Bools, side: int) -> Floats:
    """Move open differences that end at zero a little inwards: ``"<5"`` lies below 5."""
    sizes = np.abs(gaps[np.isfinite(gaps) & (gaps != 0)])
    little = side * float(np.min(sizes, initial=1.0)) / 2
    return np.where(is_open & (gaps == 0), little, gaps)


def _table_of(gaps: Floats) -> OccasionTable:
    """Return a table with these differences; infinite ones beyond all others, untied."""
    finite = np.isfinite(gaps)
    far = 10 * float(np.max(np.abs(gaps[finite]), initial=1.0))
    placed = np.where(finite, gaps, np.sign(gaps) * far * (1 + np.arange(1, gaps.size + 1)))
    values = np.stack([np.zeros(gaps.size), placed], axis=1)
    return OccasionTable.from_array(values, occasions=["0", "1"])


# ── any order: the sign test and Friedman's test ──────────────────────────────────────────


def sign_bounds(pair: OccasionTable, *, tied: bool, alternative: str) -> Bounds:
    """Return the bounds of the sign test over all directions that the limits leave open.

    `tied` keeps two values beyond the same limit a tie. An open direction may be a rise, a fall
    or none.
    """
    known, is_open = [], 0
    for row in range(pair.n_subjects):
        groups = _groups(pair, row, tied=tied)
        if len(set(groups)) == 1:
            known.append(0)
        elif _is_above(pair, row, 1, 0):
            known.append(1)
        elif _is_above(pair, row, 0, 1):
            known.append(-1)
        else:
            is_open += 1
    p_values = [
        _sign_p([*known, *[1] * up, *[-1] * down, *[0] * (is_open - up - down)], alternative)
        for up in range(is_open + 1)
        for down in range(is_open + 1 - up)
    ]
    rises, falls, n = known.count(1), known.count(-1), pair.n_subjects
    still = n - rises - falls - is_open
    least, most = (falls + still / 2) / n, (falls + is_open + still / 2) / n
    return Bounds((min(p_values), max(p_values)), (least, most), is_open)


def _sign_p(signs: Sequence[int], alternative: str) -> float:
    values = [[0, sign] for sign in signs]
    table = OccasionTable.from_array(values, occasions=["0", "1"])
    return sign_test(table, "0", "1", alternative=alternative).p_value


def friedman_bounds(complete: OccasionTable, *, tied: bool, rng: Rng) -> Bounds | None:
    """Return the bounds of Friedman's exact P over all orders that the limits leave open.

    `tied` keeps values of one subject beyond the same limit tied; else they are ordered every
    way. The rank sums that can be reached are followed subject by subject; given the ties, P falls
    as χ² rises, so their ends are those of χ². None with too many occasions or rank sums.
    """
    n, k = complete.values.shape
    if k > MOST_OCCASIONS or not n:
        return None
    options = [_rankings(complete, row, tied=tied) for row in range(n)]
    is_open = [len(ranks) > 1 for ranks in options]
    start = sum((ranks[0] for ranks in options if len(ranks) == 1), np.zeros(k, dtype=np.int64))
    sums, choices = np.asarray(start)[None, :], np.zeros((1, 0), dtype=np.int64)
    for ranks in (ranks for ranks in options if len(ranks) > 1):
        sums, choices = _reached(sums, choices, ranks)
        if sums.shape[0] > MOST_STATES:
            return None
    size = ((sums - sums.mean(axis=1, keepdims=True)) ** 2).sum(axis=1)
    p_values = [
        _friedman_p(options, choices[at], rng) for at in (int(size.argmax()), int(size.argmin()))
    ]
    return Bounds((min(p_values), max(p_values)), None, sum(is_open))


def _reached(sums: Ints, choices: Ints, ranks: Sequence[Ints]) -> tuple[Ints, Ints]:
    """Add one subject in every of its orders; equal rank sums are kept once."""
    grown = (sums[:, None, :] + np.array(ranks)[None, :, :]).reshape(-1, sums.shape[1])
    which = np.tile(np.arange(len(ranks)), sums.shape[0])
    kept = np.repeat(choices, len(ranks), axis=0)
    distinct, first = np.unique(grown, axis=0, return_index=True)
    return distinct, np.concatenate([kept[first], which[first, None]], axis=1)


def _friedman_p(options: Sequence[Sequence[Ints]], choice: Ints, rng: Rng) -> float:
    chosen = iter(choice.tolist())
    values = [ranks[next(chosen)] if len(ranks) > 1 else ranks[0] for ranks in options]
    labels = [str(j) for j in range(len(values[0]))]
    return friedman(OccasionTable.from_array(np.array(values), occasions=labels), rng=rng).p_value


def _rankings(table: OccasionTable, row: int, *, tied: bool) -> list[Ints]:
    """Return twice the mid-ranks of a subject's cells, in every order that is possible."""
    groups = _groups(table, row, tied=tied)
    members = sorted(set(groups))
    cells = {group: groups.index(group) for group in members}
    before = {
        (a, b)
        for a, b in itertools.permutations(members, 2)
        if _is_above(table, row, cells[b], cells[a])
    }
    found = []
    for order in itertools.permutations(members):
        place = {group: position for position, group in enumerate(order)}
        if all(place[a] < place[b] for a, b in before):
            found.append(_mid_ranks([place[group] for group in groups]))
    return found


def _mid_ranks(places: Sequence[int]) -> Ints:
    codes = np.array(places)
    less = (codes[:, None] > codes[None, :]).sum(axis=1)
    equal = (codes[:, None] == codes[None, :]).sum(axis=1)
    return np.asarray(2 * less + equal + 1)


def _groups(table: OccasionTable, row: int, *, tied: bool) -> list[int]:
    """Return a number for each cell of a subject, the same for equal ones."""
    keys: list[tuple[str, float]] = []
    for j in range(table.n_occasions):
        state = "<" if table.below[row, j] else ">" if table.above[row, j] else "="
        alone = state != "=" and not tied
        keys.append((f"{state}{j}" if alone else state, float(table.values[row, j])))
    return [keys.index(key) for key in keys]


def _is_above(table: OccasionTable, row: int, one: int, other: int) -> bool:
    """Say whether the cell `one` certainly lies above the cell `other`."""
    a, b = float(table.values[row, one]), float(table.values[row, other])
    if table.below[row, one] or table.above[row, other]:
        return False
    beyond = bool(table.above[row, one] or table.below[row, other])
    return a >= b if beyond else a > b
