"""The tables of the sensitivity section, their numbers rounded."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from robustrm._format import DASH, Style, number, p_cell, p_phrase, span
from robustrm.methods.registry import method as registered
from robustrm.report.document import Document
from robustrm.report.sheets import Group, Line, Sheet

Row = Mapping[str, Any]


def sensitivity_sheets(document: Document, style: Style = "medical") -> dict[str, Sheet]:
    """Return the tables of a document that holds a sensitivity analysis, by name."""
    held = document["sensitivity"]
    return {
        "overview": _overview(held["overview"]["frame"], held["grid"], style),
        "left_out": _left_out(held["leave_one_out"]["summary"], style),
        "gaps": _gaps(held["missing"]["frame"], style),
        "margins": _margins(held["questions"]["margins"]),
    }


def _overview(rows: list[Row], grid: Row, style: Style) -> Sheet:
    lines = tuple(
        Line(
            (
                row["label"],
                row["without_one"],
                row["limits"],
                row["missing"],
                row["parametric_log"],
                row["parametric_raw"],
            )
        )
        for row in rows
    )
    headings = (
        "Reads", "without one person", "with other substitutes", "with gaps handled otherwise",
        "by paired t, log", "by paired t, raw",
    )  # fmt: skip
    return Sheet(
        "What holds and what does not; all declared specifications together: "
        f"{p_phrase(grid['grid_p'], style)}",
        headings,
        (Group("", lines),),
        frozenset(range(6)),
    )


def _left_out(rows: list[Row], style: Style) -> Sheet:
    groups: dict[str, list[Line]] = {}
    for row in rows:
        p = "p" if row["p_adjusted"] is None else "p_adjusted"
        cells = (
            f"{row['title']}, {row['scale']} scale",
            row["role"],
            str(row["n"]),
            DASH if row["estimate"] is None else number(row["estimate"]),
            span(row["estimate_min"], row["estimate_max"]),
            p_cell(row[p], style),
            f"{p_cell(row[f'{p}_min'], style)} to {p_cell(row[f'{p}_max'], style)}",
            "yes" if row["holds"] else "no",
            row["changes_reading"] or DASH,
            row["most_influential"] or DASH,
        )
        groups.setdefault(row["label"], []).append(Line(cells))
    headings = (
        "Analysis", "Role", "n", "Estimate", "Without one", "P", "P without one", "Holds",
        "Reads otherwise without", "Moves most without",
    )  # fmt: skip
    return Sheet(
        "One subject left out at a time; P adjusted where the row is",
        headings,
        tuple(Group(label, tuple(lines)) for label, lines in groups.items()),
        frozenset({0, 1, 7, 8, 9}),
    )


def _gaps(rows: list[Row], style: Style) -> Sheet:
    groups: dict[str, list[Line]] = {}
    for row in rows:
        p = row["p"] if row["p_adjusted"] is None else row["p_adjusted"]
        bounds = (row["p_low"], row["p_high"])
        cells = (
            row["subjects_used"] or DASH,
            _title(row["method"]),
            row["role"] or DASH,
            DASH if row["n"] is None else str(int(row["n"])),
            DASH if row["estimate"] is None else number(row["estimate"]),
            span(row["low"], row["high"]) if row["low"] is not None else DASH,
            DASH if p is None else p_cell(p, style),
            DASH if None in bounds else f"{p_cell(bounds[0], style)} to {p_cell(bounds[1], style)}",
        )
        groups.setdefault(row["label"], []).append(Line(cells))
    headings = ("Subjects", "Analysis", "Role", "n", "Estimate", "CI", "P", "P at the ends")
    return Sheet(
        "Missing visits under other handling; P at the ends with the missing values ranked at "
        "either end",
        headings,
        tuple(Group(label, tuple(lines)) for label, lines in groups.items()),
        frozenset({0, 1, 2}),
    )


def _title(method: str) -> str:
    try:
        return registered(method).title
    except KeyError:  # a row of no test on offer is told by its own name
        return method


def _margins(rows: list[Row]) -> Sheet:
    lines = tuple(
        Line(
            (
                f"{row['second']} vs {row['first']}",
                str(row["n"]),
                DASH if row["estimate"] is None else number(row["estimate"]),
                span(row["low"], row["high"]) if row["low"] is not None else DASH,
                span(row["margin_low"], row["margin_high"]),
                row["reading"],
            )
        )
        for row in rows
    )
    headings = ("Comparison", "n", "Estimate", "90% CI", "Margin", "Reading")
    return Sheet(
        "Planned comparisons against the margin of no relevant change",
        headings,
        (Group("", lines),),
        frozenset({0, 5}),
    )
