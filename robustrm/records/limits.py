"""Which limit applied to which cell: declared, written in the cell, or the only one seen."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from decimal import Decimal
from typing import Literal

import numpy as np

from robustrm._checks import did_you_mean
from robustrm._format import counted, listing
from robustrm.cells import Cell
from robustrm.errors import ArgumentError, Problem
from robustrm.ledger import LedgerLine
from robustrm.records.record import Record
from robustrm.results import Note
from robustrm.ties import Floats

Limit = (
    float
    | list[float | None]
    | list[float]
    | tuple[float | None, ...]
    | Floats
    | Mapping[str, float]
    | None
)
Side = Literal["below", "above"]


@dataclass(frozen=True, slots=True)
class Placed:
    """A settled cell at its place in the table, with the record it came from."""

    i: int
    j: int
    cell: Cell
    record: Record


@dataclass(frozen=True, slots=True)
class Limits:
    """Limits of one side for every cell, (n, k), and what there is to say about them."""

    array: Floats
    lines: tuple[LedgerLine, ...] = ()
    notes: tuple[Note, ...] = ()
    problems: tuple[Problem, ...] = ()


def argument_of(side: Side) -> str:
    """Return the name of the argument that declares the limits of a side."""
    return "lower_limit" if side == "below" else "upper_limit"


def declared_limits(side: Side, limit: Limit, occasions: Sequence[str]) -> Floats | None:
    """Return one limit an occasion (k,), NaN where none is declared, or None."""
    argument = argument_of(side)
    if limit is None:
        return None
    if isinstance(limit, Mapping):
        for name in limit:
            if name not in occasions:
                raise ArgumentError(
                    f"`{argument}` must name occasions, got {name!r}."
                    f"{did_you_mean(name, occasions)}"
                )
        per_occasion = [limit.get(occasion) for occasion in occasions]
    elif isinstance(limit, (list, tuple, np.ndarray)):
        per_occasion = list(limit)
        if len(per_occasion) != len(occasions):
            raise ArgumentError(
                f"`{argument}` must be one number or one an occasion ({len(occasions)}), got "
                f"{len(per_occasion)}: {limit!r}."
            )
    else:
        per_occasion = [limit] * len(occasions)
    return np.array([_checked(argument, number) for number in per_occasion])


def _checked(argument: str, number: object) -> float:
    if number is None:
        return math.nan
    try:
        value = float(number)  # type: ignore[arg-type]  # refused below when not a number
    except (TypeError, ValueError):
        value = math.nan
    if isinstance(number, (bool, str)) or not (math.isfinite(value) and value > 0):
        raise ArgumentError(f"`{argument}` must be a positive number, got {number!r}.")
    return value


def settle(
    side: Side, placed: Sequence[Placed], declared: Floats | None, occasions: Sequence[str], n: int
) -> Limits:
    """Return the limit that applied to every cell on one side.

    A declared limit holds for every cell except one that states its own. Without a declared
    limit the only one written in the file holds for every cell; two are a problem.
    """
    shape = (n, len(occasions))
    beyond = [p for p in placed if p.cell.kind == side]
    own = [p for p in beyond if p.cell.number is not None]
    seen = sorted({_number(p) for p in own})
    lines: list[LedgerLine] = []
    if declared is None and len(seen) > 1:
        return Limits(np.full(shape, np.nan), problems=(_differ(side, own, occasions),))
    if declared is None and seen:
        lines.append(_only_one(side, seen[0], len(own)))
        declared = np.full(len(occasions), float(seen[0]))
    array = np.full(shape, np.nan) if declared is None else np.tile(declared, (n, 1))
    other = [p for p in own if array[p.i, p.j] != float(_number(p))]
    for p in own:
        array[p.i, p.j] = float(_number(p))
    if other:
        lines.append(_kept_own(side, other))
    homeless = [p for p in beyond if np.isnan(array[p.i, p.j])]
    return Limits(
        array,
        tuple(lines),
        tuple(_measured_beyond(side, placed, array)),
        (_undeclared(side, homeless),) if homeless else (),
    )


def _number(p: Placed) -> Decimal:
    return p.cell.number or Decimal(0)


def _word(side: Side) -> str:
    return "lower" if side == "below" else "upper"


def _only_one(side: Side, limit: Decimal, count: int) -> LedgerLine:
    return LedgerLine(
        "limits",
        f"{_word(side)} limit {limit} is the only one written ({counted(count, 'cell')}) and none "
        "was declared: taken to have applied to every cell",
        cells=count,
    )


def _kept_own(side: Side, other: Sequence[Placed]) -> LedgerLine:
    shown = listing([f"{p.record.place} ({p.cell.token})" for p in other])
    return LedgerLine(
        "limits",
        f"{counted(len(other), 'cell')} kept a {_word(side)} limit other than the declared one: "
        f"{shown}",
        cells=len(other),
    )


def _differ(side: Side, own: Sequence[Placed], occasions: Sequence[str]) -> Problem:
    by_occasion = {j: {_number(p) for p in own if p.j == j} for j in range(len(occasions))}
    shown = listing([str(limit) for limit in sorted({_number(p) for p in own})])
    single = all(len(limits) == 1 for limits in by_occasion.values())
    ready = ",".join(str(next(iter(limits))) for limits in by_occasion.values()) if single else ""
    option = f"--{_word(side)}-limit"
    first = own[0].record
    return Problem(
        "limits",
        f"{_word(side)} limits {shown} are written, and none is declared. Which of them applied "
        "to the other cells cannot be seen.",
        f"Declare the limit that applied, one for all or one an occasion: {option} "
        f"{ready or 'A,B,... (in the order of the occasions)'}",
        first.row,
        first.column,
        first.text,
    )


def _undeclared(side: Side, homeless: Sequence[Placed]) -> Problem:
    first = homeless[0].record
    return Problem(
        "limits",
        f"{first.cell.token!r} of {first.place} lies {side} a limit that is written nowhere "
        f"({counted(len(homeless), 'cell')} like it).",
        f"Declare it: --{_word(side)}-limit NUMBER. If it means 'not done', leave the cell empty.",
        first.row,
        first.column,
        first.text,
    )


def _measured_beyond(side: Side, placed: Sequence[Placed], limits: Floats) -> list[Note]:
    # Comparisons with NaN are false: no limit, nothing beyond it.
    found = [
        p
        for p in placed
        if p.cell.kind == "value"
        and (
            float(_number(p)) < limits[p.i, p.j]
            if side == "below"
            else float(_number(p)) > limits[p.i, p.j]
        )
    ]
    if not found:
        return []
    shown = listing([f"{p.record.place} ({p.cell.number})" for p in found])
    return [
        Note(
            "beyond limit",
            f"{counted(len(found), 'measured value')} {side} the {_word(side)} limit: {shown}.",
            "Kept as measured; tests that compare at the common limit count them as beyond it.",
            "Check that the limit is the one of this assay and batch.",
        )
    ]
