"""What was measured at each occasion, in numbers that suit a skewed marker."""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass

import numpy as np

from robustrm.kernels import location
from robustrm.table import OccasionTable
from robustrm.ties import Floats

TRIM = 0.2


@dataclass(frozen=True, slots=True)
class OccasionSummary:
    """Summary of one occasion, on the raw scale.

    Order statistics treat a value below a limit as smaller than everything measured; one
    that falls among such values is None, and printed as below the limit. Means, standard
    deviations and moments need a number for such a value and use the plan's substitute;
    they are None when more than half of the occasion is beyond a limit.

    Parameters
    ----------
    occasion : str
        Label.
    n, n_missing, n_below, n_above : int
        Subjects with a value (measured or beyond a limit), without one, and beyond a limit.
    median, q1, q3, smallest, largest : float or None
        Median, quartiles (linear interpolation between order statistics) and range.
    mean, sd, trimmed_mean, winsorized_sd : float or None
        Arithmetic mean and SD; 20% trimmed mean and 20% Winsorized SD.
    geometric_mean, geometric_sd : float or None
        On positive values; the geometric SD is a factor without unit.
    madn : float or None
        Median absolute deviation from the median over Φ⁻¹(3/4) (0.6745).
    skewness : float or None
        Adjusted Fisher-Pearson coefficient; needs three values.
    """

    occasion: str
    n: int
    n_missing: int
    n_below: int
    n_above: int
    median: float | None
    q1: float | None
    q3: float | None
    smallest: float | None
    largest: float | None
    mean: float | None
    sd: float | None
    trimmed_mean: float | None
    winsorized_sd: float | None
    geometric_mean: float | None
    geometric_sd: float | None
    madn: float | None
    skewness: float | None

    def to_dict(self) -> dict[str, object]:
        """Return plain values."""
        return dataclasses.asdict(self)


def summarize(table: OccasionTable, *, substitute: str = "half") -> tuple[OccasionSummary, ...]:
    """Summarize every occasion of a raw-scale table over the subjects measured there.

    Parameters
    ----------
    table : OccasionTable
        On the raw scale; all rows are used, complete or not.
    substitute : {"half", "root2", "limit"}, default "half"
        What enters the moments for a value below the limit.

    Returns
    -------
    tuple of OccasionSummary
        In the order of the occasions.
    """
    ordered = table.by_content()
    return tuple(_summary(ordered, j, substitute) for j in range(table.n_occasions))


def _summary(table: OccasionTable, j: int, substitute: str) -> OccasionSummary:
    present = ~table.missing[:, j]
    below, above = table.below[present, j], table.above[present, j]
    # "<0.8" and a measured 0.4 have no order: the occasion is ranked at its strictest limit
    alone = table.select(occasions=table.occasions[j : j + 1]).recensored()
    values = alone.values[present, 0]
    ranked = np.where(alone.below[present, 0], -np.inf, values)
    ranked = np.where(alone.above[present, 0], np.inf, ranked)
    entered = table.substitute(substitute).values[present, j]
    mostly_beyond = bool(alone.censored[present, 0].sum() * 2 > present.sum())
    return OccasionSummary(
        occasion=table.occasions[j],
        n=int(present.sum()),
        n_missing=int((~present).sum()),
        n_below=int(below.sum()),
        n_above=int(above.sum()),
        **_order_statistics(np.sort(ranked)),
        **_moments(np.empty(0) if mostly_beyond else np.sort(entered)),
    )


def _order_statistics(ranked: Floats) -> dict[str, float | None]:
    quantiles = {"smallest": 0.0, "q1": 0.25, "median": 0.5, "q3": 0.75, "largest": 1.0}
    return {name: _quantile(ranked, q) for name, q in quantiles.items()}


def _quantile(ranked: Floats, q: float) -> float | None:
    if not ranked.size:
        return None
    position = q * (ranked.size - 1)
    low, high = ranked[math.floor(position)], ranked[math.ceil(position)]
    if not (math.isfinite(low) and math.isfinite(high)):
        return None
    return float(low + (position % 1) * (high - low))


def _moments(y: Floats) -> dict[str, float | None]:
    n = y.size
    positive = n > 0 and bool((y > 0).all())
    logs = np.log(y) if positive else y
    return {
        "mean": float(y.mean()) if n else None,
        "sd": float(y.std(ddof=1)) if n > 1 else None,
        "trimmed_mean": float(location.trimmed_mean(y, TRIM)) if n else None,
        "winsorized_sd": math.sqrt(location.winsorized_variance(y, TRIM)) if n > 1 else None,
        "geometric_mean": math.exp(logs.mean()) if positive else None,
        "geometric_sd": math.exp(logs.std(ddof=1)) if positive and n > 1 else None,
        "madn": float(location.madn(y)) if n else None,
        "skewness": _finite(location.skewness(y)) if n > 2 else None,
    }


def _finite(value: Floats) -> float | None:
    return float(value) if np.isfinite(value) else None
