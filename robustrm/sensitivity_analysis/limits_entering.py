"""Other numbers in the place of values beyond a limit, and what the common limit gave up."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from robustrm.methods.effects import directions
from robustrm.table import OccasionTable
from robustrm.ties import Floats

Factors = Mapping[str, float]


def entered(table: OccasionTable, below: Factors, above: Factors) -> OccasionTable:
    """Return a comparable table with numbers in the place of its values beyond a limit.

    Parameters
    ----------
    table : OccasionTable
        At its common limits, so that the cells beyond hold the limit.
    below, above : mapping of str to float
        Times the limit that enters, by occasion; 1 for an occasion that is not named.

    Returns
    -------
    OccasionTable
        The numbers count as measured, so that those of two occasions may differ. Derived values:
        ties are found by the 1e-10 rule.
    """
    values = table.values.copy()
    for cells, factors in ((table.below, below), (table.above, above)):
        share = np.array([factors.get(occasion, 1.0) for occasion in table.occasions])
        moved = values + np.log(share) if table.scale == "log" else values * share
        values = np.where(cells, moved, values)
    nowhere = np.zeros(values.shape, dtype=np.bool_)
    nothing = np.full(values.shape, np.nan)
    return replace(
        table,
        values=values,
        below=nowhere,
        above=nowhere,
        lower_limit=nothing,
        upper_limit=nothing,
        units=None,
        step=None,
        entered=None,
    )


def is_divisible(table: OccasionTable) -> bool:
    """Say whether a part of every limit lies between zero and the limit: on logs it always does."""
    return table.scale == "log" or not bool((table.values[table.below] <= 0).any())


COUNT_COLUMNS = (
    "label", "first", "second", "n", "common_lower", "common_upper", "n_below", "n_above",
    "n_given_up", "mostly_beyond", "n_fell", "n_rose", "n_unchanged", "n_unknown",
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class Counts:
    """What lies beyond the common limits of some occasions, and what making them common cost.

    Parameters
    ----------
    label : str
        What is compared.
    pair : tuple of str or None
        The occasions; None for all of them.
    n : int
        Subjects with all of them.
    common_lower, common_upper : float
        The limits that all their cells share, in raw units; NaN where none applied.
    n_below, n_above : int
        Values beyond these.
    n_given_up : int
        Measured values among them.
    mostly_beyond : bool
        More than half of an occasion lies beyond.
    fell, rose, unchanged, unknown : int or None
        Subjects of a pair by direction.
    """

    label: str
    pair: tuple[str, str] | None
    n: int
    common_lower: float
    common_upper: float
    n_below: int
    n_above: int
    n_given_up: int
    mostly_beyond: bool
    fell: int | None = None
    rose: int | None = None
    unchanged: int | None = None
    unknown: int | None = None

    @property
    def is_touched(self) -> bool:
        """Whether any value lies beyond a limit."""
        return self.n_below + self.n_above > 0

    def row(self) -> dict[str, Any]:
        """Return the flat fields."""
        first, second = self.pair or (None, None)
        counts = (self.fell, self.rose, self.unchanged, self.unknown)
        return dict(
            zip(
                COUNT_COLUMNS,
                (
                    self.label, first, second, self.n, self.common_lower, self.common_upper,
                    self.n_below, self.n_above, self.n_given_up, self.mostly_beyond, *counts,
                ),
                strict=True,
            )
        )  # fmt: skip


def counts_of(raw: OccasionTable, label: str, pair: tuple[str, str] | None) -> Counts:
    """Count what lies beyond the common limits of a pair, or of all occasions."""
    kept = (raw if pair is None else raw.select(occasions=pair)).complete()
    common = kept.recensored()
    half = common.censored.sum(axis=0) * 2 > common.n_subjects
    moved: dict[str, Any] = {}
    if pair is not None:
        found = directions(raw, *pair)
        moved = {
            "fell": found.fell,
            "rose": found.rose,
            "unchanged": found.unchanged,
            "unknown": found.unknown,
        }
    return Counts(
        label=label,
        pair=pair,
        n=common.n_subjects,
        common_lower=_strictest(kept.lower_limit, lower=True),
        common_upper=_strictest(kept.upper_limit, lower=False),
        n_below=int(common.below.sum()),
        n_above=int(common.above.sum()),
        n_given_up=int((common.censored & ~kept.censored).sum()),
        mostly_beyond=bool(half.any()),
        **moved,
    )


def _strictest(limits: Floats, *, lower: bool) -> float:
    given = limits[~np.isnan(limits)]
    if not given.size:
        return math.nan
    return float(given.max() if lower else given.min())
