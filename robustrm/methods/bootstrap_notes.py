"""What a reader must know of a bootstrap interval."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from robustrm._format import counted, level_text, listing, number, number_range, percent
from robustrm.methods.beyond import is_mostly_beyond
from robustrm.methods.bootstrap_limits import KINDS, TOGETHER, Found
from robustrm.methods.estimators import Estimator
from robustrm.methods.signed_rank import FRACTIONS
from robustrm.results import Note
from robustrm.table import OccasionTable
from robustrm.ties import Floats

FEW = 20
"""Below this many subjects every interval says what to expect of it."""


def interval_notes(found: Found, level: float, *, exponentiate: bool) -> tuple[Note, ...]:
    """Return the notes of one interval.

    Parameters
    ----------
    found : Found
        The interval.
    level : float
        Level asked for.
    exponentiate : bool
        Whether limits are back-transformed before they are told.
    """
    notes = [*_fall_back(found), *_undefined(found)]
    if found.family is None:
        return tuple(notes)
    if found.family.reach is not None:
        m = found.family.limits.low.size - int(found.family.limits.degenerate.sum())
        fact = f"{counted(m, 'interval')} {'hold' if m > 1 else 'holds'} {level_text(level)} "
        fact += (
            f"together: each reaches {number(found.family.reach)} standard errors to both sides."
        )
        notes.append(Note("simultaneous intervals", fact))
    notes += _extreme(found)
    if found.n_subjects < FEW:
        notes.append(_coverage(found))
    return (*notes, _draws_error(found, exponentiate=exponentiate))


def _title(kind: str) -> str:
    return {"bca": "BCa"}.get(kind, kind)


def _fall_back(found: Found) -> list[Note]:
    why = found.asked.lacks[found.place]
    if not why:
        return []
    asked = _title(found.asked.kind)
    if found.family is not None:
        return [
            Note(
                "fall-back interval",
                f"The {asked} interval is not defined: {why}.",
                f"The {found.kind} interval stands in its place.",
            )
        ]
    return [
        Note(
            "no bootstrap interval",
            f"No {asked} interval: {why}.",
            "The estimate stands without one. That is not an interval of width zero.",
        )
    ]


def _undefined(found: Found) -> list[Note]:
    family = found.family or found.asked
    count = int(family.undefined[found.place])
    if count in (0, found.draws):
        return []
    what = "estimate" if family.kind in (KINDS["percentile"], KINDS["bca"]) else "t value"
    return [
        Note(
            "undefined resamples",
            f"{count} of {counted(found.draws, 'resample')} {'have' if count > 1 else 'has'} no "
            f"{what}.",
            "They count as lying beyond both limits.",
        )
    ]


def _extreme(found: Found) -> list[Note]:
    if found.family is None or not found.family.extreme[:, found.place].any():
        return []
    sides = [
        side
        for side, is_extreme in zip(
            ("lower", "upper"), found.family.extreme[:, found.place].tolist(), strict=True
        )
        if is_extreme
    ]
    return [
        Note(
            "extreme resample",
            f"The {' and the '.join(sides)} limit asks for a tail rarer than 1 in "
            f"{found.draws + 1:,}.",
            "It is that of the most extreme resample.",
            "Raise `draws`, or use another method.",
        )
    ]


# Smallest and largest share in docs/evidence/coverage.csv: 8 to 20 subjects, long tails, means.
HELD = {
    KINDS["percentile"]: (0.82, 0.92),
    KINDS["bca"]: (0.81, 0.90),
    KINDS["t"]: (0.89, 0.95),
    TOGETHER: (0.96, 0.99),
}


def _coverage(found: Found) -> Note:
    low, high = map(percent, HELD[found.kind])
    return Note(
        "bootstrap coverage",
        f"The interval rests on {counted(found.n_subjects, 'subject')}.",
        f"In simulations of 8 to 20 subjects with long tails, {_title(found.kind)} intervals of "
        f"95% for means held them in {low} to {high} of samples.",
        "" if found.kind == TOGETHER else "Prefer an exact interval where there is one.",
    )


def _draws_error(found: Found, *, exponentiate: bool) -> Note:
    head = f"The limits come from {counted(found.draws, 'resample')}"
    if found.ranges is None:
        return Note("bootstrap error", f"{head}, too few to tell how far more would move them.")
    back = _exp if exponentiate else float
    low, high = (number_range(back(one), back(other), 4) for one, other in found.ranges)
    return Note(
        "bootstrap error",
        f"{head}. After endless draws the lower limit would be {low} and the upper one {high} "
        "(95% intervals).",
    )


def _exp(value: float) -> float:
    return math.exp(value) if value < 709 else math.inf


def beyond_limits(used: OccasionTable, estimator: Estimator, observed: Floats) -> list[bool]:
    """Return which estimates are those of a limit, not of the values.

    With more than half of an occasion beyond a limit, an estimate that moves when the values
    entered for those beyond it move says where the limit is. One that does not, such as a share
    of subjects who fell, stands.
    """
    if not is_mostly_beyond(used):
        return [False] * observed.size
    step = math.log(2) if used.scale == "log" else np.abs(used.values) / 2
    shifted = used.values - step * used.below + step * used.above
    moved = ~np.isclose(estimator(shifted), observed, rtol=1e-9, atol=0.0)
    return [bool(one) for one in moved]


def substitute_notes(
    table: OccasionTable, estimator: Estimator, names: Sequence[str], *, exponentiate: bool
) -> list[tuple[Note, ...]]:
    """Return how each estimate moves as the substitute moves from near 0 to the limit."""
    start = table.comparable()
    limits = start.lower_limit[start.below]
    fixed = start.entered is not None or (start.scale == "raw" and bool((limits <= 0).any()))
    if not limits.size or fixed:
        return [()] * len(names)
    values = np.array([estimator(start.substitute(f).values) for f in FRACTIONS])
    if exponentiate:
        values = np.vectorize(_exp)(values)
    entered = listing([percent(fraction) for fraction in FRACTIONS])
    return [
        (
            Note(
                "substitutes",
                f"With {entered} of the limit entered: {name} "
                f"{number_range(float(column.min()), float(column.max()))}.",
                "The interval holds for the substitute that was entered.",
            ),
        )
        for name, column in zip(names, values.T, strict=True)
    ]
