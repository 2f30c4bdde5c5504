"""Cells with their place: whom, when, where in the file, and what cannot be read."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from decimal import Decimal

from robustrm._format import counted, listing
from robustrm.cells import Cell, Mark, Marks, lone_mark, marks_of, parse_cell
from robustrm.errors import Problem
from robustrm.results import Note

_SHOWN_EXAMPLES = 5
_MOST_PROBLEMS = 100
_CODES = frozenset(
    ["-9", "-99", "-999", "-9999", "99", "999", "9999", "99999", "888", "8888"]
)  # common practice, no source
_FAR_OUTSIDE = 20


@dataclass(frozen=True, slots=True)
class Written:
    """The text of one cell and where it stands.

    Parameters
    ----------
    subject, occasion : str
        Whom and which occasion it concerns.
    text : str
        The cell as written.
    number : bool
        The file holds a number here, not text: its decimal mark is never in doubt.
    row : int, optional
        Row of the file, counted from 1.
    column : str, optional
        Heading of the column.
    """

    subject: str
    occasion: str
    text: str
    number: bool = False
    row: int | None = None
    column: str | None = None


@dataclass(frozen=True, slots=True)
class Record:
    """One cell that was read, with its place.

    Parameters
    ----------
    subject, occasion : str
        Whom and which occasion it concerns.
    cell : Cell
        What the cell says.
    row : int, optional
        Row of the file, counted from 1.
    column : str, optional
        Heading of the column.
    text : str
        The cell as written.
    """

    subject: str
    occasion: str
    cell: Cell
    row: int | None = None
    column: str | None = None
    text: str = ""

    @property
    def place(self) -> str:
        """The subject and occasion in words."""
        return f"{self.subject} at {self.occasion}"


def read_cells(
    written: Sequence[Written], *, decimal: Mark | None = None
) -> tuple[list[Record], list[Note], str]:
    """Return the records of `written`, what was noticed, and the decimal mark that was used.

    A lone mark before three digits (``1,234``) is read as the other cells settle it beyond
    doubt, else refused; the declared `decimal` wins.

    Examples
    --------
    >>> cells = [Written("P1", "before", "0,45"), Written("P1", "after", "1,234")]
    >>> [str(record.cell.number) for record in read_cells(cells)[0]]
    ['0.45', '1.234']
    """
    marks = marks_of(item.text for item in written if not item.number)
    records = [
        Record(
            item.subject, item.occasion, _parsed(item, decimal, marks), item.row, item.column,
            item.text,
        )
        for item in written
    ]  # fmt: skip
    used = decimal or _mark_in_use(marks)
    texts = [record for item, record in zip(written, records, strict=True) if not item.number]
    return records, [*_mark_notes(texts, used), *_content_notes(records)], used


def _parsed(item: Written, decimal: Mark | None, marks: Marks) -> Cell:
    if item.number:
        return parse_cell(item.text, decimal=".")
    mark = lone_mark(item.text)
    if decimal is not None or not mark:
        return parse_cell(item.text, decimal=decimal)
    settled = marks.settle(mark)
    if settled is None:
        return Cell("refused", token=item.text.strip(), reason="ambiguous")
    return parse_cell(item.text, decimal=settled)


def _mark_in_use(marks: Marks) -> str:
    return "mixed" if len(marks.decimals) > 1 else next(iter(marks.decimals), ".")


# ── what is noticed and left as it is ─────────────────────────────────────────────────


def _mark_notes(records: Sequence[Record], used: str) -> list[Note]:
    numbers = {r.text.strip(): r.cell.number for r in records if r.cell.number is not None}
    marked = [text for text in numbers if "," in text or lone_mark(text)]
    changed = [text for text in marked if "," in text or str(numbers[text]) != text]
    if not changed:
        return []
    examples = listing([f"{t!r} as {numbers[t]}" for t in changed[:_SHOWN_EXAMPLES]])
    if used == "mixed":
        fact = f"Decimal points and decimal commas both occur; read number by number: {examples}."
        return [Note("decimal", fact, "", "Check these, or declare --decimal.")]
    word = "comma" if used == "," else "point"
    return [Note("decimal", f"Numbers read with a decimal {word}: {examples}.")]


def _content_notes(records: Sequence[Record]) -> list[Note]:
    notes = []
    flagged = [r for r in records if r.cell.kind == "value" and r.cell.reason == "flagged"]
    if flagged:
        notes.append(
            Note(
                "flagged",
                f"{counted(len(flagged), 'value')} with a mark beside the number kept as "
                f"measured: {_places(flagged)}.",
                action="Look up what the mark means.",
            )
        )
    words = Counter(r.cell.token for r in records if r.cell.reason == "word")
    if words:
        shown = listing([f"{token!r} ({count})" for token, count in words.items()])
        notes.append(
            Note(
                "limit words",
                f"Read as beyond a limit, not as missing: {shown}.",
                "A word such as 'ND' can also mean 'not done'.",
                "If it does here, leave those cells empty.",
            )
        )
    zeros = [r for r in records if r.cell.kind == "value" and r.cell.number == 0]
    if zeros:
        notes.append(
            Note(
                "zero",
                f"{counted(len(zeros), 'value')} written as 0: {_places(zeros)}.",
                "A value below a detection limit is not zero, and zero has no logarithm.",
                "If it lies below a limit, write it as '<limit'.",
            )
        )
    return notes


def _places(records: Sequence[Record]) -> str:
    return listing([f"{r.place} ({r.cell.token})" for r in records])


# ── what must be settled first ────────────────────────────────────────────────────────

_REFUSALS = {
    "unit": (
        "holds more than a number.",
        "Put the unit into the heading or a column of its own, and convert cells in another "
        "unit first.",
    ),
    "date": (
        "is a date where a value was expected.",
        "A spreadsheet may have turned a number such as 1-2 or 1.2 into a date: take the value "
        "from the laboratory's report and format the column as text.",
    ),
    "infinite": ("is not a finite number.", "Write '>limit' for a value above a limit."),
    "size": ("is too large or too small to compute with.", "Correct it."),
    "spreadsheet error": (
        "is the error of a spreadsheet formula.",
        "Repair the formula, or leave the cell empty where there is no value.",
    ),
    "formula": (
        "is a formula without a stored result.",
        "Open the file in a spreadsheet program, let it calculate, and save it again.",
    ),
    "limit": ("is no limit: a limit must be positive.", "Write the limit that applied."),
    "text": (
        "is no number, no limit and no known word for missing.",
        "Correct it, write '<limit' for a value below a limit, or leave the cell empty.",
    ),
}


def refusals(records: Iterable[Record]) -> list[Problem]:
    """Return one problem a cell that could not be read; doubtful marks are gathered in one."""
    refused = [record for record in records if record.cell.kind == "refused"]
    single = [r for r in refused if r.cell.reason in _REFUSALS]
    problems = [
        _problem("unreadable", record, *_REFUSALS[record.cell.reason])
        for record in single[:_MOST_PROBLEMS]
    ]
    if len(single) > _MOST_PROBLEMS:
        more = counted(len(single) - _MOST_PROBLEMS, "more cell")
        problems.append(
            Problem(
                "unreadable", f"{more} cannot be read.", "Is this the column of measured values?"
            )
        )
    doubtful = [r for r in refused if r.cell.reason == "ambiguous"]
    if doubtful:
        text = doubtful[0].cell.token
        readings = " or ".join(
            str(parse_cell(text, decimal=mark).number) for mark in _both_marks(text)
        )
        problems.append(
            _problem(
                "ambiguous number",
                doubtful[0],
                f"can be read as {readings} ({_so_many(doubtful)}).",
                "Say which mark is the decimal one: --decimal , or --decimal .",
            )
        )
    misfits = [r for r in refused if r.cell.reason == "decimal mark"]
    if misfits:
        problems.append(
            _problem(
                "decimal mark",
                misfits[0],
                f"does not use the declared decimal mark ({_so_many(misfits)}).",
                "Correct --decimal, or leave it out where both marks occur.",
            )
        )
    return problems


def _both_marks(text: str) -> tuple[Mark, Mark]:
    return (",", ".") if "," in text else (".", ",")


def _so_many(records: Sequence[Record]) -> str:
    return f"{counted(len(records), 'cell')} like it"


def missing_codes(records: Iterable[Record]) -> list[Problem]:
    """Return a problem for every number that looks like a code for missing.

    Only exact codes such as −99 or 999 count, and only where they lie far outside: negative
    among values that are not, or beyond 20 times the next largest value.
    """
    values = [r for r in records if r.cell.kind == "value" and r.cell.number is not None]
    others = [_number(r) for r in values if r.cell.token not in _CODES]
    if not others:
        return []
    lowest, largest = min(others), max(others)
    return [
        _problem(
            "missing code",
            record,
            f"looks like a code for missing: the other values lie between {lowest} and {largest}.",
            "Leave the cell empty or write the reason; if it was measured, write it with a "
            f"decimal place ({record.cell.token}.0).",
        )
        for record in values
        if record.cell.token in _CODES and _outside(_number(record), lowest, largest)
    ]


def _outside(number: Decimal, lowest: Decimal, largest: Decimal) -> bool:
    if number < 0:
        return lowest >= 0
    return 0 < _FAR_OUTSIDE * largest < number


def _number(record: Record) -> Decimal:
    return record.cell.number or Decimal(0)


def _problem(code: str, record: Record, what: str, action: str) -> Problem:
    return Problem(
        code=code,
        message=f"{record.cell.token!r} of {record.place} {what}",
        action=action,
        row=record.row,
        column=record.column,
        text=record.text,
    )
