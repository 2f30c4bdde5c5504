"""P values of the planned tests on many simulated data sets with gaps and tied values at once.

Pair tests take pairs of values (D, m, 2) and give one p value a data set. Data sets that have lost
different numbers of subjects are tested apart, those with equal numbers together.

The signed-rank test and the sign test are looked up in their exact conditional law: simulated
differences are tied only where both values lie below the limit, where they are zero. Of m
differences of which z are zero, the others then have the ranks z + 1, ..., m under Pratt's rule and
1, ..., m − z where zeros are dropped.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import special

from robustrm.kernels import anova, trimmed
from robustrm.kernels.null.shared import shared_flip_p, shared_permutation_p
from robustrm.kernels.ranks import midranks
from robustrm.kernels.step_adjustment import step_adjusted
from robustrm.methods.closed import joins, partitions_of
from robustrm.plan import Plan
from robustrm.simulation import TRIM
from robustrm.trials.families import CLOSED
from robustrm.trials.p_values import DRAWS, anova_p, p_values_of

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Pair = tuple[int, int]

# Fewer subjects do not test anything.
_LEAST = 2
_CLOSED_SCORES = {name.removeprefix("closed "): score for name, score in CLOSED.items()}


# ── data sets of unequal size ─────────────────────────────────────────────────────────────────


def by_size(
    values: Floats, present: Bools, function: Callable[[Floats], Floats], shape: tuple[int, ...]
) -> Floats:
    """Apply a function to data sets of equal numbers of subjects at a time; NaN below two.

    Parameters
    ----------
    values : ndarray, shape (D, n, c)
    present : ndarray of bool, shape (D, n)
        Which subjects each data set still has.
    function : callable
        (D', m, c) -> (D', *shape).
    shape : tuple of int
        Shape of what the function gives for a data set.

    Returns
    -------
    ndarray, shape (D, *shape)
    """
    found = np.full((len(values), *shape), np.nan)
    counts = present.sum(axis=1)
    for m in np.unique(counts[counts >= _LEAST]).tolist():
        chosen = counts == m
        kept = values[chosen][present[chosen]]
        found[chosen] = function(kept.reshape(-1, m, values.shape[-1]))
    return found


# ── two occasions ─────────────────────────────────────────────────────────────────────────────


def _gaps(pairs: Floats) -> Floats:
    return np.asarray(pairs[..., 1] - pairs[..., 0])


@functools.lru_cache(maxsize=4096)
def _tails(lowest: int, highest: int) -> Floats:
    """Return P(T⁺ >= t), t = 0, 1, ..., where each rank lowest, ..., highest rises or falls."""
    law = np.ones(1)
    for rank in range(lowest, highest + 1):
        longer = np.zeros(law.size + rank)
        longer[: law.size] += law / 2
        longer[rank:] += law / 2
        law = longer
    return np.asarray(np.cumsum(law[::-1])[::-1])


def _sided(above: Floats, below: Floats, alternative: str) -> Floats:
    """Return the p value of two tails, each with the observed value in it."""
    if alternative == "two-sided":
        return np.asarray(np.minimum(1.0, 2 * np.minimum(above, below)))
    return above if alternative == "greater" else below


def signed_rank_p(pairs: Floats, alternative: str, zeros: str) -> Floats:
    """Give the exact signed-rank p values of pairs (D, m, 2) without ties but zeros."""
    gaps = _gaps(pairs)
    m = gaps.shape[-1]
    nil = np.count_nonzero(gaps == 0, axis=-1)
    # the zeros are the smallest and share the first ranks
    ranks = midranks(np.abs(gaps)) - (0 if zeros == "pratt" else nil[:, None])
    rises = np.rint(np.where(gaps > 0, ranks, 0).sum(axis=-1)).astype(np.int64)
    found: Floats = np.ones(len(gaps))
    for z in np.unique(nil[nil < m]).tolist():
        tails = _tails(z + 1, m) if zeros == "pratt" else _tails(1, m - z)
        chosen = nil == z
        observed = rises[chosen]
        # symmetric: P(T⁺ <= t) = P(T⁺ >= largest − t)
        found[chosen] = _sided(tails[observed], tails[tails.size - 1 - observed], alternative)
    return found


def sign_test_p(pairs: Floats, alternative: str, zeros: str) -> Floats:
    """Give the exact sign-test p values; subjects without a change say nothing."""
    gaps = _gaps(pairs)
    rises, falls = (gaps > 0).sum(axis=-1), (gaps < 0).sum(axis=-1)
    moved = rises + falls
    above, below = special.bdtr(falls, moved, 0.5), special.bdtr(rises, moved, 0.5)
    return _sided(np.asarray(above), np.asarray(below), alternative)


def _t_sided(t: Floats, df: int, alternative: str) -> Floats:
    above, below = special.stdtr(df, -t), special.stdtr(df, t)
    return _sided(np.asarray(above), np.asarray(below), alternative)


def paired_t_p(pairs: Floats, alternative: str, zeros: str) -> Floats:
    """Give the p values of the paired t test; NaN for 0/0."""
    gaps = _gaps(pairs)
    m = gaps.shape[-1]
    with np.errstate(invalid="ignore", divide="ignore"):
        t = gaps.mean(axis=-1) / (gaps.std(axis=-1, ddof=1) / math.sqrt(m))
    return _t_sided(t, m - 1, alternative)


def _trimmed_p(shift: trimmed.Shift, m: int, alternative: str) -> Floats:
    with np.errstate(invalid="ignore", divide="ignore"):
        t = shift.value / shift.standard_error
    return _t_sided(t, trimmed.left(m, TRIM) - 1, alternative)


def trimmed_difference_p(pairs: Floats, alternative: str, zeros: str) -> Floats:
    """Give the p values of the trimmed mean of the differences."""
    gaps = _gaps(pairs)
    return _trimmed_p(trimmed.difference_trimmed_mean(gaps, TRIM), gaps.shape[-1], alternative)


def trimmed_pair_p(pairs: Floats, alternative: str, zeros: str) -> Floats:
    """Give the p values of the difference of trimmed means."""
    shift = trimmed.trimmed_mean_difference(pairs, TRIM)
    return _trimmed_p(shift, pairs.shape[-2], alternative)


def sign_flip_p(pairs: Floats, alternative: str, rng: np.random.Generator) -> Floats:
    """Give the Monte Carlo p values of the sign flip of the differences."""
    gaps = _gaps(pairs)
    both = np.array([shared_flip_p(each[None, :, None], DRAWS, rng)[0] for each in gaps])
    if alternative == "two-sided":
        return both
    # the law is symmetric about zero
    rose = gaps.sum(axis=-1) > 0
    return np.where(rose == (alternative == "greater"), both / 2, 1 - both / 2)


PAIR_P: dict[str, Callable[[Floats, str, str], Floats]] = {
    "signed_rank": signed_rank_p,
    "sign_test": sign_test_p,
    "paired_t": paired_t_p,
    "trimmed_difference": trimmed_difference_p,
    "trimmed_pair": trimmed_pair_p,
}


# ── the planned family, and all occasions ─────────────────────────────────────────────────────


def raw_p(
    values: Floats,
    present: Bools,
    pairs: Sequence[Pair],
    test: str,
    plan: Plan,
    rng: np.random.Generator,
) -> Floats:
    """Give the unadjusted p values of a family, (D, pairs); 1 where nothing could be tested."""
    found = []
    for pair in pairs:
        both = present[..., list(pair)]
        kept = np.all(both if plan.missing == "available" else present, axis=-1)

        def tested(chosen: Floats) -> Floats:
            if test == "sign_flip":
                return sign_flip_p(chosen, plan.alternative, rng)
            return PAIR_P[test](chosen, plan.alternative, plan.zeros)

        found.append(by_size(values[..., list(pair)], kept, tested, ()))
    return np.nan_to_num(np.stack(found, axis=-1), nan=1.0)


def family_p(
    values: Floats,
    present: Bools,
    pairs: Sequence[Pair],
    plan: Plan,
    rng: np.random.Generator,
) -> Floats:
    """Give the adjusted p values of the planned family, (D, pairs)."""
    if plan.adjust != "closed":
        return step_adjusted(raw_p(values, present, pairs, plan.pair, plan, rng), plan.adjust)

    def tested(complete: Floats) -> Floats:
        scored = _CLOSED_SCORES[plan.pair](complete)
        return np.stack([_closed(each, pairs, rng) for each in scored])

    kept = np.all(present, axis=-1)
    return np.nan_to_num(by_size(values, kept, tested, (len(pairs),)), nan=1.0)


def _closed(scored: Floats, pairs: Sequence[Pair], rng: np.random.Generator) -> Floats:
    """Return the largest p value over the partitions that join each pair, one data set."""
    partitions = partitions_of(pairs, scored.shape[-1])
    tested = np.array(
        [shared_permutation_p(scored[None], DRAWS, rng, blocks=each)[0] for each in partitions]
    )
    joining = [[joins(partition, pair) for partition in partitions] for pair in pairs]
    return np.array([tested[chosen].max() for chosen in joining])


def overall_p(
    values: Floats, present: Bools, test: str, *, tied: bool, rng: np.random.Generator
) -> Floats:
    """Give the p values of an overall test of the complete subjects, (D,)."""

    def tested(complete: Floats) -> Floats:
        if test == "uncorrected":
            return uncorrected_p(complete)
        if test == "anova":
            return anova_p(complete)
        return p_values_of(
            complete,
            [test],
            draws=DRAWS,
            permutations=rng,
            mirrors=rng,
            resamples=rng,
            tied=tied,
        )[:, 0]

    return np.nan_to_num(by_size(values, np.all(present, axis=-1), tested, ()), nan=1.0)


def uncorrected_p(values: Floats) -> Floats:
    """Give the p values of F on (k − 1) and (n − 1)(k − 1) degrees of freedom: sphericity given."""
    n, k = values.shape[-2:]
    f = anova.sums_of_squares(values).f_ratio(n, k)
    return anova.f_tail(f, k - 1, (n - 1) * (k - 1))
