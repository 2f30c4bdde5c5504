"""The effect sizes of a report as a table, by kind of estimand."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from robustrm._format import DASH, Style, bounded, capital
from robustrm.report.document import Document
from robustrm.report.sentences import note_text
from robustrm.report.sheets import Group, Line, Sheet, estimate_cells, level_cell


def effects_sheet(document: Document, style: Style = "medical") -> Sheet:
    """Return the effect sizes, one group a name, each with its interval or why it has none."""
    headings = (
        "Comparison", "Scale", "n", "Value", "CI", "Level", "Interval", "No change", "Remark",
    )  # fmt: skip
    groups: dict[str, list[Line]] = {}
    for effect in document["effects"]:
        name, reading = effect["estimate"]["name"], effect["reading"]
        heading = f"{capital(effect['group'])}: {name} ({reading})"
        groups.setdefault(heading, []).append(Line(_cells(effect, style)))
    return Sheet(
        "Effect sizes by what they are about; those of different kinds are not comparable",
        headings,
        tuple(Group(heading, tuple(lines)) for heading, lines in groups.items()),
        frozenset({0, 1, 6, 8}),
    )


def _cells(effect: Mapping[str, Any], style: Style) -> tuple[str, ...]:
    estimate, remark = effect["estimate"], effect_remark(effect, style) or DASH
    head = (effect["label"], effect["scale"] or DASH, str(effect["n_subjects"]))
    if estimate["value"] is None:
        return (*head, "not given", DASH, DASH, DASH, DASH, remark)
    kind = DASH if estimate["low"] is None else estimate["kind"]
    neutral = no_change(estimate)
    null = f"{neutral:g}" if neutral in (0.0, 1.0) else bounded(neutral, style)
    return (
        *head, *estimate_cells(estimate, style), level_cell(estimate), kind, null, remark,
    )  # fmt: skip


def no_change(estimate: Mapping[str, Any]) -> float:
    """Return the value of an estimate that says "no change"."""
    if estimate["no_change"] is not None:
        return float(estimate["no_change"])
    return 1.0 if estimate["scale"] == "log" else 0.0


def effect_remark(effect: Mapping[str, Any], style: Style = "medical") -> str:
    """Return what holds for one effect size, with what a reader must know of its interval."""
    notes = [note_text(note, style) for note in effect["estimate"]["notes"]]
    if not notes:
        return str(effect["remark"])
    return " ".join([*([f"{effect['remark']}."] if effect["remark"] else []), *notes])
