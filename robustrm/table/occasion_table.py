"""The occasion table: the same subjects measured on several occasions, and nothing else.

A value, a value beyond a detection limit and a missing value are three different things
and stay so. Arrays are read-only; every method returns a new table and writes to the ledger.
"""

from __future__ import annotations

import html
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, fields, replace
from fractions import Fraction
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from robustrm import ties
from robustrm._checks import check_member, check_names
from robustrm._format import counted, listing, number
from robustrm.cells import clean
from robustrm.errors import ArgumentError, DataError
from robustrm.ledger import CellCounts, Ledger, LedgerLine
from robustrm.records import Declared, Findings, Written, arrange_written, sheets
from robustrm.records.natural import natural_key
from robustrm.results import Note, Scale
from robustrm.table.arrays import (
    ARRAYS,
    cell_flags,
    cell_limits,
    check_consistent,
    default_ids,
    on_steps,
    same,
)
from robustrm.table.limits import (
    at_common_limit,
    log_limits,
    not_positive,
    substitute_factor,
    substituted_units,
)
from robustrm.ties import Bools, Differences, Floats

if TYPE_CHECKING:
    import pandas as pd

    from robustrm.cells import Mark
    from robustrm.records import Replicate
    from robustrm.records.limits import Limit
    from robustrm.records.replicates import How
    from robustrm.records.sheets import Sheet

Cells = NDArray[np.str_]
_Places = tuple[NDArray[np.int64], NDArray[np.int64]]


def _frozen(array: ArrayLike, dtype: Any) -> NDArray[Any]:
    result = np.array(array, dtype=dtype)
    result.flags.writeable = False
    return result


def long_in_order(
    sheet: Sheet, subject: str, occasion: str, value: str, order: Sequence[str] | None
) -> tuple[list[Written], Findings, tuple[str, ...]]:
    """Return the cells of a long sheet, what was found, and the occasions in time order.

    An undeclared order is a problem with a proposal; it stands in while the rest is checked.
    """
    if order is not None:
        labels = tuple(clean(name) for name in check_names("order", order, least=2))
    else:
        labels = tuple(sorted(sheets.labels(sheet, occasion), key=natural_key))
    if len(labels) < 2:
        raise DataError([sheets.one_occasion(labels, occasion)], sheet.source)
    written, found = sheets.long(
        sheet, subject=subject, occasion=occasion, value=value, order=labels
    )
    if order is None:
        found.problems.append(sheets.order_undeclared(labels, occasion))
    return written, found, labels


@dataclass(frozen=True, eq=False, repr=False)
class OccasionTable:
    """Values of one marker for n subjects on k occasions.

    Make one with :func:`robustrm.read_table`, :meth:`from_wide`, :meth:`from_long` or
    :meth:`from_array`; the constructor takes arrays that are already consistent.

    Parameters
    ----------
    values : array (n, k) of float
        Measured values on `scale`; NaN where missing; the limit where beyond a limit (or
        the substitute after :meth:`substitute`).
    below, above : array (n, k) of bool
        True where a value lies below the lower or above the upper limit.
    lower_limit, upper_limit : array (n, k) of float
        Limits that applied to each cell, also to detected ones; NaN where none did.
    tokens : array (n, k) of str
        Why a cell is missing, as written (``"missed"``, ``"haemolysed"``); empty elsewhere.
    subjects, occasions : tuple of str
        Labels. Identifiers are text: ``"007"`` and ``"7"`` differ.
    marker : str
        Name of the marker.
    unit : str or None
        Unit of the raw values.
    scale : {"raw", "log"}
        Scale of `values` and limits.
    step : Fraction or None
        Reporting step in raw units, exactly; None for derived values.
    units : array (n, k) of int or None
        Raw values as whole multiples of the step, from which equality is judged.
    entered : Fraction, float or None
        Share of the limit that entered for values below it; None while they hold the limit.
    replicates : tuple of Replicate
        Spread of declared replicates, one entry a subject and occasion.
    notes : tuple of Note
        What reading noticed without changing it.
    source : mapping
        Where the data came from (file name, digest, layout).
    ledger : Ledger
        Everything that was done to the cells.
    """

    values: Floats
    below: Bools
    above: Bools
    lower_limit: Floats
    upper_limit: Floats
    tokens: Cells
    subjects: tuple[str, ...]
    occasions: tuple[str, ...]
    marker: str = "value"
    unit: str | None = None
    scale: Scale = "raw"
    step: Fraction | None = None
    units: NDArray[np.int64] | None = None
    entered: float | Fraction | None = None
    replicates: tuple[Replicate, ...] = ()
    notes: tuple[Note, ...] = ()
    source: Mapping[str, Any] = field(default_factory=dict)
    ledger: Ledger = field(default_factory=Ledger)

    def __post_init__(self) -> None:
        for name, dtype in ARRAYS.items():
            array = getattr(self, name)
            if array is not None:
                object.__setattr__(self, name, _frozen(array, dtype))
        object.__setattr__(self, "source", dict(self.source))
        check_consistent(self)

    # ── making one ────────────────────────────────────────────────────────────────────

    @classmethod
    def from_array(
        cls,
        values: ArrayLike,
        *,
        occasions: Sequence[str],
        subjects: Sequence[str] | None = None,
        marker: str = "value",
        unit: str | None = None,
        below: ArrayLike | None = None,
        above: ArrayLike | None = None,
        lower_limit: ArrayLike | None = None,
        upper_limit: ArrayLike | None = None,
        resolution: float | None = None,
    ) -> OccasionTable:
        """Make a table from an array with one row a subject and one column an occasion.

        Parameters
        ----------
        values : array_like (n, k)
            Raw values, NaN where missing. A cell beyond a limit holds the limit.
        occasions : sequence of str
            Labels of the columns, in time order. Required: a matrix without labels may be
            transposed, and nothing in the numbers would show it.
        subjects : sequence of str, optional
            Labels of the rows; ``"S1"``, ``"S2"``, ... if not given.
        marker, unit : str, optional
            What was measured and in which unit.
        below, above : array_like (n, k) of bool, optional
            Cells beyond a limit.
        lower_limit, upper_limit : float or array_like, optional
            One limit, one an occasion, or one a cell. If not given, the single limit seen
            in the cells marked `below` (`above`) is taken to have applied to every cell.
        resolution : float, optional
            Reporting step. Default: the finest decimal place among the values.

        Returns
        -------
        OccasionTable
            The table, on the raw scale.

        Raises
        ------
        ArgumentError
            When the array has another shape than the labels, an infinite value, or cells
            beyond limits that differ and are not declared.

        Examples
        --------
        >>> table = OccasionTable.from_array(
        ...     [[3.1, 2.0], [0.3, 0.5]],
        ...     occasions=["before", "after"],
        ...     below=[[False, False], [True, False]],
        ...     unit="mg/L",
        ... )
        >>> table.n_subjects, table.n_occasions, float(table.lower_limit[0, 1])
        (2, 2, 0.3)
        """
        cells = np.array(values, dtype=np.float64)
        labels = check_names("occasions", occasions, least=2)
        if cells.ndim != 2 or cells.shape[1] != len(labels):
            raise ArgumentError(
                f"`values` must have one row a subject and one column for each of the "
                f"{len(labels)} occasions, got shape {cells.shape}. "
                "Transpose it if the subjects are in the columns."
            )
        ids = tuple(subjects) if subjects is not None else default_ids(cells.shape[0])
        low = cell_flags("below", below, cells)
        high = cell_flags("above", above, cells)
        lower = cell_limits("lower_limit", lower_limit, cells, low)
        upper = cell_limits("upper_limit", upper_limit, cells, high)
        limits = np.stack([lower, upper])
        cells, step, units = on_steps(cells, low | high, limits, resolution)
        measured = ~np.isnan(cells)
        counts = CellCounts(
            values=int((measured & ~low & ~high).sum()),
            below=int(low.sum()),
            above=int(high.sum()),
            missing=int((~measured).sum()),
        )
        return cls(
            values=cells,
            below=low,
            above=high,
            lower_limit=lower,
            upper_limit=upper,
            tokens=np.where(measured, "", "missing"),
            subjects=check_names("subjects", ids),
            occasions=labels,
            marker=marker,
            unit=unit,
            step=step,
            units=units,
            ledger=Ledger((LedgerLine("read", "taken from an array", cells=cells.size),), counts),
        )

    @classmethod
    def from_wide(
        cls,
        frame: pd.DataFrame,
        *,
        subject: str,
        occasions: Sequence[str],
        marker: str = "value",
        unit: str | None = None,
        lower_limit: Limit = None,
        upper_limit: Limit = None,
        resolution: float | None = None,
        replicates: How | None = None,
        decimal: Mark | None = None,
    ) -> OccasionTable:
        """Make a table from a DataFrame with one row a subject and one column an occasion.

        Parameters
        ----------
        frame : DataFrame
            Cells may be numbers or text: ``0.45``, ``"0,45"``, ``"<0.3"``, ``"haemolysed"``.
            NaN and None are missing. The index is not read.
        subject : str
            Column of identifiers. They are text and never interpreted.
        occasions : sequence of str
            Columns of the occasions, in time order.
        marker, unit : str, optional
            What was measured and in which unit.
        lower_limit, upper_limit : float, sequence or mapping, optional
            Detection limits: one number, one an occasion, or by name of the occasion. A cell
            that states a limit of its own (``"<0.5"``) keeps it. Without a declaration the
            only limit written applies to every cell; two different ones are refused.
        resolution : float, optional
            Reporting step. Default: the finest decimal place written.
        replicates : {"mean", "geometric"}, optional
            How several rows of one subject become one value. Without it they are refused.
        decimal : {".", ","}, optional
            Decimal mark of the numbers written as text, where it is not clear.

        Returns
        -------
        OccasionTable
            The table, on the raw scale.

        Raises
        ------
        DataError
            With every problem of the cells at once. Rows are counted from 1.
        ArgumentError
            When an option breaks its rule.

        Examples
        --------
        >>> import pandas as pd
        >>> frame = pd.DataFrame({"id": ["P1", "P2"], "before": ["3.1", "<0.3"], "after": [2, 1]})
        >>> table = OccasionTable.from_wide(frame, subject="id", occasions=["before", "after"])
        >>> table.values.tolist(), table.below.tolist()
        ([[3.1, 2.0], [0.3, 1.0]], [[False, False], [True, False]])
        """
        declared = Declared(replicates, lower_limit, upper_limit, resolution, decimal)
        labels = tuple(clean(name) for name in check_names("occasions", occasions, least=2))
        written, found = sheets.wide(
            sheets.sheet_of_frame(frame), subject=subject, occasions=labels
        )
        return cls._from_written(written, found, labels, declared, marker=marker, unit=unit)

    @classmethod
    def from_long(
        cls,
        frame: pd.DataFrame,
        *,
        subject: str,
        occasion: str,
        value: str,
        order: Sequence[str] | None = None,
        marker: str | None = None,
        unit: str | None = None,
        lower_limit: Limit = None,
        upper_limit: Limit = None,
        resolution: float | None = None,
        replicates: How | None = None,
        decimal: Mark | None = None,
    ) -> OccasionTable:
        """Make a table from a DataFrame with one row a cell.

        Parameters
        ----------
        frame : DataFrame
            Cells may be numbers or text; NaN and None are missing. The index is not read.
        subject, occasion, value : str
            Columns of identifiers, of occasion labels and of measured values.
        order : sequence of str
            Labels of the occasions in time order. Nothing is sorted silently: without it the
            error proposes a natural order (``"week 2"`` before ``"week 10"``) to be checked.
        marker : str, optional
            What was measured. Default: the heading of the column of values.
        unit : str, optional
            Its unit.
        lower_limit, upper_limit, resolution, replicates, decimal
            As in :meth:`from_wide`.

        Returns
        -------
        OccasionTable
            The table, on the raw scale. An occasion without a row is missing.

        Raises
        ------
        DataError
            With every problem at once: an undeclared order, a label that is not in it, a
            duplicate, a cell that cannot be read. Rows are counted from 1.
        ArgumentError
            When an option breaks its rule.

        Examples
        --------
        >>> import pandas as pd
        >>> frame = pd.DataFrame(
        ...     {
        ...         "id": ["P1", "P1", "P2", "P2"],
        ...         "visit": ["T2", "T1"] * 2,
        ...         "CRP": [2.0, 3.1, 1.5, "missed"],
        ...     }
        ... )
        >>> table = OccasionTable.from_long(
        ...     frame, subject="id", occasion="visit", value="CRP", order=["T1", "T2"]
        ... )
        >>> table.marker, table.values.tolist(), str(table.tokens[1, 0])
        ('CRP', [[3.1, 2.0], [nan, 1.5]], 'missed')
        """
        declared = Declared(replicates, lower_limit, upper_limit, resolution, decimal)
        sheet = sheets.sheet_of_frame(frame)
        written, found, labels = long_in_order(sheet, subject, occasion, value, order)
        return cls._from_written(
            written, found, labels, declared, marker=marker or value, unit=unit
        )

    @classmethod
    def _from_written(
        cls,
        written: Sequence[Written],
        found: Findings,
        occasions: Sequence[str],
        declared: Declared,
        *,
        marker: str,
        unit: str | None,
    ) -> OccasionTable:
        what = f"{counted(len(written), 'cell')} taken from a frame"
        found.lines.insert(0, LedgerLine("read", what, cells=len(written)))
        arranged, used = arrange_written(written, found, occasions=occasions, declared=declared)
        source = {"kind": "frame", "decimal": used}
        return cls(**arranged.fields(), marker=marker, unit=unit, source=source)

    # ── what it holds ─────────────────────────────────────────────────────────────────

    @property
    def n_subjects(self) -> int:
        """Number of subjects."""
        return len(self.subjects)

    @property
    def n_occasions(self) -> int:
        """Number of occasions."""
        return len(self.occasions)

    @property
    def ids(self) -> tuple[str, ...]:
        """Identifiers in natural order, whatever the order of the rows."""
        return tuple(sorted(self.subjects, key=natural_key))

    @property
    def missing(self) -> Bools:
        """True where a cell is missing, (n, k)."""
        return np.isnan(self.values)

    @property
    def censored(self) -> Bools:
        """True where a value lies beyond a limit, (n, k)."""
        return self.below | self.above

    @property
    def resolution(self) -> float | None:
        """Reporting step in raw units; None for derived values."""
        return None if self.step is None else float(self.step)

    def order_codes(self) -> Floats:
        """Return whole numbers (n, k) that order the cells, equal where tied, NaN where missing.

        The order is that of the raw values; taking logs does not change it. Censored cells
        are tied beyond everything measured, which is right on a table at a common limit.
        """
        return ties.order_codes(self.values, self.units, self.below, self.above)

    def paired(self, first: str, second: str) -> tuple[Differences, tuple[str, ...]]:
        """Return differences second − first of the subjects that have both, and their ids.

        On the log scale the differences are log ratios. Equality is judged in units of the
        reporting step where there is one.
        """
        i, j = self._columns(first, second)
        rows = np.flatnonzero(~self.missing[:, i] & ~self.missing[:, j])
        unknown = (self.below[rows, i] & self.below[rows, j]) | (
            self.above[rows, i] & self.above[rows, j]
        )
        ids = tuple(self.subjects[row] for row in rows)
        return self._gaps(
            (rows, np.full_like(rows, i)), (rows, np.full_like(rows, j)), unknown
        ), ids

    def _columns(self, first: str, second: str) -> tuple[int, int]:
        i, j = self.column("first", first), self.column("second", second)
        if i == j:
            raise ArgumentError(f"`first` and `second` must differ, got {first!r} twice.")
        return i, j

    def centred_scores(self) -> Floats:
        """Return scores (n, k) proportional to the subject-centred values of complete rows.

        Whole numbers on the raw scale (multiples of the step over k). On logs and for derived
        values the centred values, those closer than 1e-10 of the largest made equal.
        """
        return ties.centred(self.values, self.units if self.scale == "raw" else None)

    def spans(self) -> Differences:
        """Return each subject's largest minus smallest value (log ratio) on complete rows."""
        rows = np.arange(self.n_subjects)
        low, high = self.values.argmin(axis=1), self.values.argmax(axis=1)
        return self._gaps((rows, low), (rows, high), np.zeros(rows.size, dtype=np.bool_))

    def _gaps(self, first: _Places, second: _Places, unknown: Bools) -> Differences:
        if self.units is None or self.step is None:
            return ties.differences_of_floats(self.values[first], self.values[second], unknown)
        if self.scale == "log":
            return ties.log_ratios_of_units(self.units[first], self.units[second], unknown)
        return ties.differences_of_units(self.units[first], self.units[second], self.step, unknown)

    def column(self, argument: str, occasion: str) -> int:
        """Return the position of an occasion; `argument` is the caller's name for it."""
        return self.occasions.index(check_member(argument, occasion, self.occasions))

    # ── steps that make another table ─────────────────────────────────────────────────

    def select(
        self, *, subjects: Sequence[str] | None = None, occasions: Sequence[str] | None = None
    ) -> OccasionTable:
        """Return the table of some subjects and occasions, in the order given."""
        ids = self.subjects if subjects is None else check_names("subjects", subjects)
        labels = self.occasions if occasions is None else check_names("occasions", occasions)
        rows = [self.subjects.index(check_member("subjects", s, self.subjects)) for s in ids]
        columns = [self.column("occasions", label) for label in labels]
        lines = []
        if len(rows) < self.n_subjects:
            lines.append(_line("select", rows, self, "subjects kept on request"))
        if len(columns) < self.n_occasions:
            lines.append(LedgerLine("select", f"occasions kept on request: {listing(labels)}"))
        return self._taken(rows, columns, *lines)

    def complete(self) -> OccasionTable:
        """Return the table of the subjects with a value on every occasion."""
        missing = self.missing
        rows = np.flatnonzero(~missing.any(axis=1)).tolist()
        left = [
            LedgerLine("complete", f"{self.subjects[i]} left: {self.reason(i)}", self.subjects[i])
            for i in np.flatnonzero(missing.any(axis=1)).tolist()
        ]
        return self._taken(rows, range(self.n_occasions), *left)

    def reason(self, row: int) -> str:
        """Say which occasions a subject lacks, and why."""
        gaps = [
            f"{self.occasions[j]} ({self.tokens[row, j] or 'no reason given'})"
            for j in np.flatnonzero(self.missing[row]).tolist()
        ]
        return f"no value at {listing(gaps)}" if gaps else "complete"

    def by_content(self) -> OccasionTable:
        """Return the rows in canonical order: sorted by mask, flags and values, not by label.

        Sums of floats and random draws depend on the order of rows; this order does not
        depend on how the file was sorted or how the subjects are named.
        """
        keys = np.concatenate(
            [self.missing, self.below, self.above, np.nan_to_num(self.values)], axis=1
        )
        rows = np.lexsort(keys.T[::-1]).tolist()
        return self._taken(rows, range(self.n_occasions))

    def in_natural_order(self) -> OccasionTable:
        """Return the rows sorted by identifier, ``"P2"`` before ``"P10"``."""
        rows = sorted(range(self.n_subjects), key=lambda i: natural_key(self.subjects[i]))
        return self._taken(rows, range(self.n_occasions))

    def comparable(
        self, occasions: Sequence[str] | None = None, *, complete: bool = True
    ) -> OccasionTable:
        """Return what every test starts from: common limits, canonical order, complete rows.

        Parameters
        ----------
        occasions : sequence of str, optional
            The occasions compared; limits and gaps at other occasions play no part.
        complete : bool, default True
            Keep only the subjects with a value on every occasion compared. A method made for
            gaps takes the others too.
        """
        table = self if occasions is None else self.select(occasions=occasions)
        return (table.complete() if complete else table).recensored().by_content()

    def pair(self, first: str, second: str) -> OccasionTable:
        """Return the comparable rows of two occasions, the start of every test of a pair."""
        self._columns(first, second)
        return self.comparable((first, second))

    def recensored(self) -> OccasionTable:
        """Return the table at the limits that all cells share.

        Values below the largest lower limit that applied to any cell (or above the smallest
        upper limit) are marked as beyond it: they cannot be compared with a cell that was
        reported only as beyond. The ledger says how many measured values this gave up.
        """
        table = self
        for side in ("lower", "upper"):
            table = at_common_limit(table, side)
        return table

    def substitute(self, rule: str | float = "half") -> OccasionTable:
        """Return the table with values below the lower limit replaced by a fixed number.

        Parameters
        ----------
        rule : {"half", "root2", "limit"} or float
            Half the limit, the limit over √2 (Hornung & Reed 1990), the limit itself, or
            another fraction of it in (0, 1]. Values above an upper limit stay at that limit.

        Returns
        -------
        OccasionTable
            The cells stay marked as below. A substitute is a convention, not a measurement:
            show how the answer moves when it moves.

        Raises
        ------
        ArgumentError
            When the rule is not known, or another one was applied before.
        """
        factor, words = substitute_factor(rule)
        if not self.below.any() or self.entered == factor:
            return self
        if self.entered is not None:
            raise ArgumentError(
                f"`substitute` must be given once, got {rule!r} for a table whose values below "
                f"the limit already entered as {float(self.entered):.3g} times the limit. Start "
                "from the table before."
            )
        if self.scale == "raw" and factor < 1 and (self.lower_limit[self.below] < 0).any():
            raise ArgumentError(
                f"`substitute` must be 'limit' where a limit is negative, got {rule!r}: a part of "
                "a negative limit lies above it."
            )
        raised = math.log(factor) if self.scale == "log" else 0.0
        filled = self.lower_limit + raised if raised else self.lower_limit * float(factor)
        step, units = substituted_units(self, factor)
        below = counted(int(self.below.sum()), "value")
        line = LedgerLine(
            "substitute",
            f"{below} below the limit entered as {words}",
            cells=int(self.below.sum()),
        )
        return replace(
            self,
            values=np.where(self.below, filled, self.values),
            units=units,
            step=step,
            entered=factor,
            ledger=self.ledger.add(line),
        )

    def log(self) -> OccasionTable:
        """Return the table on the natural-log scale; whole multiples for comparing are kept.

        Raises
        ------
        DataError
            When a value is zero or negative: the question is then whether it lies below a
            limit or is a true zero, and only the user can answer it.
        """
        if self.scale == "log":
            return self
        refused = [
            not_positive(self, i, j) for i, j in zip(*np.nonzero(self.values <= 0), strict=True)
        ]
        if refused:
            raise DataError(refused, str(self.source.get("file", "")))
        # a step coarser than the smallest value leaves no ratios to compare in whole multiples
        units = None if self.units is None or (self.units <= 0)[~self.missing].any() else self.units
        return replace(
            self,
            values=np.log(self.values),
            units=units,
            step=None if units is None else self.step,
            lower_limit=log_limits(self.lower_limit),
            upper_limit=log_limits(self.upper_limit),
            scale="log",
            ledger=self.ledger.add(LedgerLine("log", "natural logarithms of all values")),
        )

    def on_scale(self, scale: Scale) -> OccasionTable:
        """Return the table on `scale`; logs are taken once and never undone."""
        return self.log() if scale == "log" else self

    def _taken(
        self, rows: Sequence[int], columns: Sequence[int], *lines: LedgerLine
    ) -> OccasionTable:
        grid = np.ix_(list(rows), list(columns))
        arrays: dict[str, Any] = {
            name: None if getattr(self, name) is None else getattr(self, name)[grid]
            for name in ARRAYS
        }
        return replace(
            self,
            **arrays,
            subjects=tuple(self.subjects[i] for i in rows),
            occasions=tuple(self.occasions[j] for j in columns),
            ledger=self.ledger.add(*lines),
        )

    # ── for other tools and for reading ───────────────────────────────────────────────

    def to_long(self) -> pd.DataFrame:
        """Return one row a cell: subject, occasion, value, state, limits and token."""
        import pandas as pd

        n, k = self.values.shape
        return pd.DataFrame(
            {
                "subject": np.repeat(np.array(self.subjects, dtype=object), k),
                "occasion": np.tile(np.array(self.occasions, dtype=object), n),
                "value": self.values.ravel(),
                "state": self._states().ravel(),
                "lower_limit": self.lower_limit.ravel(),
                "upper_limit": self.upper_limit.ravel(),
                "token": self.tokens.ravel().astype(object),
            }
        )

    def to_wide(self) -> pd.DataFrame:
        """Return one row a subject; censored cells as text (``"<0.3"``), missing ones empty."""
        import pandas as pd

        frame = pd.DataFrame({"subject": list(self.subjects)}, dtype=object)
        for j, occasion in enumerate(self.occasions):
            frame[occasion] = [self._cell(i, j) for i in range(self.n_subjects)]
        return frame

    def _cell(self, i: int, j: int) -> float | str | None:
        value = float(self.values[i, j])
        if math.isnan(value):
            return None
        limit = self.upper_limit[i, j] if self.above[i, j] else self.lower_limit[i, j]
        sign = "<" if self.below[i, j] else ">" if self.above[i, j] else ""
        return f"{sign}{float(limit):g}" if sign else value

    def _states(self) -> NDArray[np.object_]:
        states = np.full(self.values.shape, "value", dtype=object)
        states[self.below], states[self.above], states[self.missing] = "below", "above", "missing"
        return states

    def __eq__(self, other: object) -> bool:
        """Whether two tables hold the same cells and labels; ledger and source do not count."""
        if not isinstance(other, OccasionTable):
            return NotImplemented
        names = [f.name for f in fields(self) if f.name not in _HISTORY]
        return all(same(getattr(self, name), getattr(other, name)) for name in names)

    __hash__ = None  # type: ignore[assignment]  # holds arrays

    def __repr__(self) -> str:
        unit = f" ({self.unit})" if self.unit else ""
        return (
            f"<OccasionTable {self.marker}{unit}: {counted(self.n_subjects, 'subject')} × "
            f"{self.n_occasions} occasions ({listing(self.occasions)}), {self.scale} scale, "
            f"{int(self.missing.sum())} missing, {int(self.below.sum())} below and "
            f"{int(self.above.sum())} above a limit>"
        )

    def _repr_html_(self) -> str:
        head = "".join(f"<th scope='col'>{html.escape(o)}</th>" for o in self.occasions)
        body = []
        for i, subject in enumerate(self.subjects):
            cells = "".join(
                f"<td>{html.escape(_shown(self._cell(i, j), str(self.tokens[i, j])))}</td>"
                for j in range(self.n_occasions)
            )
            body.append(f"<tr><th scope='row'>{html.escape(subject)}</th>{cells}</tr>")
        caption = html.escape(repr(self).strip("<>"))
        return (
            f"<table><caption>{caption}</caption><thead><tr><th scope='col'>subject</th>{head}"
            f"</tr></thead><tbody>{''.join(body)}</tbody></table>"
        )


_HISTORY = frozenset({"ledger", "source", "notes"})


def _shown(cell: float | str | None, token: str) -> str:
    if cell is None:
        return f"({token})" if token else ""
    return cell if isinstance(cell, str) else number(cell, 4)


def _line(step: str, rows: Sequence[int], table: OccasionTable, what: str) -> LedgerLine:
    return LedgerLine(step, f"{what}: {listing([table.subjects[i] for i in rows])}")
