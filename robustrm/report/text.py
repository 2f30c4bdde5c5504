"""The document as text for a terminal: what could be reached first, cautions last."""

from __future__ import annotations

import itertools
import textwrap
import unicodedata
from collections.abc import Iterable
from typing import Any

from robustrm._format import Style, aligned
from robustrm.report import sentences
from robustrm.report.document import Document
from robustrm.report.plan_text import origin
from robustrm.report.sheets import (
    Sheet,
    beside_contrasts_sheet,
    beside_overall_sheet,
    overall_sheet,
    primary_sheet,
)

COLUMNS = 96


def text(document: Document, style: Style = "medical") -> str:
    """Return the whole analysis as text, at most about a hundred columns wide.

    Parameters
    ----------
    document : dict
        From :func:`robustrm.report.document.document`.
    style : {"medical", "apa"}, default "medical"
        How p values are written.

    Returns
    -------
    str
        With a newline at its end. Control characters in labels are replaced: a label cannot
        move the cursor or break a table.
    """
    safe = printable(document)
    parts = [
        _paragraph(safe["attainable"]["sentence"]),
        _opening(safe),
        _planned(safe, style),
        _overall(safe, style),
        _beside(safe, style),
        _block("Not made", sentences.skipped(safe)),
        _block("How it was planned", origin(safe)),
        _block("What each row tests", _tested(safe)),
        _block("Notes", _notes(safe, style)),
        _block("Cautions", sentences.CAUTIONS),
    ]
    return "\n\n".join(part for part in parts if part) + "\n"


def _opening(document: Document) -> str:
    lines = (
        sentences.size(document),
        sentences.completeness(document),
        sentences.exploratory(document),
    )
    return "\n".join(_paragraph(line) for line in lines if line)


def _planned(document: Document, style: Style) -> str:
    counts = (_paragraph(line) for line in sentences.counts_instead(document))
    return "\n\n".join([_table(primary_sheet(document, style)), *counts])


def _overall(document: Document, style: Style) -> str:
    sheet = overall_sheet(document, style)
    return _table(sheet) if sheet.lines else ""


def _beside(document: Document, style: Style) -> str:
    """Set the rows group by group; those on another footing are marked and stand last."""
    sheets = (beside_contrasts_sheet(document, style), beside_overall_sheet(document, style))
    lines = [_paragraph(sentences.adjusters(sentences.all_rows(document)))]
    if any(line.apart for sheet in sheets for line in sheet.lines):
        lines.append("≠ rests on another n or scale than the planned row: not its equal.")
    tables = [_grouped(sheet) for sheet in sheets if sheet.lines]
    return "\n\n".join([*tables, "\n".join(line for line in lines if line)])


def _grouped(sheet: Sheet) -> str:
    short = sheet.without("Differs in")
    if "Estimand" in short.headings:  # in the headings of the groups otherwise
        short = short.without("Estimand")
    marked = [
        [f"{'≠' if line.apart else ' '} {line.cells[0]}", *line.cells[1:]] for line in short.lines
    ]
    table = aligned(short.headings, marked, words=tuple(short.words)).splitlines()
    lines, rows = [sheet.caption, *table[:2]], iter(table[2:])
    for group in short.groups:
        lines.extend([group.heading] if group.heading else [])
        lines.extend(itertools.islice(rows, len(group.lines)))
    return "\n".join(lines)


def _table(sheet: Sheet) -> str:
    rows = [line.cells for line in sheet.lines]
    return f"{sheet.caption}\n{aligned(sheet.headings, rows, words=tuple(sheet.words))}"


def _tested(document: Document) -> list[str]:
    return [
        f"{tested.rows}. Null: {tested.hypothesis} Estimand: {tested.estimand}."
        for tested in sentences.tested(sentences.all_rows(document))
    ]


def _notes(document: Document, style: Style) -> list[str]:
    rows = sentences.remarks(sentences.all_rows(document), style)
    return [
        *sentences.family_notes(document, style),
        *(f"{remark.rows}: {remark.text}" for remark in rows),
        *sentences.general_notes(document, style),
    ]


def _block(heading: str, lines: Iterable[str]) -> str:
    items = [
        textwrap.fill(line, COLUMNS, initial_indent="- ", subsequent_indent="  ") for line in lines
    ]
    return "\n".join([heading, *items]) if items else ""


def _paragraph(line: str) -> str:
    return textwrap.fill(line, COLUMNS)


def printable(value: Any) -> Any:
    """Return the document with every control and formatting character replaced."""
    if isinstance(value, str):
        return "".join("�" if unicodedata.category(c) in ("Cc", "Cf") else c for c in value)
    if isinstance(value, dict):
        return {key: printable(item) for key, item in value.items()}
    return [printable(item) for item in value] if isinstance(value, list) else value
