"""How a row reads: its direction, and its p values against the level of the plan.

A reading is what somebody takes home from one row. It is compared, put into words and never used
to choose a method.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from robustrm._format import declared, fixed, number, p_cell
from robustrm.analysis import Row
from robustrm.methods.adjusting import TITLES
from robustrm.methods.registry import in_sentence
from robustrm.results import Estimate

ADJUSTING = frozenset(TITLES) - {"none", "single-step"}
"""Adjustments that change a p value; "single-step" gives one p alone."""

_OF_A_FALL = "probability of a fall"


@dataclass(frozen=True, slots=True)
class Reading:
    """What one row says.

    Parameters
    ----------
    direction : {−1, 0, 1} or None
        A fall, neither, or a rise of the estimate; None without an estimate.
    p, p_adjusted : bool or None
        Whether P lies at or below the level, before and after adjustment; None where there is
        no such P.
    """

    direction: int | None
    p: bool | None
    p_adjusted: bool | None


def reading_of(row: Row, alpha: float) -> Reading:
    """Return how a row reads at level `alpha`."""
    return Reading(
        direction_of(row.result.estimate),
        _is_at_or_below(row.result.p_value, alpha),
        _is_at_or_below(row.p_adjusted, alpha),
    )


def direction_of(estimate: Estimate | None) -> int | None:
    """Return −1 where the second occasion is lower, 1 where it is higher, 0 for neither."""
    if estimate is None or math.isnan(estimate.value):
        return None
    gap = estimate.value - estimate.neutral
    sign = (gap > 0) - (gap < 0)
    return -sign if estimate.name == _OF_A_FALL else sign


def _is_at_or_below(p: float | None, alpha: float) -> bool | None:
    return None if p is None or math.isnan(p) else p <= alpha


def parts(first: Reading, second: Reading) -> tuple[str, ...]:
    """Return in what two readings part: ``"direction"``, ``"p"``, ``"p_adjusted"``.

    A direction parts from its opposite alone: an estimate of no change contradicts nothing.
    """
    found = []
    if first.direction is not None and second.direction is not None:
        found += ["direction"] if first.direction * second.direction < 0 else []
    for name in ("p", "p_adjusted"):
        sides = getattr(first, name), getattr(second, name)
        found += [name] if None not in sides and sides[0] != sides[1] else []
    return tuple(found)


def alike(first: Reading, second: Reading, parted: tuple[str, ...]) -> bool:
    """Say whether two readings agree where they `parted` before, and part nowhere else."""
    known = all(
        getattr(reading, name) is not None for reading in (first, second) for name in parted
    )
    return known and not parts(first, second)


def is_resolved(row: Row, alpha: float) -> bool:
    """Say whether the draws behind P, if there are any, tell its side of the level.

    The interval of P moves with the adjustment in proportion.
    """
    interval = row.result.p_interval
    if interval is None:
        return True
    low, high = interval
    factor = (row.p_adjusted or row.result.p_value) / row.result.p_value
    return all(not low * f <= alpha < high * f for f in {1.0, factor})


# ── words ─────────────────────────────────────────────────────────────────────────────────


def the(title: str) -> str:
    """Name a method with its article: ``"the sign test"``, ``"Yuen's paired test"``."""
    words = in_sentence(title)
    return words if "'s " in words else f"the {words}"


def method_words(row: Row) -> str:
    """Name a row inside a sentence, with its scale and n."""
    return f"{the(row.title)} ({row.result.scale} scale, n = {row.result.n_subjects})"


def numbers_words(row: Row, alpha: float) -> str:
    """Return estimate and P values of a row: ``"ratio 0.7, P = 0.012 (Holm 0.024)"``."""
    estimate = row.result.estimate
    head = "" if estimate is None else f"{estimate_words(estimate)}, "
    return f"{head}{p_words(row, alpha)}"


def estimate_words(estimate: Estimate) -> str:
    """Return the name and value of an estimate with its unit."""
    unit = f" {estimate.unit}" if estimate.unit else ""
    return f"{estimate.name} {number(estimate.value)}{unit}"


def p_words(row: Row, alpha: float) -> str:
    """Return the P values of a row: ``"P = 0.012 (Holm 0.024)"``."""
    cell = p_against(row.result.p_value, alpha)
    words = f"P {cell}" if cell.startswith("<") else f"P = {cell}"
    if row.p_adjusted is None or row.adjust not in ADJUSTING:
        return words
    return f"{words} ({TITLES[row.adjust]} {p_against(row.p_adjusted, alpha)})"


def p_range_words(values: Sequence[float], alpha: float) -> str:
    """Return several P values as a range: ``"P = 0.012 to 0.041"``."""
    low, high = p_against(min(values), alpha), p_against(max(values), alpha)
    head = f"P {low}" if low.startswith("<") else f"P = {low}"
    return head if low == high else f"{head} to {high}"


def p_against(p: float, alpha: float) -> str:
    """Return P with the digits that show its side of the level.

    Examples
    --------
    >>> p_against(0.0124, 0.05), p_against(0.05003, 0.05), p_against(0.05, 0.05)
    ('0.012', '0.05003', '0.050')
    """
    cell, decimals = p_cell(p), 3
    while cell[:1].isdigit() and decimals < 12 and (float(cell) <= alpha) != (p <= alpha):
        decimals += 1
        cell = fixed(p, decimals)
    return cell


def side_words(reading: Reading, alpha: float) -> str:
    """Say on which side of the level P lies, before and after adjustment."""
    level = declared(alpha)
    words = {True: f"at or below {level}", False: f"above {level}", None: "not known"}
    before, after = reading.p, reading.p_adjusted
    if after is None:
        return words[before]
    if before == after:
        return f"{words[before]} before and after adjustment"
    return f"{words[before]} before and {words[after]} after adjustment"


DIRECTIONS = {-1: "a fall", 0: "no change", 1: "a rise", None: "no estimate"}
