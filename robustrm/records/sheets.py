"""A sheet of named columns, wide or long, becomes written cells with their subjects."""

from __future__ import annotations

import re
import shlex
import unicodedata
from collections import defaultdict
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from robustrm._checks import did_you_mean
from robustrm._format import counted, listing
from robustrm.cells import clean
from robustrm.errors import DataError, Problem
from robustrm.ledger import LedgerLine
from robustrm.records.findings import Findings
from robustrm.records.natural import natural_key
from robustrm.records.record import Written
from robustrm.results import Note

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, slots=True)
class Field:
    """The text of one field, and whether the file holds it as a number and not as text."""

    text: str = ""
    number: bool = False

    @property
    def blank(self) -> bool:
        """Whether nothing can be seen in it."""
        return not clean(self.text)


@dataclass(frozen=True, slots=True)
class Row:
    """One row of a sheet with its number in the file, counted from 1."""

    number: int
    fields: tuple[Field, ...]


@dataclass(frozen=True)
class Sheet:
    """Headings and the rows under them, all of the same length."""

    headings: tuple[str, ...]
    rows: tuple[Row, ...]
    source: str = ""

    def position(self, name: str) -> int:
        """Return the position of a heading that stands there once."""
        return self.headings.index(clean(name))

    def texts(self, name: str) -> list[str]:
        """Return the texts of a column, without blanks around them."""
        column = self.position(name)
        return [clean(row.fields[column].text) for row in self.rows]


def sheet_of_frame(frame: pd.DataFrame) -> Sheet:
    """Return the sheet of a DataFrame; rows are counted from 1, the index is not read."""
    rows = tuple(
        Row(number, tuple(_field(value) for value in values))
        for number, values in enumerate(frame.itertuples(index=False, name=None), start=1)
    )
    return Sheet(tuple(clean(str(name)) for name in frame.columns), rows)


def _field(value: object) -> Field:
    if isinstance(value, str):
        return Field(value)
    if str(value) in ("None", "nan", "NaN", "<NA>", "NaT"):
        return Field()
    if isinstance(value, bool) or not hasattr(value, "__float__"):
        return Field(str(value))
    return Field(number_text(value), number=True)


def number_text(value: object) -> str:
    """Return the shortest text of a number; whole numbers without a decimal point.

    Examples
    --------
    >>> number_text(7.0), number_text(0.1), number_text(12)
    ('7', '0.1', '12')
    """
    text = str(value)
    return text[:-2] if text.endswith(".0") else text


# ── columns ───────────────────────────────────────────────────────────────────────────


def check_columns(sheet: Sheet, roles: Iterable[tuple[str, str]]) -> None:
    """Refuse roles whose column is not there, or there twice; all of them at once.

    Parameters
    ----------
    sheet : Sheet
        Where the columns should be.
    roles : iterable of (option, name)
        Option that named the column, and the name.
    """
    problems = []
    for option, name in roles:
        count = sheet.headings.count(clean(name))
        if count == 0:
            headings = [heading for heading in sheet.headings if heading]
            problems.append(
                Problem(
                    "no column",
                    f"there is no column {name!r}.{_suggestion(name, headings)}",
                    f"The headings are {listing([repr(h) for h in headings], 12)}; choose with "
                    f"{option}.",
                    column=name,
                )
            )
        elif count > 1:
            problems.append(
                Problem(
                    "duplicate heading",
                    f"{counted(count, 'column')} have the heading {name!r}.",
                    "Give every column a heading of its own in one heading row, such as 'IL6_wk0'.",
                    column=name,
                )
            )
    if problems:
        raise DataError(problems, sheet.source)


def _suggestion(name: str, headings: Sequence[str]) -> str:
    same = [heading for heading in headings if heading.casefold() == clean(name).casefold()]
    return did_you_mean(same[0], same) if same else did_you_mean(name, headings)


def wide(sheet: Sheet, *, subject: str, occasions: Sequence[str]) -> tuple[list[Written], Findings]:
    """Return the cells of a sheet with one row a subject and one column an occasion."""
    check_columns(sheet, [("--subject", subject), *(("--occasions", name) for name in occasions)])
    columns = [(clean(name), sheet.position(name)) for name in occasions]
    found = Findings()
    ids = _identifiers(sheet, subject, found, repeated=False)
    written = []
    for row, name in zip(sheet.rows, ids, strict=True):
        cells = [(label, row.fields[j]) for label, j in columns]
        if not name:
            _without_id(row, subject, [cell for _, cell in cells], found)
            continue
        written += [
            Written(name, label, cell.text, cell.number, row.number, label) for label, cell in cells
        ]
    _note_alike(_look_alikes(ids), found)
    return written, found


def long(
    sheet: Sheet, *, subject: str, occasion: str, value: str, order: Sequence[str]
) -> tuple[list[Written], Findings]:
    """Return the cells of a sheet with one row a cell."""
    check_columns(sheet, [("--subject", subject), ("--occasion", occasion), ("--value", value)])
    column = sheet.position(value)
    found = Findings()
    ids = _identifiers(sheet, subject, found, repeated=True)
    labels = sheet.texts(occasion)
    written, strangers = [], defaultdict(list)
    for row, name, label in zip(sheet.rows, ids, labels, strict=True):
        cell = row.fields[column]
        if not name:
            _without_id(row, subject, [cell], found)
        elif not label:
            found.problems.append(_without_occasion(row, name, occasion, cell))
        elif label not in order:
            strangers[label].append(row.number)
        else:
            written.append(Written(name, label, cell.text, cell.number, row.number, value))
    found.problems += [_stranger(label, rows, order) for label, rows in strangers.items()]
    found.problems += _unused(order, set(labels))
    _check_alike(_look_alikes(ids), written, found)
    return written, found


def labels(sheet: Sheet, occasion: str) -> list[str]:
    """Return the distinct labels of a column of occasions, in order of appearance."""
    check_columns(sheet, [("--occasion", occasion)])
    return list(dict.fromkeys(label for label in sheet.texts(occasion) if label))


def order_undeclared(proposal: Sequence[str], column: str) -> Problem:
    """Return the problem that the order of the occasions was not declared, with a proposal."""
    return Problem(
        "order",
        f"the order in time of the {counted(len(proposal), 'occasion')} is not declared; nothing "
        "is sorted silently.",
        f"Check this proposal and add it: --order {option_list(proposal)}",
        column=column,
    )


def one_occasion(seen: Sequence[str], column: str) -> Problem:
    """Return the problem that a column of occasions holds fewer than two."""
    what = f"only {listing([repr(label) for label in seen])}" if seen else "nothing"
    return Problem(
        "occasion",
        f"the column of occasions holds {what}; a comparison within subjects needs two or more.",
        "Name the column of the occasions with --occasion.",
        column=column,
    )


def option_list(names: Sequence[str]) -> str:
    """Return names as one word of a command line.

    Examples
    --------
    >>> option_list(["week 0", "week 2"])
    "'week 0,week 2'"
    """
    return shlex.quote(",".join(names))


def _without_id(row: Row, subject: str, cells: Sequence[Field], found: Findings) -> None:
    if all(cell.blank for cell in cells):
        what = f"row {row.number} has neither identifier nor value: set aside"
        found.lines.append(LedgerLine("rows", what))
        return
    found.problems.append(
        Problem(
            "no identifier",
            "the row has values and no identifier.",
            "Write the identifier in every row (cells merged in a spreadsheet keep it in the "
            "first only), or remove the row.",
            row.number,
            subject,
            "",
        )
    )


def _without_occasion(row: Row, name: str, occasion: str, cell: Field) -> Problem:
    return Problem(
        "no occasion",
        f"the row of {name!r} with {cell.text!r} names no occasion.",
        "Write the occasion in every row.",
        row.number,
        occasion,
        "",
    )


def _stranger(label: str, rows: Sequence[int], order: Sequence[str]) -> Problem:
    shown = listing([str(row) for row in rows])
    return Problem(
        "occasion",
        f"{label!r} is not among the declared occasions (row{'s' * (len(rows) > 1)} {shown})."
        f"{did_you_mean(label, order)}",
        "Correct the label in the file, or add it to --order.",
        rows[0],
        text=label,
    )


def _unused(order: Sequence[str], seen: set[str]) -> list[Problem]:
    return [
        Problem(
            "occasion",
            f"no row has the declared occasion {label!r}.{did_you_mean(label, seen)}",
            "Correct --order, or the labels in the file.",
            text=label,
        )
        for label in order
        if label not in seen
    ]


# ── identifiers: text, never interpreted, never merged ────────────────────────────────


def _identifiers(sheet: Sheet, subject: str, found: Findings, *, repeated: bool) -> list[str]:
    """Return the identifier of every row, without blanks unless that would merge two."""
    column = sheet.position(subject)
    raw = [row.fields[column].text for row in sheet.rows]
    spellings: Mapping[str, dict[str, int]] = defaultdict(dict)
    for text, row in zip(raw, sheet.rows, strict=True):
        spellings[clean(text)].setdefault(text, row.number)
    clash = {name for name, seen in spellings.items() if name and len(seen) > 1}
    for name in sorted(clash, key=natural_key):
        _blank_clash(name, spellings[name], subject, found, repeated=repeated)
    padded = {text for text in raw if clean(text) != text and clean(text) not in {"", *clash}}
    blanks = sorted(padded, key=natural_key)
    if blanks:
        shown = listing([repr(text) for text in blanks])
        found.notes.append(
            Note("identifier blanks", f"Blanks around identifiers were removed: {shown}.")
        )
    return [text if clean(text) in clash else clean(text) for text in raw]


def _blank_clash(
    name: str, seen: Mapping[str, int], subject: str, found: Findings, *, repeated: bool
) -> None:
    if not repeated:
        found.notes.append(_possible_duplicate(listing([repr(text) for text in sorted(seen)])))
        return
    shown = listing([f"{text!r} (row {row})" for text, row in seen.items()])
    found.problems.append(
        Problem(
            "look-alike identifiers",
            f"{shown} differ in blanks alone: one subject or two?",
            "Write one subject's identifier the same way in every row.",
            list(seen.values())[-1],
            subject,
            list(seen)[-1],
        )
    )


def _possible_duplicate(shown: str) -> Note:
    return Note(
        "possible duplicate",
        f"Identifiers look alike: {shown}.",
        "They are kept apart, as different subjects.",
        "If they are one person, write the identifier the same way.",
    )


def _look_alikes(ids: Sequence[str]) -> list[tuple[str, ...]]:
    """Return groups of identifiers that differ in case, leading zeros or marks alone."""
    groups: Mapping[str, dict[str, None]] = defaultdict(dict)
    for name in ids:
        if name:
            groups[_likeness(name)][name] = None
    return sorted(
        tuple(sorted(group, key=natural_key))
        for group in groups.values()
        if len(group) > 1 and len({clean(name) for name in group}) > 1
    )


def _likeness(name: str) -> str:
    plain = re.sub(r"[\s._/-]+", "", unicodedata.normalize("NFKC", clean(name)).casefold())
    return re.sub(r"(?<!\d)0+(?=\d)", "", plain)


def _note_alike(groups: Iterable[tuple[str, ...]], found: Findings) -> None:
    found.notes += [_possible_duplicate(listing([repr(n) for n in group])) for group in groups]


def _check_alike(
    groups: Iterable[tuple[str, ...]], written: Sequence[Written], found: Findings
) -> None:
    """Note look-alikes that each stand for themselves; stop where they complete each other."""
    occasions: Mapping[str, set[str]] = defaultdict(set)
    last: dict[str, Written] = {}
    for item in written:
        occasions[item.subject].add(item.occasion)
        last[item.subject] = item
    for group in groups:
        sets = [occasions[name] for name in group]
        shown = listing([repr(name) for name in group])
        if not all(sets) or sum(map(len, sets)) > len(set().union(*sets)):
            found.notes.append(_possible_duplicate(shown))
            continue
        end = last.get(group[-1])
        found.problems.append(
            Problem(
                "look-alike identifiers",
                f"{shown} look alike and never have the same occasion: one subject or two?",
                "Write one subject's identifier the same way in every row.",
                end.row if end else None,
                text=group[-1],
            )
        )
