"""One block of simulated studies of one size: which tests reject, how wide the intervals are."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from robustrm.kernels import walsh
from robustrm.kernels.step_adjustment import step_adjusted
from robustrm.simulation import BLOCK, draw, stream
from robustrm.sizing.rejections import by_size, family_p, overall_p, raw_p
from robustrm.sizing.study import Pair, Study

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

# Data sets of a block: a whole number of those that share a stream of values.
SETS = 5 * BLOCK
# Adjustments of the paired t tests beside.
BESIDE = ("bonferroni", "holm")
UNCORRECTED = "uncorrected"
# More of an occasion's values below the limit than this, and no shift is estimated.
_MOSTLY = 0.5
_FACTORS = {"half": 0.5, "root2": math.sqrt(0.5), "limit": 1.0}


@dataclass(frozen=True, slots=True)
class SizingJob:
    """A block of data sets of one number of subjects.

    Parameters
    ----------
    study : Study
    n : int
        Subjects.
    block : int
        Which block, from 0.
    size : int
        How many of its data sets, at most `SETS`.
    seed : int
        Root of all streams.
    """

    study: Study
    n: int
    block: int
    size: int
    seed: int

    @property
    def key(self) -> str:
        """Name everything that decides the result."""
        return f"n={self.n}, block={self.block}, size={self.size}, seed={self.seed}, " + (
            self.study.key
        )

    def stream(self, name: str) -> np.random.Generator:
        """Return a generator that depends on the number of subjects and the block alone."""
        return stream(self.seed, f"{name}: n={self.n}, {self.study.key}", self.block)


def simulated(job: SizingJob) -> dict[str, NDArray[np.generic]]:
    """Simulate a block.

    Parameters
    ----------
    job : SizingJob

    Returns
    -------
    dict of str to ndarray
        ``planned`` (size, pairs), ``omnibus`` (size,), ``bonferroni`` and ``holm`` (paired t,
        size, pairs), ``anova`` and ``uncorrected`` (size,): whether each rejects. ``width``
        (size, pairs): logarithm of high over low of the exact interval on the log scale, high less
        low on the raw one; NaN where there is none.
    """
    study, plan = job.study, job.study.plan
    values, below, present = studies(job)
    rng = job.stream("rearrangements")
    alpha = plan.alpha
    family = family_p(values, present, study.pairs, plan, rng)
    overall = overall_p(values, present, plan.omnibus, tied=study.limit > 0, rng=rng)
    beside = raw_p(values, present, study.pairs, "paired_t", plan, rng)
    found = {"planned": family <= alpha, "omnibus": overall <= alpha}
    found |= {adjust: step_adjusted(beside, adjust) <= alpha for adjust in BESIDE}
    found |= {
        test: overall_p(values, present, test, tied=False, rng=rng) <= alpha
        for test in ("anova", UNCORRECTED)
    }
    widths = [_widths(values, below, present, pair, study) for pair in study.pairs]
    return {**found, "width": np.stack(widths, axis=-1)}


def studies(job: SizingJob) -> tuple[Floats, Bools, Bools]:
    """Draw the data sets of a block on the scale of the plan.

    Parameters
    ----------
    job : SizingJob

    Returns
    -------
    values : ndarray, shape (size, n, k)
        The planned substitute stands where a value lies below the limit.
    below, present : ndarray of bool, shape (size, n, k)
        Which values lie below the limit, and which there are.
    """
    study = job.study
    values = draw(study.design(job.n), job.size, seed=job.seed, start=job.block * SETS)
    below = np.zeros(values.shape, dtype=bool)
    if study.limit:
        # what lay below the limit of its data set was set to it, and is the smallest
        limits = values.min(axis=(1, 2), keepdims=True)
        below = values == limits
        values = np.where(below, _FACTORS[study.plan.substitute] * limits, values)
    if study.scale == "log":
        values = np.log(values)
    return values, below, _present(job)


def _present(job: SizingJob) -> Bools:
    """Draw who is still there: each subject is lost at a later occasion, or not at all."""
    n, k, dropout = job.n, job.study.k, job.study.dropout
    # the whole block is drawn, so that a data set does not depend on how many are asked for
    uniform = job.stream("drop-out").random((SETS, n))[: job.size]
    lost_by = dropout * np.arange(k) / (k - 1)
    return np.asarray(uniform[..., None] >= lost_by)


def _widths(values: Floats, below: Bools, present: Bools, pair: Pair, study: Study) -> Floats:
    """Return the widths of the exact intervals of one comparison, (size,)."""
    plan, places = study.plan, list(pair)
    kept = present[..., places] if plan.missing == "available" else present
    here = np.all(kept, axis=-1)
    together = plan.intervals == "simultaneous"
    level = 1 - plan.alpha / len(study.pairs) if together else plan.level

    def wide(pairs: Floats) -> Floats:
        found = walsh.interval_rank(pairs.shape[-2], level)
        if found is None:
            return np.full(len(pairs), np.nan)
        averages = walsh.walsh_averages(pairs[..., 1] - pairs[..., 0])
        return np.asarray(averages[:, -found.rank] - averages[:, found.rank - 1])

    widths = by_size(values[..., places], here, wide, ())
    if study.limit:
        hidden = (below[..., places] & here[..., None]).sum(axis=1)
        mostly = hidden > _MOSTLY * here.sum(axis=1)[:, None]
        widths[np.any(mostly, axis=1)] = np.nan
    return widths
