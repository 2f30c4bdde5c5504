"""Tipping points: how far the missing values would have to lie for a contrast to read otherwise.

Nothing is drawn at random and no earlier value is carried forward. Every missing member of a
pair gets one declared number; the factor on it is moved until the reading changes.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from robustrm.analysis import offered, thresholds
from robustrm.errors import TooFewError
from robustrm.kernels.walsh import pseudo_median
from robustrm.methods.additive import AdditiveProblem, NullOptions
from robustrm.methods.adjusting import adjusted
from robustrm.methods.beyond import is_mostly_beyond
from robustrm.methods.null_distribution import problem_of
from robustrm.methods.registry import method as registered
from robustrm.plan import Plan
from robustrm.results import Note
from robustrm.sensitivity_analysis.missing_rows import COMPLETE, Compared, pair_method, reading_at
from robustrm.sensitivity_analysis.reading import Reading, direction_of, parts
from robustrm.table import OccasionTable
from robustrm.ties import Floats

TIPPING_COLUMNS = (
    "label", "first", "second", "method", "scale", "kind", "n", "n_filled", "n_neither",
    "reference", "p_planned", "p_planned_adjusted", "p_reference", "p_reference_adjusted", "side",
    "range_end", "tipping", "unchanged_at", "changes", "p_at_tipping", "p_adjusted_at_tipping",
    "crossing", "filled", "observed_low", "observed_high", "n_as_far",
)  # fmt: skip

FARTHEST = 100.0
"""Factors are looked at from one hundredth of the reference to a hundred times it."""
SPREADS = 10.0
"""Shifts are looked at up to ten times the range of the observed differences."""
PER_DECADE = 10
CLOSE = 1e-3  # of the first step: how finely the change of reading is closed in
# beyond these the null distribution of a scan is drawn: counting it takes seconds every time
_COUNTED_UP_TO = {"sign_flip": 30, "rank_pair": 20}

DETERMINISTIC = Note(
    "deterministic filling",
    "For the tipping points every missing member of a pair gets one declared number, and nothing "
    "is drawn at random: the subject's value at the other occasion and the estimate of those who "
    "have both, moved by one factor (or shift) for all.",
    "P after filling treats these numbers as if they were measured. It is no result; it shows "
    "how far from the others the missing values would have to lie.",
    "Ask whether values as far as that can be believed. No earlier value is carried forward.",
)


@dataclass(frozen=True, slots=True)
class State:
    """What a contrast says with the missing members filled, or with none."""

    reading: Reading
    p: float
    p_adjusted: float


@dataclass(frozen=True, eq=False)
class Filling:
    """One contrast whose missing members can be filled.

    Parameters
    ----------
    pair : OccasionTable
        The two occasions on the raw scale, of everybody with at least one of them.
    entered : array (n, 2)
        Their values on the scale of the plan, the substitute below a limit; NaN where missing.
    reference : float
        Estimate of the change among those who have both, on the scale of the plan.
    observed : array (m,)
        Changes of those who have both.
    scale : {"raw", "log"}
        Scale of the plan.
    """

    pair: OccasionTable
    entered: Floats
    reference: float
    observed: Floats
    scale: str

    def shown(self, amount: float) -> float:
        """Return a change, or a move, in the words of the scale: on logs a ratio or factor."""
        return math.exp(amount) if self.scale == "log" else amount

    def at(self, move: float) -> OccasionTable:
        """Return the raw table in which every filled change is the reference plus `move`."""
        change = self.reference + move
        first, second = self.entered.T
        filled = np.column_stack([second - change, first + change])
        cells = np.exp(filled) if self.scale == "log" else filled
        gaps = self.pair.missing
        return replace(
            self.pair,
            values=np.where(gaps, cells, self.pair.values),
            tokens=np.where(gaps, "", self.pair.tokens),
            units=None,  # a filled value is no multiple of the reporting step
            step=None,
        )


@dataclass(frozen=True, eq=False)
class Contrast:
    """A planned contrast with its family, ready to be read with any filling.

    Parameters
    ----------
    planned : Compared
        As planned.
    family : tuple of float
        p values of all planned contrasts, unadjusted.
    place : int
        Its place among them.
    filling : Filling
        How its missing members are filled.
    plan, root, levels
        As for the analysis.
    """

    planned: Compared
    family: tuple[float, ...]
    place: int
    filling: Filling
    plan: Plan
    root: int
    levels: tuple[float, ...]
    known: dict[float, State] = field(default_factory=dict)

    def state(self, table: OccasionTable) -> State:
        """Return what the contrast says on a raw table; the other contrasts stay as planned."""
        name, adjust = pair_method(self.plan)
        scaled = table.on_scale(self.plan.used_scale)
        pair = (self.planned.first, self.planned.second)
        direction, p = read_pair(scaled, pair, name, self.plan, self.levels, self.root)
        family = [*self.family]
        family[self.place] = p
        after = adjusted(family, adjust)[self.place]
        return State(reading_at(direction, math.nan, after, self.plan.alpha), p, after)

    def before(self, table: OccasionTable) -> Reading:
        """Return how the contrast reads as planned, nothing filled."""
        kept = table.complete() if self.planned.used == COMPLETE else table
        direction = self.state(kept).reading.direction
        return reading_at(direction, math.nan, self.planned.p_adjusted, self.plan.alpha)

    def turned(self, move: float, before: Reading) -> tuple[str, ...]:
        """Return in what the filled contrast reads otherwise than as planned."""
        return parts(before, self.filled(move).reading)

    def filled(self, move: float) -> State:
        """Return what the contrast says with the reference moved."""
        if move not in self.known:
            self.known[move] = self.state(self.filling.at(move))
        return self.known[move]


def read_pair(
    table: OccasionTable,
    pair: tuple[str, str],
    name: str,
    plan: Plan,
    levels: Sequence[float],
    root: int,
) -> tuple[int | None, float]:
    """Return direction and p of a pair test, without the intervals that a scan has no use for."""
    entry, given = registered(name), offered(plan, name, levels, root)
    many = table.pair(*pair).n_subjects > _COUNTED_UP_TO.get(name, math.inf)
    if many:
        given |= {"null": "monte carlo", "draws": plan.stages[:1]}
    if not entry.is_additive:
        result = entry.load()(table, *pair, **given)
        return direction_of(result.estimate), result.p_value
    taken = {k: given[k] for k in ("alternative", "zeros", "substitute") if k in given}
    problem = problem_of(table, name, first=pair[0], second=pair[1], **taken)
    keys = ("null", "draws", "thresholds", "rng")
    found = problem.tail(NullOptions(**{k: given[k] for k in keys if k in given}))
    return _direction(problem, name), found.tail.p_value


def _direction(problem: AdditiveProblem, name: str) -> int | None:
    """Return the direction of the estimate that goes with an additive test of a pair."""
    if name != "sign_test" and is_mostly_beyond(problem.used):
        return None
    if name == "signed_rank":  # near no change the rank sums and the pseudo-median can part
        gaps, _ = problem.used.paired(*problem.used.occasions)
        return int(np.sign(pseudo_median(gaps.values)))
    return int(np.sign(problem.scores.sum()))


# ── the scan ──────────────────────────────────────────────────────────────────────────────


def first_change(
    changes: Callable[[float], bool], steps: Sequence[float]
) -> tuple[float, float] | None:
    """Return the last position without and the first with a change, closed in by halving.

    Parameters
    ----------
    changes : callable
        Whether the reading at a position is another one.
    steps : sequence of float
        Positions from near to far, all on one side of 0.

    Returns
    -------
    tuple of float or None
        (0, 0) where it changes at 0 already; None where it changes at no step.
    """
    if changes(0.0):
        return 0.0, 0.0
    before = 0.0
    for step in steps:
        if changes(step):
            break
        before = step
    else:
        return None
    after = step
    while abs(after - before) > CLOSE * abs(steps[0]):
        middle = (before + after) / 2
        before, after = (before, middle) if changes(middle) else (middle, after)
    return before, after


def steps_of(observed: Floats, scale: str) -> list[float]:
    """Return the positions that are looked at on one side; none where nothing varies."""
    if scale == "log":
        count = round(PER_DECADE * math.log10(FARTHEST))
        return [i * math.log(10) / PER_DECADE for i in range(1, count + 1)]
    unit = float(np.ptp(observed)) or float(np.abs(observed).max())
    decades = math.log10(SPREADS * 100)
    powers = range(round(PER_DECADE * decades) + 1)
    return [unit / 100 * 10 ** (i / PER_DECADE) for i in powers] if unit else []


# ── rows ──────────────────────────────────────────────────────────────────────────────────


def tipping_rows(
    table: OccasionTable, plan: Plan, root: int, planned: Sequence[Compared]
) -> tuple[list[dict[str, Any]], list[Note]]:
    """Return two rows, one a side, of every planned contrast with a member to fill.

    `table` is on the raw scale.
    """
    rows: list[dict[str, Any]] = []
    notes: list[Note] = []
    levels = thresholds(table, plan)
    family = tuple(c.p for c in planned)
    for place, contrast in enumerate(planned):
        if not table.select(occasions=(contrast.first, contrast.second)).missing.any():
            continue
        if not contrast.is_tested:
            notes.append(Note("no tipping point", f"{contrast.label}: not tested as planned."))
            continue
        filling, why = filling_of(table, plan, root, (contrast.first, contrast.second))
        if filling is None:
            notes.append(Note("no tipping point", f"{contrast.label}: {why}"))
            continue
        ready = Contrast(contrast, family, place, filling, plan, root, levels)
        rows.extend(_sides(ready, table))
    if rows:
        notes.append(DETERMINISTIC)
    return rows, notes


def filling_of(
    table: OccasionTable, plan: Plan, root: int, names: tuple[str, str]
) -> tuple[Filling | None, str]:
    """Return how the missing members of a pair are filled, or None and why they cannot be."""
    scaled = table.on_scale(plan.used_scale)
    given = offered(plan, "signed_rank", (plan.alpha,), root)
    try:
        estimate = registered("signed_rank").load()(scaled, *names, **given).estimate
    except TooFewError as error:
        return None, str(error)
    if estimate is None:
        return None, (
            "more than half of an occasion lies beyond a limit, so no change is estimated from "
            "which a missing value could be filled."
        )
    empty = table.select(occasions=names).missing.sum(axis=1) == 2
    ids = [s for s, out in zip(table.subjects, empty.tolist(), strict=True) if not out]
    pair = table.select(subjects=ids, occasions=names)
    if not pair.missing.any():
        return None, "nobody has only one of the two values, so there is nothing to fill."
    observed, _ = scaled.pair(*names).substitute(plan.substitute).paired(*names)
    if not steps_of(observed.values, plan.used_scale):
        return None, "all observed differences are zero, so there is no unit to shift by."
    entered = pair.recensored().on_scale(plan.used_scale).substitute(plan.substitute).values
    log = plan.used_scale == "log"
    reference = math.log(estimate.value) if log else estimate.value
    return Filling(pair, entered, reference, observed.values, plan.used_scale), ""


def _sides(contrast: Contrast, table: OccasionTable) -> Iterator[dict[str, Any]]:
    filling, planned = contrast.filling, contrast.planned
    before = contrast.before(table)
    gaps = filling.pair.missing.any(axis=1)
    at_reference = contrast.filled(0.0)
    head = {
        "label": planned.label,
        "first": planned.first,
        "second": planned.second,
        "method": planned.method,
        "scale": filling.scale,
        "kind": "factor" if filling.scale == "log" else "shift",
        "n": int((~gaps).sum()),
        "n_filled": int(gaps.sum()),
        "n_neither": table.n_subjects - filling.pair.n_subjects,
        "reference": filling.shown(filling.reference),
        "p_planned": planned.p,
        "p_planned_adjusted": planned.p_adjusted,
        "p_reference": at_reference.p,
        "p_reference_adjusted": at_reference.p_adjusted,
        "observed_low": filling.shown(float(filling.observed.min())),
        "observed_high": filling.shown(float(filling.observed.max())),
    }
    for side, sign in (("larger", 1.0), ("smaller", -1.0)):
        moves = [sign * step for step in steps_of(filling.observed, filling.scale)]
        by_any = first_change(lambda m: bool(contrast.turned(m, before)), moves)
        crossing = first_change(lambda m: "p_adjusted" in contrast.turned(m, before), moves)
        yield {
            **head,
            "side": side,
            "range_end": filling.shown(moves[-1]),
            **_nothing_found(),
            "crossing": math.nan if crossing is None else filling.shown(crossing[1]),
            **({} if by_any is None else _found(contrast, before, by_any, sign)),
        }


def _nothing_found() -> dict[str, Any]:
    names = ("tipping", "unchanged_at", "p_at_tipping", "p_adjusted_at_tipping", "filled",
             "n_as_far")  # fmt: skip
    return {**dict.fromkeys(names, math.nan), "changes": None}


def _found(
    contrast: Contrast, before: Reading, found: tuple[float, float], sign: float
) -> dict[str, Any]:
    filling = contrast.filling
    last, move = found
    state = contrast.filled(move)
    change = filling.reference + move
    as_far = filling.observed >= change if sign > 0 else filling.observed <= change
    turned = contrast.turned(move, before)
    return {
        "tipping": filling.shown(move),
        "unchanged_at": math.nan if last == move else filling.shown(last),
        "changes": " and ".join("P" if part == "p_adjusted" else part for part in turned),
        "p_at_tipping": state.p,
        "p_adjusted_at_tipping": state.p_adjusted,
        "filled": filling.shown(change),
        "n_as_far": int(as_far.sum()),
    }
