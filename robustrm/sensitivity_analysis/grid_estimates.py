"""The estimate of one planned contrast under each specification, by the location it compares."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any

import numpy as np

from robustrm.errors import TooFewError
from robustrm.kernels import gapped_scores, walsh
from robustrm.methods.beyond import is_mostly_beyond
from robustrm.methods.paired_t import paired_t
from robustrm.methods.signed_rank import NAMES
from robustrm.methods.trimmed_pair import trimmed_pair
from robustrm.methods.trimming import share_text
from robustrm.plan import Plan
from robustrm.results import Estimate, TestResult
from robustrm.sensitivity_analysis.branches import Branch
from robustrm.sensitivity_analysis.grid_tables import Sources, variant
from robustrm.table import OccasionTable

_RANKS, _MEANS, _TRIMMED, _WINSORIZED = "ranks", "means", "trimmed", "winsorized"
_OF_TEST: Mapping[str, str] = MappingProxyType(
    {
        **dict.fromkeys(("aligned_ranks", "friedman", "quade", "normal_scores"), _RANKS),
        **dict.fromkeys(("mean_permutation", "hotelling"), _MEANS),
        "winsorized_permutation": _WINSORIZED,
        "trimmed_anova": _TRIMMED,
    }
)
# Which location the planned method of comparison estimates.
_OF_PAIR: Mapping[str, str] = MappingProxyType(
    {
        "signed_rank": _RANKS,
        "sign_flip": _MEANS,
        "paired_t": _MEANS,
        "trimmed_pair": _TRIMMED,
    }
)


@dataclass(frozen=True, slots=True)
class Shift:
    """An estimate with what it rests on; None where it is not defined."""

    estimate: Estimate | None
    n: int
    role: str

    def fields(self) -> dict[str, Any]:
        """Return the columns of the frame."""
        found = self.estimate
        values = (
            dict.fromkeys(("estimate", "low", "high", "level"), math.nan)
            if found is None
            else {
                "estimate": found.value,
                "low": _or_nan(found.low),
                "high": _or_nan(found.high),
                "level": _or_nan(found.level),
            }
        )
        name = None if found is None else found.name
        return {"estimand": name, **values, "n_estimate": self.n, "role": self.role}


def _or_nan(value: float | None) -> float:
    return math.nan if value is None else value


def shift(source: Sources, branch: Branch, plan: Plan, pair: tuple[str, str]) -> Shift:
    """Return the shift between two occasions by the location that the test of a branch compares.

    Ranks: the pseudo-median of the differences; means: their mean; trimmed and Winsorized means:
    those of the occasions. The interval is the usual one of that location where nothing was pulled
    in, and none otherwise: pulling in depends on all values, which no such interval takes into
    account.
    """
    table, n_pulled = variant(source, branch)
    limited = source.tables[branch.replicates, branch.missing].pair(*pair)
    used = table.pair(*pair)
    kind = _OF_TEST.get(branch.test)
    found: Estimate | None = None
    if kind == _WINSORIZED:
        found = _winsorized(table, pair, branch.trim or 0.0)
    elif kind is not None:
        found = _estimate(kind, used, branch, plan)
    if is_mostly_beyond(limited):
        found = None
    if found is not None and n_pulled:
        found = Estimate(
            found.name, found.value, None, None, None, found.kind, found.unit, found.scale
        )
    same = kind is not None and kind == _OF_PAIR.get(plan.pair) and used.scale == plan.used_scale
    return Shift(found, used.n_subjects, "sensitivity" if same else "supplementary")


def _estimate(kind: str, used: OccasionTable, branch: Branch, plan: Plan) -> Estimate | None:
    first, second = used.occasions
    if kind == _RANKS:
        return _pseudo_median(used, plan.level)
    options: dict[str, Any] = {"substitute": branch.substitute, "level": plan.level}
    try:
        result: TestResult
        if kind == _TRIMMED:
            result = trimmed_pair(used, first, second, trim=branch.trim or 0.0, **options)
        else:
            result = paired_t(used, first, second, **options)
    except TooFewError:
        return None
    return result.estimate


def _pseudo_median(used: OccasionTable, level: float) -> Estimate | None:
    gaps = used.paired(*used.occasions)[0].values
    if not gaps.size:
        return None
    averages, found = walsh.walsh_averages(gaps), walsh.interval_rank(gaps.size, level)
    limits = None
    if found is not None:
        limits = (float(averages[found.rank - 1]), float(averages[-found.rank]))
    return Estimate.of_shift(
        NAMES,
        value=float(walsh.pseudo_median(gaps)),
        limits=limits,
        level=None if found is None else found.level,
        kind="exact",
        unit=used.unit,
        scale=used.scale,
    )


def _winsorized(table: OccasionTable, pair: tuple[str, str], trim: float) -> Estimate | None:
    """Return the mean difference of the subject-centred values after pulling in their outer ones.

    The clip points are those of the test, from all occasions. Centring cancels within a subject.
    """
    c = gapped_scores.centred(table.values)
    low, high = gapped_scores.clip_points(c, trim)
    first, second = (table.column("pair", label) for label in pair)
    gaps = np.clip(c[:, second], low, high) - np.clip(c[:, first], low, high)
    known = gaps[~np.isnan(gaps)]
    if not known.size:
        return None
    share = share_text(trim)
    return Estimate.of_shift(
        (f"mean difference, {share} Winsorized", f"ratio of geometric means, {share} Winsorized"),
        value=float(np.mean(known)),
        limits=None,
        level=None,
        kind="none",
        unit=table.unit,
        scale=table.scale,
    )
