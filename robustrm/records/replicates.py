"""Several measurements of one sample become one value; their spread is kept beside it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from decimal import Decimal
from typing import Literal

import numpy as np

from robustrm._format import counted, listing, percent
from robustrm.cells import Cell
from robustrm.errors import Problem
from robustrm.records.record import Record
from robustrm.results import Note

How = Literal["mean", "geometric"]

_WIDE_SPREAD = 0.20  # common practice in immunoassays, no source


@dataclass(frozen=True, slots=True)
class Replicate:
    """The measurements of one subject on one occasion.

    Parameters
    ----------
    subject, occasion : str
        Whom and which occasion it concerns.
    values : tuple of float
        The measured values, as read.
    mean : float
        What enters the table: the arithmetic or the geometric mean.
    cv : float
        Coefficient of variation as a fraction: SD over mean, or √(exp(s²) − 1) with s the SD
        of the logarithms for the geometric mean. NaN where it is not defined.
    """

    subject: str
    occasion: str
    values: tuple[float, ...]
    mean: float
    cv: float


@dataclass(frozen=True, slots=True)
class Collapsed:
    """One cell made of several records, or the problem that stands in the way."""

    cell: Cell | None = None
    replicate: Replicate | None = None
    problem: Problem | None = None


def collapse(records: Sequence[Record], how: How | None) -> Collapsed:
    """Return one cell for all `records` of one subject and occasion.

    Measured replicates are averaged. Missing ones are left out of the average. Replicates
    that all lie below a limit lie, on average, below the largest of their limits. A mixture
    of measured values and values beyond a limit has no average and is a problem.
    """
    if len(records) == 1:
        return Collapsed(records[0].cell)
    if how is None:
        return Collapsed(problem=_undeclared(records))
    present = [r for r in records if r.cell.kind != "missing"]
    kinds = {r.cell.kind for r in present}
    if not present:
        tokens = dict.fromkeys(r.cell.token for r in records if r.cell.token)
        return Collapsed(Cell("missing", token="; ".join(tokens)))
    if len(kinds) > 1:
        return Collapsed(problem=_mixed(records))
    if kinds == {"value"}:
        return _averaged(present, how)
    return Collapsed(_beyond(present))


def _averaged(records: Sequence[Record], how: How) -> Collapsed:
    first = records[0]
    values = tuple(float(r.cell.number) for r in records if r.cell.number is not None)
    if len(values) == 1:
        return Collapsed(first.cell)
    if how == "geometric" and min(values) <= 0:
        return Collapsed(problem=_no_logarithm(records))
    mean, cv = _geometric(values) if how == "geometric" else _arithmetic(values)
    replicate = Replicate(first.subject, first.occasion, values, mean, cv)
    return Collapsed(Cell("value", Decimal(repr(mean)), token=first.cell.token), replicate)


def _arithmetic(values: tuple[float, ...]) -> tuple[float, float]:
    mean = math.fsum(values) / len(values)
    return mean, float(np.std(values, ddof=1)) / mean if mean > 0 else math.nan


def _geometric(values: tuple[float, ...]) -> tuple[float, float]:
    logs = np.log(values)
    spread = float(np.var(logs, ddof=1))
    return math.exp(math.fsum(logs.tolist()) / len(values)), math.sqrt(math.expm1(spread))


def _beyond(records: Sequence[Record]) -> Cell:
    # The mean of values below a and below b lies below the larger one; above, the smaller.
    written = [r.cell for r in records if r.cell.number is not None]
    if len(written) < len(records):
        return next(r.cell for r in records if r.cell.number is None)
    outermost = max if records[0].cell.kind == "below" else min
    return outermost(written, key=lambda cell: cell.number or Decimal(0))


def spread_notes(replicates: Sequence[Replicate]) -> list[Note]:
    """Return a note about replicates that differ by more than a CV of 20%."""
    wide = [r for r in replicates if r.cv > _WIDE_SPREAD]
    if not wide:
        return []
    shown = listing([f"{r.subject} {r.occasion} {percent(r.cv)}" for r in wide])
    return [
        Note(
            "replicates",
            f"{len(wide)} of {counted(len(replicates), 'set')} of replicates exceed a CV of "
            f"{percent(_WIDE_SPREAD)} ({shown}).",
            "The mean was used.",
            "Check these measurements.",
        )
    ]


def _undeclared(records: Sequence[Record]) -> Problem:
    return _of_group(
        "duplicate",
        records,
        f"{records[0].subject!r} has {len(records)} values at {records[0].occasion!r} "
        f"({_shown(records)}). Not averaged.",
        "Declare them as replicates (--replicates mean or --replicates geometric), or delete "
        "the wrong row.",
    )


def _mixed(records: Sequence[Record]) -> Problem:
    return _of_group(
        "replicates",
        records,
        f"the replicates of {records[0].subject!r} at {records[0].occasion!r} are partly "
        f"measured and partly beyond a limit ({_shown(records)}), which has no mean.",
        "Decide by the laboratory's rule which of them counts and keep that one.",
    )


def _no_logarithm(records: Sequence[Record]) -> Problem:
    return _of_group(
        "replicates",
        records,
        f"the replicates of {records[0].subject!r} at {records[0].occasion!r} have no geometric "
        f"mean ({_shown(records)}): every value must be positive.",
        "Use --replicates mean, or write a value below a limit as '<limit'.",
    )


def _shown(records: Sequence[Record]) -> str:
    texts = "; ".join(r.cell.token or "empty" for r in records)
    rows = ", ".join(str(r.row) for r in records if r.row is not None)
    return f"{texts}; rows {rows}" if rows else texts


def _of_group(code: str, records: Sequence[Record], message: str, action: str) -> Problem:
    last = records[-1]
    return Problem(code, message, action, last.row, last.column, last.text)
