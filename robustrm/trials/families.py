"""Adjusted p values of all pairs of occasions on many data sets: closed testing, and Holm.

Closed permutation testing tests every partition of the occasions by rearranging within its blocks,
and gives a pair the largest p value over the partitions that join it (Marcus, Peritz & Gabriel
1976; Petrondas & Gabriel 1983). The scores are made once from the whole table. Holm's procedure
takes the exact signed-rank p values of the pairs.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from robustrm._checks import check_choice, check_count
from robustrm.errors import ArgumentError
from robustrm.kernels import scores
from robustrm.kernels.null.shared import shared_permutation_p
from robustrm.methods.closed import joins, partitions_of
from robustrm.simulation import BLOCK, Design, draw_block, stream
from robustrm.trials.p_values import DRAWS, PERMUTED, Progress, signed_rank_exact

Floats = NDArray[np.float64]
Pair = tuple[int, int]

CLOSED: dict[str, Callable[[Floats], Floats]] = {
    "closed sign_flip": scores.mean_scores,
    "closed aligned_ranks": PERMUTED["aligned_ranks"],
}
HOLM = "holm signed_rank"
FAMILIES = (*CLOSED, HOLM)


def all_pairs(k: int) -> list[Pair]:
    """Return all pairs of k occasions."""
    return list(itertools.combinations(range(k), 2))


def adjusted_p_values(
    design: Design,
    datasets: int,
    *,
    families: Sequence[str] = FAMILIES,
    draws: int = DRAWS,
    seed: int,
    progress: Progress | None = None,
) -> Floats:
    """Simulate a design and give the adjusted p values of all pairs by every procedure.

    Parameters
    ----------
    design : Design
        Without a limit of detection: the signed-rank law is the untied one.
    datasets : int
        How many data sets.
    families : sequence of str
        Among `FAMILIES`.
    draws : int, default 999
        Rearrangements of each data set and partition.
    seed : int
        Root of all streams.
    progress : callable, optional
        Called with (data sets done, data sets).

    Returns
    -------
    ndarray, shape (datasets, len(families), pairs)
        Pairs in the order of `all_pairs`.

    Raises
    ------
    ArgumentError
        When the design ties values.
    """
    for family in families:
        check_choice("families", family, FAMILIES)
    check_count("datasets", datasets)
    if design.limit:
        raise ArgumentError(f"`limit` must be 0 for adjusted p values, got {design.limit!r}.")
    found = []
    for block in range(math.ceil(datasets / BLOCK)):
        size = min(BLOCK, datasets - block * BLOCK)
        values = draw_block(design, block, seed=seed)[:size]
        rng = stream(seed, f"partitions: {design.key}", block)
        found.append(_of_block(values, families, draws, rng))
        if progress is not None:
            progress(block * BLOCK + size, datasets)
    return np.concatenate(found)


def _of_block(
    values: Floats, families: Sequence[str], draws: int, rng: np.random.Generator
) -> Floats:
    """Return the adjusted p values of given data sets, (B, families, pairs)."""
    found = {HOLM: holm_p(values)} if HOLM in families else {}
    closed = [family for family in families if family in CLOSED]
    if closed:
        stacked = np.stack([CLOSED[family](values) for family in closed], axis=1)
        p_closed = np.stack([closed_p(each, draws, rng) for each in stacked], axis=1)
        found |= dict(zip(closed, p_closed, strict=True))
    return np.stack([found[family] for family in families], axis=1)


def closed_p(stacked: Floats, draws: int, rng: np.random.Generator) -> Floats:
    """Give the adjusted p values of all pairs by closed permutation testing, one data set.

    Parameters
    ----------
    stacked : ndarray, shape (tests, n, k)
        Row-centred scores of each test; the tests share the rearrangements.
    draws : int
        Rearrangements for each partition.
    rng : numpy.random.Generator

    Returns
    -------
    ndarray, shape (tests, pairs)
    """
    k = stacked.shape[-1]
    pairs = all_pairs(k)
    partitions = partitions_of(pairs, k)
    p_values = np.stack(
        [shared_permutation_p(stacked, draws, rng, blocks=partition) for partition in partitions]
    )
    joining = [[joins(partition, pair) for partition in partitions] for pair in pairs]
    return np.stack([p_values[chosen].max(axis=0) for chosen in joining], axis=1)


def holm_p(values: Floats) -> Floats:
    """Give Holm's adjusted exact signed-rank p values of all pairs, (B, n, k) -> (B, pairs)."""
    pairs = all_pairs(values.shape[-1])
    raw = np.stack([signed_rank_exact(values[..., list(pair)]) for pair in pairs], axis=1)
    # by hand, because the library takes one family at a time, at a tenth of a second each
    order = np.argsort(raw, axis=1)
    factors = np.arange(len(pairs), 0, -1)
    steps = np.maximum.accumulate(factors * np.take_along_axis(raw, order, axis=1), axis=1)
    found = np.empty_like(raw)
    np.put_along_axis(found, order, np.minimum(steps, 1.0), axis=1)
    return found
