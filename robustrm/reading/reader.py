"""Read one marker of one study from a file, or say everything that must be settled first."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, BinaryIO

from robustrm._checks import check_names, did_you_mean
from robustrm._format import counted, listing
from robustrm.cells import Mark, clean
from robustrm.errors import ArgumentError, DataError, Problem
from robustrm.ledger import LedgerLine
from robustrm.reading import audit
from robustrm.reading.files import load
from robustrm.reading.layout import Framed, framed
from robustrm.reading.plates import plates_of, tell
from robustrm.reading.proposals import propose
from robustrm.records import Declared, Findings, Written, arrange_written, sheets
from robustrm.records.limits import Limit
from robustrm.records.replicates import How
from robustrm.records.sheets import Sheet, check_columns
from robustrm.table import OccasionTable, long_in_order

Where = Mapping[str, str] | str | Sequence[str] | None


def read_table(
    path: str | Path | BinaryIO,
    *,
    subject: str | None = None,
    occasions: Sequence[str] | None = None,
    occasion: str | None = None,
    value: str | None = None,
    order: Sequence[str] | None = None,
    marker: str | None = None,
    unit: str | None = None,
    lower_limit: Limit = None,
    upper_limit: Limit = None,
    resolution: float | None = None,
    where: Where = None,
    replicates: How | None = None,
    decimal: Mark | None = None,
    sheet: str | None = None,
    plate: str | None = None,
) -> OccasionTable:
    r"""Read one marker of one study from a text table or a workbook.

    Parameters
    ----------
    path : str, Path or binary file object
        A text table (.csv, .tsv, separated by comma, semicolon or tab) or a workbook (.xlsx).
        The kind is judged by the content.
    subject : str
        Column of identifiers. They are text: ``"007"`` and ``"7"`` differ.
    occasions : sequence of str
        Wide layout, one row a subject: the columns of the occasions, in time order.
    occasion, value : str
        Long layout, one row a cell: the columns of occasion labels and of values.
    order : sequence of str
        Long layout: the labels of the occasions in time order.
    marker : str, optional
        What was measured. Default: ``"value"`` (wide), the heading of the values (long).
    unit : str, optional
        Its unit. Default: the only unit that the file states.
    lower_limit, upper_limit : float, sequence or mapping, optional
        Detection limits: one number, one an occasion, or by name of the occasion. A cell that
        states its own (``"<0.5"``) keeps it. Undeclared, the only limit written applies to
        every cell; two different ones are refused.
    resolution : float, optional
        Reporting step. Default: the finest decimal place written (``0.10`` has step 0.01).
    where : mapping, str or sequence of str, optional
        Rows to use, by equality of text: ``{"arm": "diet"}``, ``"arm=diet"``, or several.
    replicates : {"mean", "geometric"}, optional
        How several measurements of one subject and occasion become one. Without it they are
        refused: nothing is averaged unasked.
    decimal : {".", ","}, optional
        Decimal mark of numbers written as text. Only ``1,234`` and the like need it.
    sheet : str, optional
        Sheet of a workbook that has several.
    plate : str, optional
        Long layout: the column that says in which run or plate each value was assayed. Where
        occasions share no plate a note says that plates and change cannot be told apart; it
        does not stop the run.

    Returns
    -------
    OccasionTable
        The table on the raw scale. Its ledger says where every row and cell went, its notes
        what was noticed and left as it is, its source the file's digest and layout.

    Raises
    ------
    DataError
        With everything that must be settled first: code, row, column, text, what to do. Where
        no layout is declared, the message proposes options to be checked.
    ArgumentError
        When an option breaks its rule.

    Notes
    -----
    Nothing is sorted, merged, averaged, converted or left out silently. Columns other than
    those named are looked at for arms, units and personal details, and never copied. Cells
    merged in a workbook hold their content in the first cell only; the others read as empty.

    Examples
    --------
    >>> import io
    >>> file = io.BytesIO(b"id;before;after\nP1;0,45;<0,3\nP2;2,1;haemolysed\n")
    >>> table = read_table(file, subject="id", occasions=["before", "after"], unit="mg/L")
    >>> table.values.tolist(), table.below.tolist()
    ([[0.45, 0.3], [2.1, nan]], [[False, True], [False, False]])
    >>> str(table.tokens[1, 1])
    'haemolysed'
    """
    roles = _Roles.declared(subject, occasions, occasion, value, order, plate)
    conditions = _conditions(where)
    declared = Declared(replicates, lower_limit, upper_limit, resolution, decimal)
    names = [*roles.columns, *conditions]
    grid = load(path, sheet=sheet, names=names)
    frame = framed(grid, subject=subject, names=names)
    if roles.subject is None or not roles.complete:
        raise propose(frame.sheet)
    found = frame.found
    check_columns(frame.sheet, roles.options)
    used = {clean(name) for name in roles.columns}
    found.problems += audit.in_two_arms(frame.sheet, roles.subject, used)
    frame = replace(frame, sheet=_chosen(frame.sheet, conditions, found))
    found.problems += audit.pooled(frame.sheet, used)
    found.notes += audit.private_notes(frame.sheet, roles.subject)
    unit = audit.settle_unit(frame, roles.value_columns, unit, found)
    written, labels = _written(frame, roles, found)
    assayed = {} if plate is None else _plates(frame.sheet, plate, written, labels, found)
    arranged, mark = arrange_written(
        written, found, occasions=labels, declared=declared, source=grid.name
    )
    table = OccasionTable(
        **arranged.fields(),
        marker=marker or roles.marker(conditions),
        unit=unit,
        source={
            **grid.source,
            "layout": roles.layout,
            "decimal": mark,
            "n_rows": len(frame.sheet.rows),
            **assayed,
        },
    )
    return replace(table, notes=(*table.notes, *audit.jumps(table)))


@dataclass(frozen=True)
class _Roles:
    """Which columns play which part, as declared."""

    subject: str | None
    occasions: tuple[str, ...] | None
    occasion: str | None
    value: str | None
    order: tuple[str, ...] | None
    plate: str | None

    @classmethod
    def declared(
        cls,
        subject: str | None,
        occasions: Sequence[str] | None,
        occasion: str | None,
        value: str | None,
        order: Sequence[str] | None,
        plate: str | None,
    ) -> _Roles:
        long = {"occasion": occasion, "value": value, "order": order, "plate": plate}
        given = [f"`{name}`" for name, option in long.items() if option is not None]
        if occasions is not None and given == ["`plate`"]:
            raise ArgumentError(
                f"`plate` is for one row a cell, got {plate!r} with `occasions`: in a wide file "
                "one column cannot say where the values of several occasions were assayed. Write "
                "the file long, or leave the option out."
            )
        if occasions is not None and given:
            raise ArgumentError(
                f"`occasions` is for one row a subject and {listing(given)} for one row a cell, "
                "got both. Keep those of the layout of the file."
            )
        return cls(
            subject,
            None if occasions is None else check_names("occasions", occasions, least=2),
            occasion,
            value,
            None if order is None else check_names("order", order, least=2),
            plate,
        )

    @property
    def layout(self) -> str:
        return "long" if self.occasions is None else "wide"

    @property
    def complete(self) -> bool:
        return self.occasions is not None or None not in (self.occasion, self.value)

    @property
    def options(self) -> list[tuple[str, str]]:
        """Every declared column with the option that names it."""
        named = [
            ("--subject", self.subject),
            *(("--occasions", name) for name in self.occasions or ()),
            ("--occasion", self.occasion),
            ("--value", self.value),
            ("--plate", self.plate),
        ]
        return [(option, name) for option, name in named if name is not None]

    @property
    def columns(self) -> list[str]:
        return [name for _, name in self.options]

    @property
    def value_columns(self) -> list[str]:
        named = self.occasions if self.occasions is not None else (self.value or "",)
        return [clean(name) for name in named]

    def marker(self, conditions: Mapping[str, str]) -> str:
        """Return the name of the marker: the condition that chose it, or the heading."""
        chosen = [text for column, text in conditions.items() if audit.is_marker(column)]
        if chosen:
            return chosen[0]
        return "value" if self.value is None else audit.without_unit(self.value)


def _conditions(where: Where) -> dict[str, str]:
    """Return column and text of every condition."""
    if where is None:
        return {}
    if isinstance(where, Mapping):
        return {clean(str(column)): clean(str(text)) for column, text in where.items()}
    conditions: dict[str, str] = {}
    for item in [where] if isinstance(where, str) else where:
        column, sign, text = item.partition("=")
        if not sign or not column.strip():
            raise ArgumentError(f"`where` must be written as COLUMN=VALUE, got {item!r}.")
        if conditions.setdefault(clean(column), clean(text)) != clean(text):
            raise ArgumentError(
                f"`where` must name one value a column, got two for {column.strip()!r}."
            )
    return conditions


def _chosen(sheet: Sheet, conditions: Mapping[str, str], found: Findings) -> Sheet:
    """Return the rows that meet every condition."""
    check_columns(sheet, [("--where", column) for column in conditions])
    for column, wanted in conditions.items():
        texts = sheet.texts(column)
        rows = tuple(row for row, text in zip(sheet.rows, texts, strict=True) if text == wanted)
        if not rows:
            seen = list(dict.fromkeys(texts))
            raise DataError(
                [
                    Problem(
                        "where",
                        f"no row has {wanted!r}.{did_you_mean(wanted, seen)}",
                        f"The column holds {listing([repr(text) for text in seen])}.",
                        column=column,
                        text=wanted,
                    )
                ],
                sheet.source,
            )
        what = f"{len(rows)} of {len(texts)} rows kept, where {column!r} is {wanted!r}"
        found.lines.append(LedgerLine("where", what))
        sheet = replace(sheet, rows=rows)
    return sheet


def _plates(
    sheet: Sheet,
    column: str,
    written: Sequence[Written],
    labels: Sequence[str],
    found: Findings,
) -> dict[str, Any]:
    """Say where the values were assayed, and return what the source keeps of it."""
    plates = plates_of(sheet, column, written, labels)
    tell(plates, found)
    return {"plate": plates.to_dict()}


def _written(
    frame: Framed, roles: _Roles, found: Findings
) -> tuple[list[Written], tuple[str, ...]]:
    subject = roles.subject or ""
    if roles.occasions is not None:
        labels = tuple(clean(name) for name in roles.occasions)
        written, more = sheets.wide(frame.sheet, subject=subject, occasions=labels)
    else:
        written, more, labels = long_in_order(
            frame.sheet, subject, roles.occasion or "", roles.value or "", roles.order
        )
    found.add(more)
    rows = counted(len(frame.sheet.rows), "row")
    what = f"{counted(len(written), 'cell')} in {rows} of {frame.sheet.source!r} ({roles.layout})"
    found.lines.append(LedgerLine("read", what, cells=len(written)))
    return written, labels
