"""Rows of a file become a sheet: headings found, other rows set aside by name, never silently."""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from dataclasses import dataclass, field

from robustrm._format import listing
from robustrm.cells import clean, looks_like_unit, normal_unit
from robustrm.errors import DataError, Problem
from robustrm.ledger import LedgerLine
from robustrm.reading.files import Grid
from robustrm.records import Findings
from robustrm.records.sheets import Field, Row, Sheet
from robustrm.results import Note

_SEARCHED = 50
_UNIT_LABELS = frozenset({"", "unit", "units", "[unit]", "(unit)"})
# Identifiers that a row of results at the foot carries instead of a subject's.
_SUMMARY_WORDS = frozenset(
    [
        "mean", "average", "avg", "median", "total", "sum", "n", "count", "sd", "std", "stdev",
        "sem", "se", "cv", "cv%", "%cv", "min", "minimum", "max", "maximum", "range", "iqr", "q1",
        "q3", "variance", "geometric mean", "geomean", "gm", "gsd", "n (%)", "mean (sd)",
        "median (iqr)", "median [iqr]",
    ]
)  # fmt: skip
_FOOTNOTE_STARTS = ("*", "†", "‡", "#", "note", "source:", "legend", "abbreviation", "footnote")


@dataclass(frozen=True)
class Framed:
    """A sheet, the units found under its headings, and what was set aside on the way."""

    sheet: Sheet
    top: int  # number of the row of headings
    units: dict[str, tuple[str, int]] = field(default_factory=dict)  # heading: (unit, row)
    found: Findings = field(default_factory=Findings)


def framed(grid: Grid, *, subject: str | None, names: Sequence[str]) -> Framed:
    """Return the sheet in the rows of a file.

    Parameters
    ----------
    grid : Grid
        Rows as they stand.
    subject : str or None
        Heading of the identifiers, where declared.
    names : sequence of str
        All declared headings.
    """
    filled = [row for row in grid.rows if not _blank(row)]
    if not filled:
        raise _no_rows("every field of the file is empty.", 1, grid.name)
    top = _heading_position(filled, names)
    headings = _headings(filled[top])
    found = Findings(notes=list(grid.notes))
    _set_aside("title", "above the headings", filled[:top], found)
    width = len(headings)
    column = headings.index(clean(subject)) if subject and clean(subject) in headings else 0
    below = filled[top + 1 :]
    units: dict[str, tuple[str, int]] = {}
    if below and _is_unit_row(below[0], column):
        units = _units_of(below[0], headings)
        _set_aside("unit row", "holds units", below[:1], found)
        below = below[1:]
    body = _without_comments(below, found)
    body = _without_foot(body, column, found)
    rows = tuple(_fitted(row, width, grid.name, found) for row in body)
    found.problems += [*_repeated_headings(rows, headings), *_stray_summaries(rows, column)]
    if not rows:
        what = "there are headings and no row of data under them."
        raise _no_rows(what, filled[top].number, grid.name)
    return Framed(Sheet(headings, rows, grid.name), filled[top].number, units, found)


def _no_rows(what: str, row: int, source: str) -> DataError:
    action = "Choose the file (or the sheet) that holds the data."
    return DataError([Problem("no rows", what, action, row)], source)


def _blank(row: Row) -> bool:
    return all(cell.blank for cell in row.fields)


def _filled(row: Row) -> int:
    return sum(not cell.blank for cell in row.fields)


def _heading_position(rows: Sequence[Row], names: Sequence[str]) -> int:
    """Return which row holds the headings: the one with most declared names, else the first full.

    A row counts as full from three quarters of the widest one on: titles above are narrower.
    """
    searched = rows[:_SEARCHED]
    wanted = {clean(name) for name in names}
    hits = [len(wanted & {clean(cell.text) for cell in row.fields}) for row in searched]
    if max(hits) > 0:
        return hits.index(max(hits))
    full = max(2, math.ceil(0.75 * max(map(_filled, searched))))
    return next((i for i, row in enumerate(searched) if _filled(row) >= full), 0)


def _headings(row: Row) -> tuple[str, ...]:
    headings = [clean(cell.text) for cell in row.fields]
    while headings and not headings[-1]:
        headings.pop()
    return tuple(headings)


def _set_aside(step: str, why: str, rows: Sequence[Row], found: Findings) -> None:
    # Numbers of rows only: a title or a footnote may hold somebody's name.
    found.lines += [
        LedgerLine("rows", f"row {row.number} {why}: set aside as {step}") for row in rows
    ]


# ── the row of units ──────────────────────────────────────────────────────────────────


def _is_unit_row(row: Row, column: int) -> bool:
    first = clean(row.fields[column].text).casefold() if column < len(row.fields) else ""
    others = [cell for j, cell in enumerate(row.fields) if j != column and not cell.blank]
    return (
        first in _UNIT_LABELS
        and bool(others)
        and sum(looks_like_unit(cell.text) for cell in others) * 2 >= len(others)
        and not any(cell.number for cell in others)
    )


def _units_of(row: Row, headings: Sequence[str]) -> dict[str, tuple[str, int]]:
    return {
        heading: (normal_unit(cell.text), row.number)
        for heading, cell in zip(headings, row.fields, strict=False)
        if heading and looks_like_unit(cell.text)
    }


# ── rows that are no subjects ─────────────────────────────────────────────────────────


def _identifier(row: Row, column: int) -> str:
    return clean(row.fields[column].text) if column < len(row.fields) else ""


def _alone(row: Row, column: int) -> bool:
    """Whether a row has text in one field only, the identifier or the first."""
    first = _identifier(row, column) or _identifier(row, 0)
    return _filled(row) == 1 and bool(first)


def _without_comments(rows: Sequence[Row], found: Findings) -> list[Row]:
    comments = [row for row in rows if _is_comment(row)]
    _set_aside("comment", "begins with #", comments, found)
    return [row for row in rows if not _is_comment(row)]


def _is_comment(row: Row) -> bool:
    # "# drawn at noon" is a comment, "#12" may be somebody's identifier.
    return re.match(r"#\W*\w+\s+\S", clean(row.fields[0].text)) is not None


def _without_foot(rows: Sequence[Row], column: int, found: Findings) -> list[Row]:
    """Set aside rows of results and footnotes at the foot, and nowhere else."""
    body = list(rows)
    foot: list[Row] = []
    while body and (_is_summary(body[-1], column) or _is_footnote(body[-1], column)):
        foot.insert(0, body.pop())
    _set_aside("footer", "stands at the foot", foot, found)
    summaries = [repr(_identifier(row, column)) for row in foot if _is_summary(row, column)]
    if summaries:
        found.notes.append(
            Note(
                "footer",
                f"Rows at the foot were taken for results, not for subjects: {listing(summaries)}.",
                action="If one of them is a subject, give it another identifier.",
            )
        )
    return body


def _is_summary(row: Row, column: int) -> bool:
    return _identifier(row, column).rstrip(":.").casefold() in _SUMMARY_WORDS


def _is_footnote(row: Row, column: int) -> bool:
    first = (_identifier(row, column) or _identifier(row, 0)).casefold()
    return _alone(row, column) and first.startswith(_FOOTNOTE_STARTS)


def _stray_summaries(rows: Sequence[Row], column: int) -> list[Problem]:
    # One-letter and short codes may be subjects; only words that name a result stop the run.
    stray = [row for row in rows if _is_summary(row, column) and len(_identifier(row, column)) > 3]
    return [
        Problem(
            "summary row",
            f"{_identifier(row, column)!r} reads like a row of results among the subjects.",
            "Remove the row, or move it to the foot; give a subject another identifier.",
            row.number,
            text=_identifier(row, column),
        )
        for row in stray
    ]


def _repeated_headings(rows: Sequence[Row], headings: Sequence[str]) -> list[Problem]:
    return [
        Problem(
            "repeated heading",
            "the headings stand there again.",
            "Remove the row; were two tables joined, check that they have the same columns.",
            row.number,
        )
        for row in rows
        if [clean(cell.text) for cell in row.fields] == list(headings)
    ]


def _fitted(row: Row, width: int, source: str, found: Findings) -> Row:
    """Return the row with one field a heading; more filled fields than headings are a problem."""
    extra = [cell for cell in row.fields[width:] if not cell.blank]
    if extra:
        found.problems.append(
            Problem(
                "too many fields",
                f"the row has {_last_filled(row)} fields under {width} headings.",
                "Look for a decimal comma in a file separated by commas, or for text beside the "
                "table.",
                row.number,
                text=extra[0].text,
            )
        )
    filled = [cell.text for cell in row.fields if not cell.blank]
    if width > 2 and len(filled) == 1 and filled[0].count(";") + filled[0].count("\t") > 1:
        found.problems.append(
            Problem(
                "too few fields",
                f"the row has one field under {width} headings, with other separators in it.",
                "Write the whole file with one separator.",
                row.number,
                text=filled[0],
            )
        )
    fields = row.fields[:width]
    return Row(row.number, fields + (Field(),) * (width - len(fields)))


def _last_filled(row: Row) -> int:
    return max(j for j, cell in enumerate(row.fields, start=1) if not cell.blank)
