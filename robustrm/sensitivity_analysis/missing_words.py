"""Tipping points in words: how far the filled values must go, beside what was observed."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from typing import Any

from robustrm._format import counted, declared, number, p_phrase, span
from robustrm.methods.adjusting import TITLES
from robustrm.plan import Plan
from robustrm.sensitivity_analysis.missing_rows import pair_method


def tipping_sentences(rows: Sequence[Mapping[str, Any]], plan: Plan, unit: str | None) -> list[str]:
    """Say for every contrast how far the filled values must go, beside what was observed."""
    sentences = []
    for larger, smaller in zip(rows[::2], rows[1::2], strict=True):
        sentences.append(_filled_words(larger, plan, unit))
        if larger["tipping"] == smaller["tipping"]:  # both at no move at all
            sentences.append(
                f"With that alone filled in, {larger['label']} already reads otherwise: "
                f"{_changes(larger)}."
            )
            continue
        sentences.extend(_side_words(row, plan, unit) for row in (larger, smaller))
    return sentences


def _filled_words(row: Mapping[str, Any], plan: Plan, unit: str | None) -> str:
    adjust = pair_method(plan)[1]
    p = p_phrase(row["p_reference_adjusted"])
    after = "" if adjust == "none" else f" after {TITLES[adjust]}"
    neither = ""
    if row["n_neither"]:
        neither = f" ({counted(row['n_neither'], 'subject')} with neither value not filled)"
    who = f"{counted(row['n_filled'], 'subject')} with one of the two values"
    return (
        f"{row['label']}, {who}{neither}: filled with the estimate of the {row['n']} who have both "
        f"({_amount(row, 'reference', unit)}), {p}{after}."
    )


def _side_words(row: Mapping[str, Any], plan: Plan, unit: str | None) -> str:
    label, factor = row["label"], row["kind"] == "factor"
    way = f"With {row['side']} {'ratios' if factor else 'differences'} filled in"
    end = _move(row, "range_end", unit, declared)
    if math.isnan(row["tipping"]):
        return f"{way}, {label} reads the same out to {end}."
    seen = span(row["observed_low"], row["observed_high"])
    later = ""
    if row["changes"] == "direction":
        level = declared(plan.alpha)
        later = f" P stays on its side of {level} out to {end}."
        if not math.isnan(row["crossing"]):
            later = f" P is on the other side of {level} first at {_move(row, 'crossing', unit)}."
    many = "ratios are" if factor else "differences are"
    return (
        f"{way}, {label} reads otherwise first at {_move(row, 'tipping', unit)}: {_changes(row)}. "
        f"The filled {many} then {_amount(row, 'filled', unit)}; those observed run from {seen}, "
        f"{row['n_as_far']} of {row['n']} as far out.{later}"
    )


def _changes(row: Mapping[str, Any]) -> str:
    both = " and " in row["changes"]
    return f"{row['changes']} {'change' if both else 'changes'}"


def _amount(row: Mapping[str, Any], name: str, unit: str | None) -> str:
    factor = row["kind"] == "factor"
    return number(row[name]) if factor or not unit else f"{number(row[name])} {unit}"


def _move(
    row: Mapping[str, Any], name: str, unit: str | None, write: Callable[[float], str] = number
) -> str:
    if row["kind"] == "factor":
        return f"{write(row[name])} times the estimate"
    return f"a shift of {_amount(row, name, unit)}"
