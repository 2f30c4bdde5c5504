"""The bytes of a file and what kind of file they are, judged by content, never by the name."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, BinaryIO

from robustrm._checks import did_you_mean
from robustrm.errors import ArgumentError, DataError, Problem
from robustrm.reading import text_files, workbooks
from robustrm.records.sheets import Row
from robustrm.results import Note

LARGEST_FILE = 50 * 1024**2

# The first bytes of files that are no tables, with what to do instead.
_OTHER_KINDS = {
    b"\xd0\xcf\x11\xe0": (
        "an old or a password-protected workbook",
        "Save it as .xlsx without a password, or as .csv.",
    ),
    b"%PDF": ("a PDF document", "Export the table as .csv or .xlsx."),
    b"\x1f\x8b": ("a compressed file", "Unpack it first."),
    b"\x89PNG": ("a picture", "Export the table as .csv or .xlsx."),
}


@dataclass(frozen=True)
class Grid:
    """Rows of a file as they stand, before any heading is looked for."""

    name: str
    rows: tuple[Row, ...]
    source: dict[str, Any]
    notes: tuple[Note, ...] = field(default=())


def load(path: str | Path | BinaryIO, *, sheet: str | None, names: Sequence[str]) -> Grid:
    """Return the rows of a file.

    Parameters
    ----------
    path : str, Path or binary file object
        A text table (comma, semicolon or tab between fields) or a workbook (.xlsx).
    sheet : str or None
        Sheet of a workbook.
    names : sequence of str
        Declared column headings, which settle what separates the fields.
    """
    name, data = _read(path)
    source = {"file": name, "sha256": hashlib.sha256(data).hexdigest()}
    if not data.strip():
        raise unreadable(name, "the file is empty.", "Choose the file that holds the data.")
    for magic, (kind, action) in _OTHER_KINDS.items():
        if data.startswith(magic):
            raise unreadable(name, f"the file is {kind}, not a table.", action)
    if data.startswith(b"PK\x03\x04"):
        book = workbooks.rows_of(data, sheet=sheet, source=name)
        details = {"kind": "workbook", "sheet": book.sheet}
        return Grid(name, book.rows, {**source, **details})
    if sheet is not None:
        raise ArgumentError(
            f"`sheet` is for workbooks, got {sheet!r} for the text file {name!r}. Leave it out."
        )
    text = text_files.rows_of(data, names=names, source=name)
    details = {"kind": "text", "encoding": text.encoding, "delimiter": text.delimiter}
    return Grid(name, text.rows, {**source, **details}, text.notes)


def unreadable(name: str, message: str, action: str) -> DataError:
    """Return the error that a file as a whole cannot be read."""
    return DataError([Problem("cannot read", message, action)], name)


def _read(path: str | Path | BinaryIO) -> tuple[str, bytes]:
    if not isinstance(path, (str, Path)):
        name = Path(str(getattr(path, "name", "input"))).name
        data = path.read(LARGEST_FILE + 1)
        if not isinstance(data, bytes):
            raise ArgumentError(
                "`path` must be a file name or a file opened in binary mode ('rb'), got one in "
                "text mode."
            )
        return name, _of_allowed_size(name, data)
    place = Path(path)
    try:
        with place.open("rb") as file:
            return place.name, _of_allowed_size(place.name, file.read(LARGEST_FILE + 1))
    except FileNotFoundError:
        raise unreadable(
            place.name, f"there is no file {place.name!r}.{_like(place)}", "Check the path."
        ) from None
    except IsADirectoryError:
        raise unreadable(place.name, "this is a folder.", "Name one file in it.") from None
    except (OSError, ValueError) as error:
        raise unreadable(
            place.name, f"the file cannot be opened ({type(error).__name__}).", "Check access."
        ) from None


def _like(place: Path) -> str:
    try:
        return did_you_mean(place.name, [other.name for other in place.parent.iterdir()])
    except OSError:
        return ""


def _of_allowed_size(name: str, data: bytes) -> bytes:
    if len(data) > LARGEST_FILE:
        raise unreadable(
            name,
            f"the file is larger than {LARGEST_FILE // 1024**2} MB, far beyond one marker of one "
            "study.",
            "Cut it down to the rows and columns in use.",
        )
    return data
