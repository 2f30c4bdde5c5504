"""The 90% interval of every planned contrast, held against a margin of no relevant change."""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import TYPE_CHECKING, Any

from robustrm._format import declared, level_text, number, span
from robustrm.analysis import family_of
from robustrm.errors import TooFewError
from robustrm.methods.follow_up import declared_pairs
from robustrm.plan import Plan
from robustrm.results import Comparison
from robustrm.table import OccasionTable

if TYPE_CHECKING:
    import pandas as pd

MARGIN_LEVEL = 0.9
"""A 90% interval within the margin is two one-sided tests at 5% each (Schuirmann 1987)."""

INSIDE = "lies within the margin"
ACROSS = "is not within the margin: the interval reaches across its end"
OUTSIDE = "is not within the margin: the whole interval lies beyond it"
NOT_ESTIMABLE = "not estimable"
OTHER_ESTIMAND = "not comparable: the estimate is not of the kind that the margin bounds"

_SUBSTITUTES = ("half", "root2", "limit")
COLUMNS = [
    "first", "second", "method", "estimand", "scale", "role", "n", "estimate", "low", "high",
    "level", "margin_low", "margin_high", "reading", "over_substitutes",
]  # fmt: skip


def margin_bounds(plan: Plan) -> tuple[float, float] | None:
    """Return the margin as a range of ratios or differences; None where none is declared."""
    if plan.margin is None:
        return None
    if plan.used_scale == "raw":
        return -plan.margin, plan.margin
    return min(plan.margin, 1 / plan.margin), max(plan.margin, 1 / plan.margin)


def margin_text(plan: Plan) -> str:
    """Return the declared margin as a range, with the digits that it was given."""
    margin = declared(plan.margin)
    if plan.used_scale == "raw":
        return f"−{margin} to {margin}"
    ends = (f"1/{margin}", margin)
    return " to ".join(ends if (plan.margin or 1) >= 1 else ends[::-1])


def margin_rows(table: OccasionTable, plan: Plan, root: int) -> Iterator[dict[str, Any]]:
    """Yield one row a planned contrast; none where no margin is declared."""
    bounds = margin_bounds(plan)
    if bounds is None:
        return
    kept = table.complete() if plan.missing == "complete" else table
    scaled = kept.in_natural_order().on_scale(plan.used_scale)
    at_level = plan.replace(level=MARGIN_LEVEL, intervals="separate")
    moved = [rule for rule in _SUBSTITUTES if scaled.below.any() and rule != plan.substitute]
    try:
        family = _family(scaled, at_level, plan.substitute, root)
        others = [_family(scaled, at_level, rule, root) for rule in moved]
    except TooFewError:
        yield from (_empty(scaled, pair, plan, bounds) for pair in _pairs(scaled, plan))
        return
    for place, comparison in enumerate(family):
        reading = _reading(comparison, plan, bounds)
        elsewhere = {_reading(other[place], plan, bounds) for other in others}
        yield {
            **_row(comparison),
            "margin_low": bounds[0],
            "margin_high": bounds[1],
            "reading": reading,
            "over_substitutes": "unchanged" if elsewhere <= {reading} else "changes",
        }


def _pairs(table: OccasionTable, plan: Plan) -> list[tuple[str, str]]:
    return declared_pairs(table, plan.contrasts, "contrasts")


def _empty(
    table: OccasionTable, pair: tuple[str, str], plan: Plan, bounds: tuple[float, float]
) -> dict[str, Any]:
    """Return the row of a pair in a family with too few complete subjects."""
    numbers = dict.fromkeys(("estimate", "low", "high", "level"), math.nan)
    return {
        "first": pair[0],
        "second": pair[1],
        "method": plan.pair,
        "estimand": NOT_ESTIMABLE,
        "scale": table.scale,
        "role": "primary",
        "n": table.complete().n_subjects,
        **numbers,
        "margin_low": bounds[0],
        "margin_high": bounds[1],
        "reading": NOT_ESTIMABLE,
        "over_substitutes": "unchanged",
    }


def _family(table: OccasionTable, plan: Plan, substitute: str, root: int) -> list[Comparison]:
    return list(family_of(table, plan.replace(substitute=substitute), plan.pair, plan.adjust, root))


def _reading(comparison: Comparison, plan: Plan, bounds: tuple[float, float]) -> str:
    """Read one interval against the margin."""
    estimate = comparison.estimate
    if estimate is None:
        return NOT_ESTIMABLE
    if estimate.no_change is not None or estimate.scale != plan.used_scale:
        return OTHER_ESTIMAND
    if estimate.low is None or estimate.high is None:
        return NOT_ESTIMABLE
    if bounds[0] < estimate.low and estimate.high < bounds[1]:
        return INSIDE
    return OUTSIDE if estimate.high <= bounds[0] or estimate.low >= bounds[1] else ACROSS


def _row(comparison: Comparison) -> dict[str, Any]:
    row = comparison.result.row()
    return {
        "first": comparison.first,
        "second": comparison.second,
        "role": "primary",
        "n": row["n_subjects"],
        **{k: row[k] for k in ("method", "estimand", "scale", "estimate", "low", "high", "level")},
    }


def margin_sentences(margins: pd.DataFrame, plan: Plan) -> Iterator[str]:
    """Say of every contrast whether its interval lies within the margin."""
    for row in margins.to_dict("records"):
        label = f"{row['second']} vs {row['first']} (n = {row['n']})"
        if row["reading"] in (NOT_ESTIMABLE, OTHER_ESTIMAND):
            yield f"{label}, against the margin: {row['reading']}."
            continue
        substitute = (
            " With another substitute below the limit the reading changes."
            if row["over_substitutes"] == "changes"
            else ""
        )
        verdict, _, how = row["reading"].partition(":")
        yield (
            f"{label}: {row['estimand']} {number(row['estimate'])} ({level_text(row['level'])} "
            f"interval {span(row['low'], row['high'])}) {verdict} ({margin_text(plan)})"
            f"{how and ':'}{how}.{substitute}"
        )
