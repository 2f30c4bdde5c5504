"""Values beyond a limit: the common limit of all cells, substitutes, logarithms."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import replace
from fractions import Fraction
from types import MappingProxyType
from typing import TYPE_CHECKING, Literal

import numpy as np
from numpy.typing import NDArray

from robustrm._checks import check_choice
from robustrm._format import counted, number
from robustrm.errors import ArgumentError, Problem
from robustrm.ledger import LedgerLine
from robustrm.ties import Bools, Floats

if TYPE_CHECKING:
    from robustrm.table.occasion_table import OccasionTable

SUBSTITUTES: Mapping[str, float | Fraction] = MappingProxyType(
    {"half": Fraction(1, 2), "root2": 1 / math.sqrt(2), "limit": Fraction(1)}
)
_RULE_WORDS = {"half": "half the limit", "root2": "the limit divided by √2", "limit": "the limit"}


def _common_limit(table: OccasionTable, side: Literal["lower", "upper"]) -> float | None:
    limits = (table.lower_limit if side == "lower" else table.upper_limit)[~table.missing]
    limits = limits[~np.isnan(limits)]
    if not limits.size:
        return None
    return float(limits.max() if side == "lower" else limits.min())


def at_common_limit(table: OccasionTable, side: Literal["lower", "upper"]) -> OccasionTable:
    """Return the table with everything beyond the strictest limit marked as beyond it."""
    limit = _common_limit(table, side)
    if limit is None:
        return table
    flag_name, limit_name = (
        ("below", "lower_limit") if side == "lower" else ("above", "upper_limit")
    )
    flags, limits = getattr(table, flag_name), getattr(table, limit_name)
    measured = ~table.missing & ~table.censored
    beyond = table.values < limit if side == "lower" else table.values > limit
    given_up = measured & beyond
    moved = flags | given_up
    if not given_up.any() and bool(np.all(limits[moved] == limit)):
        return table
    if table.entered is not None:
        raise ArgumentError(
            "`substitute` must come after the table is brought to its common limit, got a table "
            f"whose values below the limit already entered as {float(table.entered):.3g} times "
            "the limit. Start from the table before."
        )
    units = table.units
    if units is not None:
        units = _limit_units(table, limit, moved)
    shown = number(math.exp(limit) if table.scale == "log" else limit)
    what = (
        f"all occasions compared at the common {side} limit {shown}: "
        f"{counted(int(given_up.sum()), 'measured value')} given up"
    )
    return replace(
        table,
        **{
            flag_name: moved,
            limit_name: np.where(moved, limit, limits),
            "values": np.where(moved, limit, table.values),
            "units": units,
            "step": None if units is None else table.step,
        },
        ledger=table.ledger.add(LedgerLine("recensored", what, cells=int(given_up.sum()))),
    )


def _limit_units(table: OccasionTable, limit: float, moved: Bools) -> NDArray[np.int64] | None:
    step, units = table.step, table.units
    if step is None or units is None:
        return None
    at_limit = units[moved & (table.values == limit)]
    raw = math.exp(limit) if table.scale == "log" else limit
    unit = int(at_limit[0]) if at_limit.size else round(Fraction(repr(raw)) / step)
    return np.where(moved, unit, units)


def substitute_factor(rule: str | float) -> tuple[float | Fraction, str]:
    """Return the fraction of the limit that a rule enters, exactly if it can be, and its words."""
    if isinstance(rule, str):
        check_choice("rule", rule, tuple(SUBSTITUTES))
        return SUBSTITUTES[rule], _RULE_WORDS[rule]
    if not 0 < rule <= 1:
        raise ArgumentError(
            f"`rule` must be a fraction of the limit in (0, 1] or one of "
            f"{', '.join(map(repr, SUBSTITUTES))}, got {rule!r}."
        )
    return Fraction(repr(float(rule))), f"{rule:g} times the limit"


def substituted_units(
    table: OccasionTable, factor: float | Fraction
) -> tuple[Fraction | None, NDArray[np.int64] | None]:
    """Return step and whole multiples after substitution, None where there are none."""
    # Half a limit is a whole multiple of half the step; a limit over √2 is no multiple at all.
    if table.units is None or table.step is None or isinstance(factor, float):
        return None, None
    parts = factor.denominator
    if int(np.abs(table.units).max()) * parts >= 2**53:
        return None, None
    scaled = np.where(table.below, factor.numerator * table.units, parts * table.units)
    return table.step / parts, scaled


def not_positive(table: OccasionTable, i: int, j: int) -> Problem:
    """Ask of a zero or negative value what it is."""
    return Problem(
        code="not positive",
        message=(
            f"subject {table.subjects[i]!r} has {number(float(table.values[i, j]))} at "
            f"{table.occasions[j]!r}, which has no logarithm: below a limit, or a true zero?"
        ),
        action=(
            "If it lies below a detection limit, write it as '<limit' (for instance '<0.3') or "
            "declare the limit; if it is a true zero, analyze on the raw scale (--scale raw)."
        ),
        column=table.occasions[j],
        text=f"{table.values[i, j]:g}",
    )


def log_limits(limits: Floats) -> Floats:
    """Return the logarithms of positive limits, NaN for others."""
    positive = np.where(limits > 0, limits, np.nan)
    return np.log(positive)
