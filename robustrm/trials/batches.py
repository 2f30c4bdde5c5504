"""Data sets of one block, and the bootstrap resamples that their intervals share.

The intervals of a data set share its resamples of whole rows, which are drawn anew for every data
set.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from robustrm.kernels import bootstrap, effect_sizes, trimmed
from robustrm.kernels.scores import rank_scores
from robustrm.simulation import TRIM, Design, draw_block, stream

Floats = NDArray[np.float64]
Pair = tuple[Floats, Floats]


class Resampled(NamedTuple):
    """Estimates and standard errors (D, m), in the resamples (D, B, m), with a subject left out."""

    observed: Floats
    se: Floats
    drawn: Floats
    drawn_se: Floats
    left_out: Floats


@dataclass(frozen=True, eq=False)
class Batch:
    """Data sets (D, n, k) of one block, and what their intervals share."""

    values: Floats
    draws: int
    resamples: np.random.Generator
    subsets: np.random.Generator

    @classmethod
    def of_block(cls, design: Design, block: int, size: int, *, draws: int, seed: int) -> Batch:
        """Draw the first `size` data sets of a block."""
        return cls(
            draw_block(design, block, seed=seed)[:size],
            draws,
            stream(seed, f"resamples: {design.key}", block),
            stream(seed, f"subsets: {design.key}", block),
        )

    @property
    def n(self) -> int:
        """Subjects."""
        return int(self.values.shape[-2])

    @functools.cached_property
    def change(self) -> Floats:
        """Last less first occasion, (D, n)."""
        return np.asarray(self.values[..., -1] - self.values[..., 0])

    @functools.cached_property
    def ends(self) -> Floats:
        """First and last occasion, (D, n, 2)."""
        return np.asarray(self.values[..., [0, -1]])

    @functools.cached_property
    def resampled(self) -> dict[str, Resampled]:
        """Every estimator of `ESTIMATORS` on the same resamples."""
        # rank scores within subjects move with their rows
        rows = np.concatenate([self.values, rank_scores(self.values)], axis=-1)
        drawn: dict[str, list[Pair]] = {name: [] for name in ESTIMATORS}
        for each in rows:
            (numbers,) = bootstrap.resampled_rows(self.resamples, self.n, self.draws, self.draws)
            samples = bootstrap.taken(each, numbers)
            for name, estimator in ESTIMATORS.items():
                drawn[name].append(estimator(samples))
        found = {}
        for name, estimator in ESTIMATORS.items():
            observed, se = estimator(rows)
            values, errors = (np.stack(part) for part in zip(*drawn[name], strict=True))
            left_out = bootstrap.jackknife(rows, _first_of(estimator))
            found[name] = Resampled(observed, se, values, errors, left_out)
        return found


# ── estimators that are resampled: (..., n, 2k) -> values and standard errors (..., m) ────────
# columns: the k occasions, then the k rank scores of each subject


def _first_of(estimator: Callable[[Floats], Pair]) -> Callable[[Floats], Floats]:
    return lambda rows: estimator(rows)[0]


def _occasions(rows: Floats) -> Floats:
    return rows[..., : rows.shape[-1] // 2]


def _gaps(rows: Floats) -> Floats:
    return np.asarray(_occasions(rows)[..., -1] - rows[..., 0])


def mean_and_error(gaps: Floats) -> Pair:
    """Return mean and standard error of differences (..., n, m)."""
    n = gaps.shape[-2]
    return gaps.mean(axis=-2), gaps.std(axis=-2, ddof=1) / math.sqrt(n)


def _trimmed(rows: Floats) -> Pair:
    value, error = trimmed.difference_trimmed_mean(_gaps(rows), TRIM)
    return value[..., None], error[..., None]


def _no_error(value: Floats) -> Pair:
    return value[..., None], np.full((*value.shape, 1), np.nan)


ESTIMATORS: dict[str, Callable[[Floats], Pair]] = {
    "mean": lambda rows: mean_and_error(_gaps(rows)[..., None]),
    "trimmed mean": _trimmed,
    "means": lambda rows: mean_and_error(_occasions(rows)[..., 1:] - rows[..., :1]),
    "robust standardized difference": lambda rows: _no_error(
        effect_sizes.robust_standardized(_gaps(rows), TRIM)
    ),
    "Kendall's W": lambda rows: _no_error(
        effect_sizes.concordance(rows[..., rows.shape[-1] // 2 :])
    ),
}
