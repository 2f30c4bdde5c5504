"""One effect size: what it is about, its interval, how to read it, or why it is not given."""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass
from typing import Any, Literal

from robustrm._format import counted
from robustrm.results import Estimate, Note, Scale, plain

Group = Literal["direction", "ranks", "location", "standardized", "parametric", "all occasions"]


@dataclass(frozen=True, slots=True)
class Effect:
    """One effect size and what it is about.

    Parameters
    ----------
    label : str
        What is compared, in words.
    group : str
        What kind of estimand it is: ``"direction"``, ``"ranks"``, ``"location"``,
        ``"standardized"``, ``"parametric"`` or ``"all occasions"``.
    reading : str
        How to read effect sizes of this name: what their ends mean, or what is divided by what.
    scale : {"raw", "log"} or None
        Scale of the values behind it; None where only their order counts.
    estimate : Estimate
        The effect size with its interval. Its value is NaN where it is not given.
    remark : str
        What holds for this one: counts, zero rule, null value, attained levels.
    n_subjects : int
        Subjects behind it.
    """

    label: str
    group: Group
    reading: str
    scale: Scale | None
    estimate: Estimate
    remark: str
    n_subjects: int

    @property
    def is_given(self) -> bool:
        """Whether there is a number; the notes of the estimate say why not."""
        return not math.isnan(self.estimate.value)

    def to_dict(self) -> dict[str, Any]:
        """Return plain values."""
        result: dict[str, Any] = plain(self)
        return result

    def __str__(self) -> str:
        name, notes = self.estimate.name, map(str, self.estimate.notes)
        if not self.is_given:
            return " ".join([f"{self.label}: {name} not given.", *notes])
        return f"{self.label}: {self.estimate}, {self.estimate.kind}"


NOT_GIVEN = "not given"


@dataclass(frozen=True, slots=True)
class Measure:
    """What all effect sizes of one name share."""

    name: str
    group: Group
    reading: str

    def effect(
        self, label: str, n: int, scale: Scale | None, estimate: Estimate, remark: str = ""
    ) -> Effect:
        """Return one of them."""
        return Effect(label, self.group, self.reading, scale, within(estimate), remark, n)

    def estimate(
        self,
        value: float,
        limits: tuple[float, float] | None,
        level: float,
        kind: str,
        *,
        scale: Scale = "raw",
        no_change: float = 0.0,
        notes: tuple[Note, ...] = (),
    ) -> Estimate:
        """Return the estimate of one of them; without limits it has no level either."""
        low, high = limits if limits is not None else (None, None)
        attained = None if limits is None else level
        return Estimate(
            self.name,
            value,
            low,
            high,
            attained,
            kind,
            scale=scale,
            no_change=no_change,
            notes=notes,
        )

    def not_given(self, label: str, n: int, scale: Scale | None, reason: Note) -> Effect:
        """Return the place of one that is not given, with the reason."""
        missing = Estimate(self.name, math.nan, None, None, None, NOT_GIVEN, notes=(reason,))
        return self.effect(label, n, scale, missing)


def too_few(name: str, least: int, n: int) -> Note:
    """Return the reason of an effect size that so few subjects do not carry."""
    return Note(
        "too few subjects", f"The {name} is given from {counted(least, 'subject')}, not {n}."
    )


def no_variation(what: str) -> Note:
    """Return the reason of an effect size whose denominator is zero."""
    return Note("no variation", f"{what}, so there is no spread to divide by.")


def within(estimate: Estimate) -> Estimate:
    """Return the estimate with its interval widened, where need be, to hold the value.

    The resampled values lie to one side of the estimate only when its resampling bias is of
    the size of its spread. Widening never lowers the coverage, and a note tells of it.
    """
    low, high, value = estimate.low, estimate.high, estimate.value
    if low is None or high is None or low <= value <= high:
        return estimate
    note = Note(
        "widened interval",
        "The interval as computed missed the estimate and was widened to end at it.",
        "The estimate is biased in samples of this size.",
    )
    return dataclasses.replace(
        estimate, low=min(low, value), high=max(high, value), notes=(*estimate.notes, note)
    )
