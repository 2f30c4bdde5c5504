"""Records become the arrays of an occasion table, or a list of everything in the way."""

from __future__ import annotations

import math
from collections import Counter, defaultdict
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields
from decimal import Decimal
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

from robustrm import ties
from robustrm._checks import check_choice, check_names
from robustrm._format import counted, listing
from robustrm.cells import Mark
from robustrm.errors import ArgumentError, DataError, Problem
from robustrm.ledger import CellCounts, Ledger, LedgerLine
from robustrm.records import limits
from robustrm.records.findings import Findings
from robustrm.records.limits import Limit, Placed
from robustrm.records.natural import natural_key
from robustrm.records.record import Record, Written, missing_codes, read_cells, refusals
from robustrm.records.replicates import How, Replicate, collapse, spread_notes
from robustrm.results import Note
from robustrm.ties import Bools, Floats


@dataclass(frozen=True)
class Arranged:
    """What :class:`robustrm.OccasionTable` holds of the cells, under the same names."""

    values: Floats
    below: Bools
    above: Bools
    lower_limit: Floats
    upper_limit: Floats
    tokens: NDArray[np.str_]
    subjects: tuple[str, ...]
    occasions: tuple[str, ...]
    step: Fraction | None
    units: NDArray[np.int64] | None
    replicates: tuple[Replicate, ...]
    notes: tuple[Note, ...]
    ledger: Ledger

    def fields(self) -> dict[str, Any]:
        """Return the fields by name."""
        return {f.name: getattr(self, f.name) for f in fields(self)}


@dataclass(frozen=True, slots=True)
class Declared:
    """What the user declared of the cells, whatever they come from.

    Parameters
    ----------
    replicates : {"mean", "geometric"}, optional
        How several records of one subject and occasion become one value. Without it they are
        a problem: nothing is averaged unasked.
    lower_limit, upper_limit : float, sequence or mapping, optional
        Limits: one number, one an occasion, or by name of the occasion.
    resolution : float, optional
        Reporting step. Default: the finest decimal place written (``0.10`` has step 0.01).
    decimal : {".", ","}, optional
        Decimal mark of the numbers that are written as text.
    """

    replicates: How | None = None
    lower_limit: Limit = None
    upper_limit: Limit = None
    resolution: float | None = None
    decimal: Mark | None = None

    def __post_init__(self) -> None:
        if self.replicates is not None:
            check_choice("replicates", self.replicates, ("mean", "geometric"))
        if self.decimal is not None:
            check_choice("decimal", self.decimal, (".", ","))
        step = self.resolution
        if step is not None and (isinstance(step, bool) or not 0 < step < math.inf):
            raise ArgumentError(f"`resolution` must be a positive number, got {step!r}.")


def arrange_written(
    written: Sequence[Written],
    found: Findings,
    *,
    occasions: Sequence[str],
    declared: Declared,
    source: str = "",
) -> tuple[Arranged, str]:
    """Return the arrays for `written` cells, and the decimal mark by which they were read."""
    records, notes, used = read_cells(_in_order(written, occasions), decimal=declared.decimal)
    found.notes += notes
    arranged = arrange(
        records,
        occasions=occasions,
        subjects=tuple(dict.fromkeys(cell.subject for cell in written)),
        declared=declared,
        found=found,
        source=source,
    )
    return arranged, used


def _in_order(written: Sequence[Written], occasions: Sequence[str]) -> list[Written]:
    """Return the cells by subject, occasion and text: what is said of them follows this order.

    Notes and ledger then do not depend on how the rows or columns of the file were sorted.
    """
    place = {label: j for j, label in enumerate(occasions)}
    return sorted(
        written,
        key=lambda w: (natural_key(w.subject), place.get(w.occasion, 0), str(w.text)),
    )


def arrange(
    records: Sequence[Record],
    *,
    occasions: Sequence[str],
    subjects: Sequence[str] | None = None,
    declared: Declared | None = None,
    found: Findings | None = None,
    source: str = "",
) -> Arranged:
    """Return the arrays of an occasion table.

    Parameters
    ----------
    records : sequence of Record
        One a written cell.
    occasions : sequence of str
        Labels in time order. A subject without a record on an occasion is missing there.
    subjects : sequence of str, optional
        Order of the subjects; that in which they first appear if not given.
    declared : Declared, optional
        What the user declared of the cells.
    found : Findings, optional
        What was found while the records were made; its problems are raised with the others.
    source : str, optional
        Name of the file, for the message.

    Returns
    -------
    Arranged
        Arrays, ledger and notes.

    Raises
    ------
    DataError
        With every problem of the records at once.
    ArgumentError
        When an option breaks its rule.
    """
    labels = check_names("occasions", occasions, least=2)
    declared, found = declared or Declared(), found or Findings()
    lower = limits.declared_limits("below", declared.lower_limit, labels)
    upper = limits.declared_limits("above", declared.upper_limit, labels)
    _check_sides(lower, upper)
    ids = tuple(dict.fromkeys(subjects or (record.subject for record in records)))
    placed, kept, stopped = _settled(records, ids, labels, declared.replicates)
    below = limits.settle("below", placed, lower, labels, len(ids))
    above = limits.settle("above", placed, upper, labels, len(ids))
    in_file_order = sorted(records, key=lambda record: record.row or 0)
    problems = [
        *found.problems, *refusals(in_file_order), *missing_codes(in_file_order), *stopped,
        *below.problems, *above.problems,
    ]  # fmt: skip
    if not ids and not problems:
        problems.append(Problem("no rows", "there is no row with data.", "Check the file."))
    if problems:
        raise DataError(problems, source)
    grid = _Grid.of(placed, below.array, above.array)
    step = _step(placed, [lower, upper], declared.resolution, averaged=bool(kept))
    values, step, units, step_lines = _on_steps(
        grid, step, np.stack([below.array, above.array]), declared.resolution
    )
    lines = (
        *found.lines,
        *_missing_lines(placed),
        *_absent_lines(placed, ids, labels),
        *_replicate_lines(records, placed, declared.replicates),
        *below.lines,
        *above.lines,
        *step_lines,
    )
    return Arranged(
        **{**grid.fields(), "values": values},
        lower_limit=below.array,
        upper_limit=above.array,
        subjects=ids,
        occasions=labels,
        step=step,
        units=units,
        replicates=kept,
        notes=(*found.notes, *below.notes, *above.notes, *spread_notes(kept)),
        ledger=Ledger(lines, _counts(records)),
    )


def _check_sides(lower: Floats | None, upper: Floats | None) -> None:
    if lower is None or upper is None:
        return
    crossed = np.flatnonzero(lower >= upper)
    if crossed.size:
        j = int(crossed[0])
        raise ArgumentError(
            f"`lower_limit` must be below `upper_limit`, got {lower[j]:g} and {upper[j]:g}."
        )


def _settled(
    records: Sequence[Record], subjects: tuple[str, ...], labels: tuple[str, ...], how: How | None
) -> tuple[list[Placed], tuple[Replicate, ...], list[Problem]]:
    row = {subject: i for i, subject in enumerate(subjects)}
    column = {label: j for j, label in enumerate(labels)}
    groups: dict[tuple[str, str], list[Record]] = defaultdict(list)
    for record in records:
        groups[record.subject, record.occasion].append(record)
    placed, kept, problems = [], [], []
    for (subject, occasion), group in groups.items():
        undeclared = how is None and len(group) > 1
        if any(r.cell.kind == "refused" for r in group) and not undeclared:
            continue  # a problem of its own already
        # a duplicate is told in the order of the file, replicates in that of their content
        told = sorted(group, key=lambda record: record.row or 0) if undeclared else group
        result = collapse(told, how)
        if result.problem is not None:
            problems.append(result.problem)
        if result.cell is not None:
            placed.append(Placed(row[subject], column[occasion], result.cell, group[0]))
        if result.replicate is not None:
            kept.append(result.replicate)
    return placed, tuple(kept), problems


@dataclass(frozen=True)
class _Grid:
    values: Floats
    below: Bools
    above: Bools
    tokens: NDArray[np.str_]

    @classmethod
    def of(cls, placed: Sequence[Placed], lower: Floats, upper: Floats) -> _Grid:
        values = np.full(lower.shape, np.nan)
        below, above = np.zeros(lower.shape, np.bool_), np.zeros(lower.shape, np.bool_)
        tokens = np.full(lower.shape, "", dtype=object)
        for p in placed:
            if p.cell.kind == "missing":
                tokens[p.i, p.j] = p.cell.token
            elif p.cell.kind == "value":
                values[p.i, p.j] = float(p.cell.number or 0)
            else:
                flags, limit = (below, lower) if p.cell.kind == "below" else (above, upper)
                flags[p.i, p.j], values[p.i, p.j] = True, limit[p.i, p.j]
        return cls(values, below, above, tokens.astype(np.str_))

    def fields(self) -> dict[str, Any]:
        return {f.name: getattr(self, f.name) for f in fields(self)}


# ── the reporting step ────────────────────────────────────────────────────────────────


def _step(
    placed: Sequence[Placed],
    declared: Sequence[Floats | None],
    resolution: float | None,
    *,
    averaged: bool,
) -> Fraction | None:
    """Return the reporting step: declared, or the finest decimal place written."""
    if resolution is not None:
        return Fraction(repr(float(resolution)))
    if averaged:
        return None
    places = [p.cell.places for p in placed if p.cell.number is not None]
    for limit in declared:
        if limit is not None:
            places += [_written_places(x) for x in limit[np.isfinite(limit)].tolist()]
    if not places:
        return None
    return Fraction(1, 10 ** max(places))


def _written_places(number: float) -> int:
    exponent = Decimal(repr(number)).normalize().as_tuple().exponent
    return max(0, -exponent) if isinstance(exponent, int) else 0


def _on_steps(
    grid: _Grid, step: Fraction | None, bounds: Floats, resolution: float | None
) -> tuple[Floats, Fraction | None, NDArray[np.int64] | None, list[LedgerLine]]:
    """Return values, step and whole multiples of it, and a line where that rounded values.

    The step is made fine enough for every limit, so that a limit is never rounded.
    """
    if step is None:
        return grid.values, None, None, []
    values, lines = grid.values, []
    if resolution is not None:
        measured = ~np.isnan(values) & ~grid.below & ~grid.above
        values = ties.rounded_to(values, measured, step)
        lines = _rounding_lines(grid.values, values, resolution)
    fine = ties.finer_step(step, bounds)
    units = ties.step_units(values, fine)
    return values, None if units is None else fine, units, lines


def _rounding_lines(read: Floats, values: Floats, resolution: float) -> list[LedgerLine]:
    lost = read[(read > 0) & (values == 0)]
    if lost.size:
        raise ArgumentError(
            f"`resolution` must not round a positive value to zero, got {resolution:g} for the "
            f"value {float(lost[0]):g}."
        )
    off = int((read != values)[~np.isnan(read)].sum())
    if not off:
        return []
    what = f"{counted(off, 'value')} rounded to the declared reporting step {resolution:g}"
    return [LedgerLine("resolution", what, cells=off)]


# ── lines of the ledger ───────────────────────────────────────────────────────────────


def _counts(records: Sequence[Record]) -> CellCounts:
    kinds = Counter(record.cell.kind for record in records)
    return CellCounts(kinds["value"], kinds["below"], kinds["above"], kinds["missing"])


def _missing_lines(placed: Sequence[Placed]) -> list[LedgerLine]:
    by_token: Mapping[str, list[Placed]] = defaultdict(list)
    for p in placed:
        if p.cell.kind == "missing":
            by_token[p.cell.token].append(p)
    return [
        LedgerLine(
            "missing",
            f"{counted(len(group), 'cell')} {f'written {token!r}' if token else 'left empty'}: "
            f"{listing([p.record.place for p in group])}",
            cells=len(group),
        )
        for token, group in by_token.items()
    ]


def _absent_lines(
    placed: Sequence[Placed], subjects: tuple[str, ...], labels: tuple[str, ...]
) -> list[LedgerLine]:
    here = {(p.i, p.j) for p in placed}
    absent = [
        f"{subject} at {label}"
        for i, subject in sorted(enumerate(subjects), key=lambda item: natural_key(item[1]))
        for j, label in enumerate(labels)
        if (i, j) not in here
    ]
    if not absent:
        return []
    what = f"{counted(len(absent), 'cell')} without a row, missing: {listing(absent)}"
    return [LedgerLine("absent", what, cells=len(absent))]


def _replicate_lines(
    records: Sequence[Record], placed: Sequence[Placed], how: How | None
) -> list[LedgerLine]:
    if how is None:
        return []
    mean = "arithmetic" if how == "mean" else "geometric"
    what = f"{len(records)} cells became {len(placed)} by the {mean} mean of replicates"
    return [LedgerLine("replicates", what, cells=len(records) - len(placed))]
