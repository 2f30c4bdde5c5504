"""Text tables: encoding, separator and rows, by inspection and without guessing twice."""

from __future__ import annotations

import csv
import io
from collections import Counter
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from robustrm.cells import clean
from robustrm.errors import DataError, Problem
from robustrm.records.sheets import Field, Row
from robustrm.results import Note

MOST_COLUMNS = 10_000
_WORDS = {",": "comma", ";": "semicolon", "\t": "tab"}
# A semicolon goes before a comma: who writes decimal commas separates with semicolons.
_DELIMITERS = ("\t", ";", ",")


@dataclass(frozen=True)
class TextTable:
    """Rows of a text file and how they were written."""

    rows: tuple[Row, ...]
    encoding: str
    delimiter: str
    notes: tuple[Note, ...]


def text_of(data: bytes, *, names: Sequence[str], source: str) -> tuple[str, str, int]:
    """Return a text table whole: its text, its separator, and the lines to pass before it."""
    text, _ = _decoded(data, source)
    lines = text.splitlines()
    start, delimiter = _stated(lines)
    return text, delimiter or _delimiter(lines, names), start


def rows_of(data: bytes, *, names: Sequence[str], source: str) -> TextTable:
    """Return the rows of a text table."""
    text, encoding = _decoded(data, source)
    notes = []
    if encoding == "cp1252":
        notes.append(
            Note(
                "encoding",
                "The file is not UTF-8 and was read as Windows-1252.",
                "Letters outside English, and µ, may be wrong if it is another encoding.",
                "Check names and units, or save the file as UTF-8.",
            )
        )
    lines = text.splitlines()
    start, delimiter = _stated(lines)
    delimiter = delimiter or _delimiter(lines, names)
    rows = tuple(row for row in _rows(text, delimiter, source) if row.number > start)
    return TextTable(rows, encoding, _WORDS.get(delimiter, delimiter), tuple(notes))


def _decoded(data: bytes, source: str) -> tuple[str, str]:
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        encodings = ["utf-16"]
    elif b"\x00" in data:
        raise _refused(source, "the file is not text.", "Export the table as .csv or .xlsx.")
    else:
        encodings = ["utf-8-sig", "cp1252"]
    for encoding in encodings:
        try:
            text = data.decode(encoding)
        except UnicodeDecodeError:
            continue
        return text, "utf-8" if encoding == "utf-8-sig" else encoding
    raise _refused(
        source, "the encoding of the file is unknown.", "Save it as UTF-8 (.csv) or as .xlsx."
    )


def _refused(source: str, message: str, action: str, row: int | None = None) -> DataError:
    return DataError([Problem("cannot read", message, action, row)], source)


def _stated(lines: Sequence[str]) -> tuple[int, str]:
    """Return the number of lines to pass and the separator of a first line ``sep=;``."""
    if lines and lines[0].strip().casefold().startswith("sep=") and len(lines[0].strip()) <= 5:
        return 1, lines[0].strip()[4:] or "\t"
    return 0, ""


def _delimiter(lines: Sequence[str], names: Sequence[str]) -> str:
    """Return the separator: the one that sets the declared headings apart, else the steadiest.

    The steadiest is the one that stands equally often, outside quotes, in most lines.
    """
    filled = [line for line in lines if line.strip()]
    wanted = {clean(name) for name in names}
    if wanted:
        for delimiter in _DELIMITERS:
            if any(wanted <= set(_split(line, delimiter)) for line in filled[:50]):
                return delimiter
    counts = {d: [len(_split(line, d)) - 1 for line in filled[:1000]] for d in _DELIMITERS}
    return max(_DELIMITERS, key=lambda delimiter: _steadiness(counts[delimiter]))


def _split(line: str, delimiter: str) -> list[str]:
    try:
        return [clean(field) for field in next(csv.reader([line], delimiter=delimiter), [])]
    except csv.Error:
        return []


def _steadiness(counts: Sequence[int]) -> float:
    common = Counter(count for count in counts if count > 0).most_common(1)
    return common[0][1] / len(counts) if common else 0.0


def _rows(text: str, delimiter: str, source: str) -> Iterator[Row]:
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=delimiter, strict=True)
    start = 1
    while True:
        try:
            fields = next(reader, None)
        except csv.Error as error:
            raise _refused(
                source,
                f"the row cannot be taken apart ({error}).",
                "A quotation mark may be missing or stand inside a field: correct it.",
                start,
            ) from None
        if fields is None:
            return
        if len(fields) > MOST_COLUMNS:
            raise _refused(
                source,
                f"the row has {len(fields)} columns, more than {MOST_COLUMNS}.",
                "Cut the file down to the columns in use.",
                start,
            )
        yield Row(start, tuple(Field(text) for text in fields))
        start = reader.line_num + 1
