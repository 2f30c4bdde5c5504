"""One analysis of one comparison, with every subject left out in turn."""

from __future__ import annotations

import math
from dataclasses import dataclass

from robustrm.analysis import Row
from robustrm.results import Estimate
from robustrm.sensitivity_analysis.reading import is_resolved, parts, reading_of
from robustrm.sensitivity_analysis.repeats import Outcome
from robustrm.ties import MERGE


@dataclass(frozen=True, slots=True)
class Without:
    """A result with one subject left out.

    Parameters
    ----------
    subject : str
        Who was left out.
    included : bool
        Whether the subject is in the analysis of all.
    row : Row or None
        The result; None where too few were left.
    changes : tuple of str
        In what the reading changes: ``"direction"``, ``"p"``, ``"p_adjusted"``.
    out_of_reach : tuple of str
        The P values that can no longer reach the level, though they could with everybody.
    is_resolved : bool
        Whether the draws behind P, if there are any, tell its side of the level.
    """

    subject: str
    included: bool
    row: Row | None
    changes: tuple[str, ...]
    out_of_reach: tuple[str, ...]
    is_resolved: bool

    @classmethod
    def of(
        cls, subject: str, row: Row, whole: Outcome, made: Outcome | None, alpha: float
    ) -> Without:
        """Compare a repeat with the row of all subjects."""
        included = subject in row.result.subjects
        if made is None or math.isnan(made.rows[row.label].result.p_value):
            return cls(subject, included, None, (), (), is_resolved=True)
        again = made.rows[row.label]
        floors = {
            "p": (whole.floors[row.label], made.floors[row.label]),
            "p_adjusted": (whole.floor_adjusted, made.floor_adjusted),
        }
        lost = tuple(name for name, (before, now) in floors.items() if before <= alpha < now)
        resolved = is_resolved(again, alpha)
        changes = tuple(
            name
            for name in parts(reading_of(row, alpha), reading_of(again, alpha))
            if name not in lost and (resolved or name == "direction")
        )
        return cls(subject, included, again, changes, lost, is_resolved=resolved)


@dataclass(frozen=True, slots=True)
class Influence:
    """The result of all subjects, and those without each of them.

    Parameters
    ----------
    row : Row
        The result of all subjects.
    repeats : tuple of Without
        One a subject of the table, in natural order.
    alpha : float
        The level that P is held against.
    """

    row: Row
    repeats: tuple[Without, ...]
    alpha: float

    @property
    def made(self) -> tuple[tuple[Without, Row], ...]:
        """The repeats that could be made without a subject who was in the analysis."""
        return tuple((w, w.row) for w in self.repeats if w.row is not None and w.included)

    @property
    def failed(self) -> tuple[str, ...]:
        """Subjects without whom nothing could be computed."""
        return tuple(w.subject for w in self.repeats if w.row is None)

    @property
    def unresolved(self) -> tuple[str, ...]:
        """Subjects without whom the draws leave the side of P open."""
        return tuple(w.subject for w in self.repeats if not w.is_resolved)

    @property
    def changing(self) -> tuple[Without, ...]:
        """The repeats that read otherwise."""
        return tuple(w for w in self.repeats if w.changes)

    @property
    def out_of_reach(self) -> tuple[str, ...]:
        """The P values that some repeat can no longer bring to the level."""
        lost = {name for w in self.repeats for name in w.out_of_reach}
        return tuple(name for name in ("p", "p_adjusted") if name in lost)

    @property
    def holds(self) -> bool:
        """Whether it reads alike whoever is left out, as far as the repeats can tell."""
        return not (self.changing or self.out_of_reach or self.failed or self.unresolved)

    def range_of(self, name: str) -> tuple[float, float]:
        """Return the smallest and largest ``"estimate"``, ``"p"`` or ``"p_adjusted"``."""
        values = [value_of(w.row, name) for w in self.repeats if w.row is not None]
        known = [value for value in values if not math.isnan(value)]
        return (min(known), max(known)) if known else (math.nan, math.nan)

    @property
    def most_influential(self) -> tuple[str, ...]:
        """Those without whom the estimate moves furthest: several where they tie, not all."""
        moves = {w.subject: _move(self.row, row) for w, row in self.made}
        known = {subject: move for subject, move in moves.items() if not math.isnan(move)}
        furthest = max(known.values(), default=0.0)
        if furthest <= MERGE:
            return ()
        who = tuple(s for s, move in known.items() if move >= furthest * (1 - MERGE))
        return who if len(who) < len(known) else ()


def value_of(row: Row, name: str) -> float:
    """Return the estimate or a P value of a row; NaN where there is none."""
    estimate = row.result.estimate
    values = {
        "estimate": None if estimate is None else estimate.value,
        "p": row.result.p_value,
        "p_adjusted": row.p_adjusted,
    }
    value = values[name]
    return math.nan if value is None else value


def _move(whole: Row, again: Row) -> float:
    """Return how far an estimate moved on its scale; of a test without one, log P."""
    before, now = whole.result.estimate, again.result.estimate
    if before is None and now is None:
        return abs(math.log(again.result.p_value / whole.result.p_value))
    if before is None or now is None:
        return math.nan
    return abs(place_of(now) - place_of(before))


def place_of(estimate: Estimate) -> float:
    """Return where an estimate stands on the scale of its analysis: the logarithm of a ratio."""
    if estimate.scale == "raw" or estimate.no_change is not None:
        return estimate.value
    return math.log(estimate.value) if 0 < estimate.value < math.inf else math.nan
