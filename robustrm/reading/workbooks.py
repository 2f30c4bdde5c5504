"""Workbooks (.xlsx): one sheet, stored results, numbers by their shortest text."""

from __future__ import annotations

import datetime as dt
import io
import re
import zipfile
from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from robustrm._checks import did_you_mean
from robustrm._format import listing
from robustrm.errors import DataError, Problem
from robustrm.reading.text_files import MOST_COLUMNS
from robustrm.records.sheets import Field, Row, number_text

if TYPE_CHECKING:
    from openpyxl.workbook import Workbook

_MOST_UNPACKED = 500 * 1024**2
_MOST_ROWS = 200_000


@dataclass(frozen=True)
class SheetRows:
    """Rows of one sheet."""

    rows: tuple[Row, ...]
    sheet: str


def rows_of(data: bytes, *, sheet: str | None, source: str) -> SheetRows:
    """Return the rows of one sheet of a workbook."""
    import warnings

    _check_unpacked_size(data, source)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # about styles and odd dates, nothing that is read
        results = _opened(data, source, results=True)
        formulas = _opened(data, source, results=False)
        try:
            name = _sheet_name(results, sheet, source)
            rows = _trimmed(list(_rows(results[name], formulas[name], source)))
        except DataError:
            raise
        except Exception:  # a damaged sheet fails in as many ways as there are parsers below
            raise _damaged(source) from None
        finally:
            results.close()
            formulas.close()
    return SheetRows(rows, name)


def _check_unpacked_size(data: bytes, source: str) -> None:
    try:
        with zipfile.ZipFile(io.BytesIO(data)) as archive:
            size = sum(item.file_size for item in archive.infolist())
    except (zipfile.BadZipFile, ValueError, OSError):
        raise _damaged(source) from None
    if size > _MOST_UNPACKED:
        raise _refused(
            source,
            f"the workbook unpacks to {size // 1024**2} MB, more than "
            f"{_MOST_UNPACKED // 1024**2} MB.",
            "Copy the rows and columns in use into a new workbook.",
        )


def _opened(data: bytes, source: str, *, results: bool) -> Workbook:
    import openpyxl

    try:
        return openpyxl.load_workbook(io.BytesIO(data), read_only=True, data_only=results)
    except Exception:  # a damaged file fails in as many ways as there are parsers below
        raise _damaged(source) from None


def _damaged(source: str) -> DataError:
    return _refused(
        source,
        "the file is packed like a workbook and cannot be opened as one.",
        "Save it again as .xlsx, or as .csv.",
    )


def _refused(source: str, message: str, action: str, row: int | None = None) -> DataError:
    return DataError([Problem("cannot read", message, action, row)], source)


def _sheet_name(book: Workbook, sheet: str | None, source: str) -> str:
    names = [worksheet.title for worksheet in book.worksheets]
    listed = listing([repr(name) for name in names], 20)
    if sheet is not None:
        if sheet in names:
            return sheet
        raise DataError(
            [
                Problem(
                    "sheet",
                    f"there is no sheet {sheet!r}.{did_you_mean(sheet, names)}",
                    f"The sheets are {listed}; choose with --sheet.",
                )
            ],
            source,
        )
    filled = [worksheet.title for worksheet in book.worksheets if _holds_something(worksheet)]
    if len(filled) > 1:
        shown = listing([repr(name) for name in filled], 20)
        raise DataError(
            [
                Problem(
                    "sheet",
                    f"the workbook has {len(filled)} sheets with content: {shown}.",
                    "Choose one with --sheet.",
                )
            ],
            source,
        )
    if not filled:
        raise _refused(source, "no sheet of the workbook holds anything.", "Choose another file.")
    return filled[0]


def _holds_something(worksheet: Any) -> bool:
    return any(value is not None for row in worksheet.iter_rows(values_only=True) for value in row)


def _rows(results: Any, formulas: Any, source: str) -> Iterator[Row]:
    pairs = zip(results.iter_rows(), formulas.iter_rows(), strict=False)
    for number, (stored, written) in enumerate(pairs, start=1):
        if number > _MOST_ROWS or len(stored) > MOST_COLUMNS:
            raise _refused(
                source,
                f"the sheet has more than {_MOST_ROWS} rows or {MOST_COLUMNS} columns.",
                "Copy the rows and columns in use into a new workbook.",
                number,
            )
        yield Row(number, tuple(map(_field, stored, written)))


def _field(stored: Any, written: Any) -> Field:
    value = stored.value
    if value is None:
        # A formula whose result was never stored keeps its text, and is refused where it is used.
        formula = written.value
        return Field() if formula is None else Field(str(getattr(formula, "text", formula)))
    if isinstance(value, bool):
        return Field(str(value).upper())
    if isinstance(value, (int, float)):
        return Field(_padded(number_text(value), str(stored.number_format or "")), number=True)
    if isinstance(value, dt.datetime):
        midnight = value.time() == dt.time()
        return Field(value.date().isoformat() if midnight else value.isoformat(" "))
    return Field(str(value))


def _padded(text: str, number_format: str) -> str:
    # A column formatted as 000 shows 007 for 7, and what is shown is the identifier.
    return text.zfill(len(number_format)) if re.fullmatch("0{2,}", number_format) else text


def _trimmed(rows: list[Row]) -> tuple[Row, ...]:
    while rows and all(field.blank for field in rows[-1].fields):
        rows.pop()
    return tuple(rows)
