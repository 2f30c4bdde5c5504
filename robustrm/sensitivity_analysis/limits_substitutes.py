"""Every test that depends on the size of a value beyond a limit, over what may stand there."""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from robustrm.analysis import ALL_OCCASIONS, Row, family_of, offered, overall, thresholds
from robustrm.errors import TooFewError
from robustrm.methods.adjusting import adjusted
from robustrm.methods.beyond import is_mostly_beyond
from robustrm.methods.follow_up import declared_pairs
from robustrm.methods.registry import P_ADJUSTMENTS
from robustrm.methods.registry import method as registered
from robustrm.methods.signed_rank import FRACTIONS
from robustrm.plan import Plan
from robustrm.results import Role
from robustrm.sensitivity_analysis.limits_entering import entered
from robustrm.sensitivity_analysis.reading import direction_of, parts, reading_of
from robustrm.table import OccasionTable
from robustrm.table.limits import SUBSTITUTES

PAIR_TESTS = ("signed_rank", "sign_flip", "paired_t")
"""Tests of a pair that depend on sizes, beside the planned one."""
SCAN = tuple(sorted({*FRACTIONS, 0.02, 0.035, 0.06, 0.16, 0.35, 0.6, 0.85}))
"""Shares of the limit that are tried."""
MULTIPLES = (1.0, 1.5, 2.0, 3.0, 5.0, 10.0)
"""Times an upper limit that are tried."""
CLOSE = 1e-3
"""A change of the reading is closed in to this, relative."""
FREE_OCCASIONS = 5
"""Most occasions whose substitutes are moved one against the other."""
LEAST = 2
"""Fewest subjects of a pair that are taken up: a paired t needs two."""

ONE = "one substitute"
EACH = "a substitute an occasion"
MULTIPLE = "multiples of the upper limit"


@dataclass(frozen=True, slots=True)
class Range:
    """One comparison by one test, as planned and over what may stand for a value beyond a limit.

    Parameters
    ----------
    planned : Row
        As planned.
    pair : tuple of str or None
        The occasions; None for all of them.
    varied : str
        What is varied.
    steps : tuple of (float, Row)
        What entered, times the limit, and the row with it; empty where occasions differ.
    p, p_adjusted, estimate : tuple of float
        Lowest and highest; NaN where there is none.
    changes : str
        Whether the direction or the side of the level changes: ``""``, ``"direction"``,
        ``"P"`` or ``"direction and P"``.
    changes_below, changes_above : float
        The nearest share (or multiple) below and above the planned one at which the row reads
        otherwise; NaN where it does not.
    """

    planned: Row
    pair: tuple[str, str] | None
    varied: str
    steps: tuple[tuple[float, Row], ...]
    p: tuple[float, float]
    p_adjusted: tuple[float, float]
    estimate: tuple[float, float]
    changes: str
    changes_below: float = math.nan
    changes_above: float = math.nan

    @property
    def unresolved(self) -> bool:
        """Whether any P was drawn, so that a change near the level may be chance."""
        return any(row.result.p_interval is not None for _, row in self.steps)


def ends(values: Sequence[float | None]) -> tuple[float, float]:
    """Return lowest and highest of those that are there."""
    known = [value for value in values if value is not None and not math.isnan(value)]
    return (min(known), max(known)) if known else (math.nan, math.nan)


def pair_tests(plan: Plan) -> tuple[tuple[str, str], ...]:
    """Return the tests of a pair that depend on substitutes, with their adjustment."""
    found = []
    own = registered(plan.pair)
    if plan.adjust == "closed" or (own.kind == "pair" and "substitute" in own.options):
        found.append((plan.pair, plan.adjust))
    adjust = plan.adjust if plan.adjust in P_ADJUSTMENTS else "holm"
    others = [(name, adjust) for name in PAIR_TESTS if name != plan.pair]
    return (*found, *others)


def overall_tests(plan: Plan) -> tuple[str, ...]:
    """Return the tests of all occasions that depend on substitutes."""
    names = dict.fromkeys((plan.omnibus, *plan.companions, "anova"))
    return tuple(
        name
        for name in names
        if registered(name).kind == "omnibus" and "substitute" in registered(name).options
    )


def role_of(plan: Plan, name: str) -> Role:
    """Return the role of a test here: primary the planned comparisons, supporting the overall."""
    if name == plan.pair:
        return "primary"
    return "supporting" if name == plan.omnibus else "supplementary"


# ── one substitute for all values below ───────────────────────────────────────────────────


def family_ranges(
    scaled: OccasionTable, plan: Plan, name: str, adjust: str, root: int
) -> list[Range]:
    """Return every planned contrast by one test over the shares of the limit."""
    pairs = declared_pairs(scaled, plan.contrasts)
    seen: dict[float | str, list[Row]] = {}

    def at(rule: float | str) -> list[Row]:
        if rule not in seen:
            family = family_of(scaled, plan, name, adjust, root, substitute=rule)
            seen[rule] = [
                Row(role_of(plan, name), c.label, c.result, c.p_adjusted, adjust) for c in family
            ]
        return seen[rule]

    return [
        _range(lambda rule, i=i: at(rule)[i], plan, pair)  # type: ignore[misc]
        for i, pair in enumerate(pairs)
        if scaled.pair(*pair).below.any() or _moves_with_others(scaled, pairs, adjust)
    ]


def _moves_with_others(
    scaled: OccasionTable, pairs: Sequence[tuple[str, str]], adjust: str
) -> bool:
    return adjust != "none" and any(scaled.pair(*pair).below.any() for pair in pairs)


def overall_range(scaled: OccasionTable, plan: Plan, name: str, root: int) -> Range | None:
    """Return an overall test over the shares of the limit; None where it cannot be made."""
    if not scaled.comparable().below.any():
        return None

    def at(rule: float | str) -> Row:
        result = overall(scaled, plan, name, root, substitute=rule)
        return Row(role_of(plan, name), ALL_OCCASIONS, result)

    try:
        return _range(at, plan, None, FRACTIONS)
    except TooFewError:
        return None


def _range(
    at: Callable[[float | str], Row],
    plan: Plan,
    pair: tuple[str, str] | None,
    shares: Sequence[float] = SCAN,
) -> Range:
    planned = at(plan.substitute)
    own = float(SUBSTITUTES[plan.substitute])
    steps = {share: at(share) for share in shares if share != own} | {own: planned}
    ordered = tuple(sorted(steps.items(), key=lambda step: step[0]))
    below = _change(at, plan, planned, [s for s in reversed(ordered) if s[0] <= own])
    above = _change(at, plan, planned, [s for s in ordered if s[0] >= own])
    return _of_steps(planned, pair, ONE, ordered, plan, (below, above))


def _of_steps(
    planned: Row,
    pair: tuple[str, str] | None,
    varied: str,
    steps: tuple[tuple[float, Row], ...],
    plan: Plan,
    changed: tuple[float, float],
) -> Range:
    rows = [planned, *(row for _, row in steps)]
    return Range(
        planned,
        pair,
        varied,
        steps,
        ends([row.result.p_value for row in rows]),
        ends([row.p_adjusted for row in rows]),
        ends([_value(row) for row in rows]),
        changes_words({part for row in rows for part in _parted(planned, row, plan.alpha)}),
        *changed,
    )


def _value(row: Row) -> float | None:
    return None if row.result.estimate is None else row.result.estimate.value


def _parted(one: Row, other: Row, alpha: float) -> tuple[str, ...]:
    """Return in what two rows read otherwise: the P that counts is the adjusted one."""
    found = parts(reading_of(one, alpha), reading_of(other, alpha))
    skipped = "p" if one.p_adjusted is not None else "p_adjusted"
    return tuple(part for part in found if part != skipped)


def changes_words(parted: set[str]) -> str:
    """Name what changes."""
    words = ["direction"] if "direction" in parted else []
    words += ["P"] if parted & {"p", "p_adjusted"} else []
    return " and ".join(words)


def _change(
    at: Callable[[float], Row], plan: Plan, planned: Row, steps: Sequence[tuple[float, Row]]
) -> float:
    """Return the first place, from the planned one on, that reads otherwise, by halving."""
    same = steps[0][0] if steps else math.nan
    for share, row in steps[1:]:
        if _parted(planned, row, plan.alpha):
            other = share
            while abs(other - same) > CLOSE * other:
                middle = (same + other) / 2
                if _parted(planned, at(middle), plan.alpha):
                    other = middle
                else:
                    same = middle
            return other
        same = share
    return math.nan


# ── occasions apart, and upper limits ─────────────────────────────────────────────────────


def apart_ranges(
    scaled: OccasionTable, plan: Plan, name: str, adjust: str, root: int
) -> list[Range]:
    """Return the contrasts over substitutes that differ between the two occasions.

    The adjusted P takes the lowest, and the highest, of all contrasts together: it bounds what
    one choice of substitutes could give.
    """
    pairs = declared_pairs(scaled, plan.contrasts)
    if adjust not in P_ADJUSTMENTS:
        return []
    tests = [_PairTest(scaled, plan, name, pair, root) for pair in pairs]
    found = [list(test.apart()) for test in tests]
    planned = _planned(scaled, plan, name, adjust, root)
    limits = [
        ends([row.result.p_value for row in (own, *rows)])
        for own, rows in zip(planned, found, strict=True)
    ]
    lows, highs = (adjusted([limit[end] for limit in limits], adjust) for end in (0, 1))
    return [
        _apart(own, pair, rows, plan, (low, high))
        for own, pair, rows, low, high in zip(planned, pairs, found, lows, highs, strict=True)
        if rows
    ]


def _planned(scaled: OccasionTable, plan: Plan, name: str, adjust: str, root: int) -> list[Row]:
    return [
        Row(role_of(plan, name), c.label, c.result, c.p_adjusted, adjust)
        for c in family_of(scaled, plan, name, adjust, root)
    ]


def _apart(
    own: Row,
    pair: tuple[str, str],
    rows: Sequence[Row],
    plan: Plan,
    p_adjusted: tuple[float, float],
) -> Range:
    """Return the range over occasions apart; the estimates are those of the rows."""
    every = [own, *rows]
    values = [] if own.result.estimate is None else [_value(row) for row in every]
    directions = {direction_of(row.result.estimate) for row in every} if values else set()
    parted = {"direction"} if {-1, 1} <= directions else set()
    sides = {p <= plan.alpha for p in p_adjusted}
    parted |= {"p_adjusted"} if len(sides) > 1 else set()
    return Range(
        own, pair, EACH, (), ends([row.result.p_value for row in every]), p_adjusted,
        ends(values), changes_words(parted),
    )  # fmt: skip


class _PairTest:
    """One test of one pair, with numbers entered for the values beyond the limits."""

    def __init__(
        self, scaled: OccasionTable, plan: Plan, name: str, pair: tuple[str, str], root: int
    ) -> None:
        self.plan, self.name, self.names = plan, name, pair
        self.table = scaled.pair(*pair)
        self.options = offered(plan, name, thresholds(scaled, plan), root)

    def row(self, below: dict[str, float], above: dict[str, float]) -> Row:
        table = entered(self.table, below, above)
        result = registered(self.name).load()(table, *self.names, **self.options)
        if is_mostly_beyond(self.table):  # the numbers entered count as measured there
            result = replace(result, estimate=None)
        label = f"{self.names[1]} vs {self.names[0]}"
        return Row(role_of(self.plan, self.name), label, result, result.p_value, "none")

    def apart(self) -> Iterator[Row]:
        """Yield the rows with two shares, where both occasions have values below.

        Every two of 6 for the planned test, the ends for those beside it.
        """
        if self.table.n_subjects < LEAST or not self.table.below.any(axis=0).all():
            return
        shares = FRACTIONS if self.name == self.plan.pair else (FRACTIONS[0], FRACTIONS[-1])
        for one, other in itertools.product(shares, repeat=2):
            yield self.row(dict(zip(self.names, (one, other), strict=True)), {})


def overall_apart(scaled: OccasionTable, plan: Plan, planned: Range, root: int) -> Range | None:
    """Return an overall test with each occasion's substitute at either end of the shares."""
    used = scaled.comparable()
    occasions = [used.occasions[j] for j in np.flatnonzero(used.below.any(axis=0)).tolist()]
    if not 2 <= len(occasions) <= FREE_OCCASIONS:
        return None
    name = planned.planned.result.method
    rows = [
        overall(entered(used, dict(zip(occasions, shares, strict=True)), {}), plan, name, root)
        for shares in itertools.product((FRACTIONS[0], FRACTIONS[-1]), repeat=len(occasions))
    ]
    p = ends([planned.planned.result.p_value, *(row.p_value for row in rows)])
    changed = {"p"} if (p[0] <= plan.alpha) != (p[1] <= plan.alpha) else set()
    absent = (math.nan, math.nan)
    return Range(planned.planned, None, EACH, (), p, absent, absent, changes_words(changed))


def multiple_ranges(
    scaled: OccasionTable, plan: Plan, name: str, adjust: str, root: int
) -> list[Range]:
    """Return the contrasts with values above a limit entered at multiples of it."""
    pairs = declared_pairs(scaled, plan.contrasts)
    if adjust not in P_ADJUSTMENTS or not any(scaled.pair(*pair).above.any() for pair in pairs):
        return []
    tests = [_PairTest(scaled, plan, name, pair, root) for pair in pairs]
    own = float(SUBSTITUTES[plan.substitute])
    planned = _planned(scaled, plan, name, adjust, root)

    def at(multiple: float) -> list[Row]:
        rows = [
            test.row(dict.fromkeys(test.names, own), dict.fromkeys(test.names, multiple))
            for test in tests
        ]
        p_adjusted = adjusted([row.result.p_value for row in rows], adjust)
        return [
            Row(row.role, row.label, row.result, p, adjust)
            for row, p in zip(rows, p_adjusted, strict=True)
        ]

    if any(test.table.n_subjects < LEAST for test in tests):
        return []
    grid = [(multiple, at(multiple)) for multiple in MULTIPLES]
    found = []
    for i, (pair, test) in enumerate(zip(pairs, tests, strict=True)):
        if test.table.above.any():
            steps = tuple((multiple, rows[i]) for multiple, rows in grid)
            change = _change(lambda m, i=i: at(m)[i], plan, steps[0][1], steps)  # type: ignore[misc]
            found.append(_of_steps(planned[i], pair, MULTIPLE, steps, plan, (math.nan, change)))
    return found


def step_rows(ranges: Sequence[Range]) -> list[dict[str, Any]]:
    """Return one flat row a step of every range."""
    return [
        {
            "label": found.planned.label,
            "method": found.planned.result.method,
            "varied": found.varied,
            "times_limit": share,
            "estimate": _value(row),
            "low": row.result.estimate.low if row.result.estimate else None,
            "high": row.result.estimate.high if row.result.estimate else None,
            "p": row.result.p_value,
            "p_adjusted": row.p_adjusted,
        }
        for found in ranges
        for share, row in found.steps
    ]
