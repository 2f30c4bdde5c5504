"""The arrays of a table: their types, their making from arguments, their consistency."""

from __future__ import annotations

import math
from collections.abc import Mapping
from fractions import Fraction
from types import MappingProxyType
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike

from robustrm import ties
from robustrm._format import listing, number
from robustrm.errors import ArgumentError
from robustrm.ties import Bools, Floats, Ints

if TYPE_CHECKING:
    from robustrm.table.occasion_table import OccasionTable

ARRAYS: Mapping[str, Any] = MappingProxyType(
    {
        "values": np.float64,
        "below": np.bool_,
        "above": np.bool_,
        "lower_limit": np.float64,
        "upper_limit": np.float64,
        "tokens": np.str_,
        "units": np.int64,
    }
)


def default_ids(n: int) -> tuple[str, ...]:
    """Return ``"S1"``, ``"S2"``, ..."""
    return tuple(f"S{i + 1}" for i in range(n))


def cell_flags(argument: str, flags: ArrayLike | None, values: Floats) -> Bools:
    """Return flags (n, k) of the cells, none set if not given."""
    if flags is None:
        return np.zeros(values.shape, dtype=np.bool_)
    array = np.array(flags, dtype=np.bool_)
    if array.shape != values.shape:
        raise ArgumentError(
            f"`{argument}` must have the shape of `values` {values.shape}, got {array.shape}."
        )
    return array


def cell_limits(argument: str, limit: ArrayLike | None, values: Floats, beyond: Bools) -> Floats:
    """Return the limits (n, k) of the cells: as declared, or the single one that was seen."""
    if limit is None:
        seen = np.unique(values[beyond])
        if seen.size > 1:
            shown = listing([number(value) for value in seen.tolist()])
            raise ArgumentError(
                f"`{argument}` must be declared when cells lie beyond different limits, got "
                f"{shown}. Give one limit an occasion, or one a cell."
            )
        return np.full(values.shape, seen[0] if seen.size else np.nan)
    try:
        limits = np.broadcast_to(np.asarray(limit, dtype=np.float64), values.shape).copy()
    except ValueError:
        raise ArgumentError(
            f"`{argument}` must be one number, one an occasion ({values.shape[1]}) or one a "
            f"cell {values.shape}, got shape {np.shape(limit)}."
        ) from None
    limits[beyond] = values[beyond]  # a cell that states a limit keeps it
    return limits


def on_steps(
    values: Floats, beyond: Bools, limits: Floats, resolution: float | None
) -> tuple[Floats, Fraction | None, Ints | None]:
    """Return values, reporting step and whole multiples of it.

    A declared step rounds the measured values to it. The step is then made fine enough for
    every limit to be a whole multiple, so that a limit is never rounded.
    """
    if resolution is None:
        step = ties.decimal_step(np.concatenate([values.ravel(), limits.ravel()]))
    else:
        step = declared_step(resolution)
        values = ties.rounded_to(values, ~np.isnan(values) & ~beyond, step)
    if step is None:
        return values, None, None
    step = ties.finer_step(step, limits)
    units = ties.step_units(values, step)
    return values, None if units is None else step, units


def declared_step(resolution: float) -> Fraction:
    """Return a declared reporting step, exactly."""
    if not (math.isfinite(resolution) and resolution > 0):
        raise ArgumentError(f"`resolution` must be a positive number, got {resolution!r}.")
    return Fraction(repr(float(resolution)))


def check_consistent(table: OccasionTable) -> None:
    """Refuse arrays of other shapes, infinite values and cells in two states at once."""
    shape = (len(table.subjects), len(table.occasions))
    for name in ARRAYS:
        array = getattr(table, name)
        if array is not None and array.shape != shape:
            raise ArgumentError(f"`{name}` must have shape {shape}, got {array.shape}.")
    infinite = np.argwhere(np.isinf(table.values))
    if infinite.size:
        i, j = infinite[0]
        raise ArgumentError(
            f"`values` must be finite or NaN for missing, got {table.values[i, j]} for subject "
            f"{table.subjects[i]!r} at {table.occasions[j]!r}. Mark a value beyond a limit with "
            "`below` or `above`."
        )
    both = (table.below & table.above) | (table.censored & table.missing)
    if both.any():
        i, j = np.argwhere(both)[0]
        raise ArgumentError(
            f"A cell must be one of measured, below, above or missing, got two for subject "
            f"{table.subjects[i]!r} at {table.occasions[j]!r}."
        )


def same(one: object, other: object) -> bool:
    """Whether two fields hold the same; NaN equals NaN."""
    if isinstance(one, np.ndarray) and isinstance(other, np.ndarray):
        return one.shape == other.shape and bool(
            np.array_equal(one, other, equal_nan=one.dtype.kind == "f")
        )
    return bool(one == other)
