"""All effect sizes of an analysis: by kind, then by planned contrast."""

from __future__ import annotations

import itertools
from collections.abc import Callable
from typing import Any
from zlib import crc32

import numpy as np

from robustrm.errors import DataError, TooFewError
from robustrm.methods.additive import Rng
from robustrm.methods.effects.all_occasions import (
    ALL,
    RELATIVE,
    W,
    kendall_w,
    relative_effects,
)
from robustrm.methods.effects.direction import probability_of_fall
from robustrm.methods.effects.effect import Effect
from robustrm.methods.effects.location import (
    geometric_mean_ratio,
    median_difference,
    percent_change,
)
from robustrm.methods.effects.ranks import rank_biserial
from robustrm.methods.effects.standardized import (
    COHEN,
    ROBUST,
    robust_standardized_difference,
    standardized_mean_difference,
)
from robustrm.results import FollowUps, Note
from robustrm.table import OccasionTable

Estimator = Callable[..., Effect]


def effect_sizes(
    table: OccasionTable,
    primary: FollowUps,
    *,
    raw: OccasionTable | None = None,
    substitute: str = "half",
    trim: float = 0.2,
    rng: Rng = None,
    draws: int = 9999,
) -> tuple[Effect, ...]:
    """Return the effect sizes of the planned contrasts, then those about all occasions.

    Parameters
    ----------
    table : OccasionTable
        The data on the plan's scale.
    primary : FollowUps
        The planned contrasts. Those without a subject are left out: their row says so.
    raw : OccasionTable, optional
        The data on the raw scale: Cohen's d is then given on both scales, as the parametric
        tests are.
    substitute : {"half", "root2", "limit"}, default "half"
        What enters for a value below the limit where a size is needed.
    trim : float, default 0.2
        Share cut by the robust standardized difference.
    rng : Generator, SeedSequence, int or None
        Root of the random streams. Every effect size draws from its own, so that one more
        contrast changes no other number.
    draws : int, default 9999
        Bootstrap resamples.

    Returns
    -------
    tuple of Effect
        By kind of estimand. One that cannot be given keeps its place, with the reason.
    """
    level, root = primary.level, _root(rng)
    contrasts = [c for c in primary if c.result.n_subjects > 0]

    def each(estimator: Estimator, on: OccasionTable = table, **options: Any) -> list[Effect]:
        return [estimator(on, c.first, c.second, level=level, **options) for c in contrasts]

    found = each(probability_of_fall)
    for c in contrasts:
        zeros = c.result.details.get("zeros", "pratt")
        options: dict[str, Any] = {"zeros": zeros, "substitute": substitute, "level": level}
        found.append(rank_biserial(table, c.first, c.second, **options))
    for estimator in _LOCATIONS[table.scale]:
        found += each(estimator, substitute=substitute)
    for c in contrasts:
        options = {"trim": trim, "substitute": substitute, "level": level, "draws": draws}
        seed = _stream(root, ROBUST.name, c.first, c.second)
        found.append(robust_standardized_difference(table, c.first, c.second, **options, rng=seed))
    for standardizer, scaled in itertools.product(COHEN, _parametric_scales(table, raw)):
        options = {"standardizer": standardizer, "substitute": substitute}
        found += each(standardized_mean_difference, scaled, **options)
    return (*found, *_all_occasions(table, level, root, draws))


_LOCATIONS: dict[str, tuple[Estimator, ...]] = {
    "raw": (median_difference,),
    "log": (median_difference, geometric_mean_ratio, percent_change),
}


def _parametric_scales(table: OccasionTable, raw: OccasionTable | None) -> list[OccasionTable]:
    """Return the table, and that on the other scale; logs of zeros there are none."""
    if raw is None:
        return [table]
    try:
        return [raw, raw.log()]
    except DataError:
        return [raw]


def _all_occasions(
    table: OccasionTable,
    level: float,
    root: np.random.SeedSequence,
    draws: int,
) -> list[Effect]:
    """Return relative effects and Kendall's W, or why they are not given."""
    effects: list[Effect] = []
    n = table.complete().n_subjects
    try:
        effects += relative_effects(table, level=level)
    except TooFewError as error:
        reason = Note("too few subjects", str(error))
        effects.append(RELATIVE.not_given(ALL, n, None, reason))
    try:
        seed = _stream(root, W.name)
        effects.append(kendall_w(table, level=level, draws=draws, rng=seed))
    except TooFewError as error:
        reason = Note("too few subjects", str(error))
        effects.append(W.not_given(ALL, n, None, reason))
    return effects


def _root(rng: Rng) -> np.random.SeedSequence:
    if isinstance(rng, np.random.SeedSequence):
        return rng
    if isinstance(rng, np.random.Generator):
        return np.random.SeedSequence(int(rng.integers(2**63)))
    return np.random.SeedSequence(rng)


def _stream(root: np.random.SeedSequence, *words: str) -> np.random.SeedSequence:
    key = crc32("\x1f".join(words).encode())
    return np.random.SeedSequence(root.entropy, spawn_key=(*root.spawn_key, key))
