"""The kinds of interval whose coverage is simulated, each on many data sets at once.

Every kind is one line of `KINDS`: what it is called, which estimand it is to cover, what it asks of
the data, and the function that gives its limits on the data sets of a block. The functions call
the kernels of the methods. Intervals of one contrast compare the last occasion with the first.

Where BCa or bootstrap-t is not defined the percentile interval stands in its place, as it does in
the method.
"""

from __future__ import annotations

import functools
import itertools
import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np
from scipy import special

from robustrm.kernels import bootstrap, effect_sizes, rank_model, rank_pair, trimmed, walsh
from robustrm.kernels.binomial import clopper_pearson
from robustrm.kernels.noncentral_t import noncentrality_limits
from robustrm.kernels.order_intervals import interpolated_limits, interpolation
from robustrm.kernels.scores import signed_ranks
from robustrm.kernels.signed_rank_share import share_limits
from robustrm.kernels.subset_means import random_subset_means, subset_mean
from robustrm.simulation import SYMMETRIC, TRIM, Errors
from robustrm.trials.batches import Batch, Floats, Pair, mean_and_error

Promise = Literal["exact", "at least", "approximate"]

LEVEL = 0.95
# Subjects up to which the means of all 2ⁿ − 1 subsets bound the sign-flip interval.
ALL_SUBSETS = 20
# Random subsets beyond: the interval is as exact, and a little wider.
SUBSETS = 9_999
# Subjects up to which the subset means of many data sets are listed at once.
_LISTED = 12


# ── limits, (D, m) each ───────────────────────────────────────────────────────────────────────


def _around(value: Floats, error: Floats, df: int) -> Pair:
    """Return t limits of single estimands (D,)."""
    margin = float(special.stdtrit(df, (1 + LEVEL) / 2)) * error
    return (value - margin)[:, None], (value + margin)[:, None]


def _columns(limits: Pair) -> Pair:
    low, high = limits
    return low[:, None], high[:, None]


def _signed_rank(batch: Batch) -> Pair:
    averages = walsh.walsh_averages(batch.change)
    found = walsh.interval_rank(batch.n, LEVEL)
    assert found is not None
    return averages[:, [found.rank - 1]], averages[:, [-found.rank]]


def subsets_of(n: int) -> int:
    """Return of how many subsets the means bound the sign-flip interval."""
    return 2**n - 1 if n <= ALL_SUBSETS else SUBSETS


def flip_rank(n: int) -> int:
    """Return which of the ordered subset means bounds the sign-flip interval."""
    return int((1 - LEVEL) / 2 * (subsets_of(n) + 1) * (1 + 1e-12))


def _sign_flip(batch: Batch) -> Pair:
    n, rank = batch.n, flip_rank(batch.n)
    if n <= _LISTED:
        members = np.array(list(itertools.product((0.0, 1.0), repeat=n)))[1:]
        means = np.sort(batch.change @ members.T / members.sum(axis=1), axis=-1)
        return means[:, [rank - 1]], means[:, [-rank]]
    if n <= ALL_SUBSETS:
        low = [subset_mean(d, rank) for d in batch.change]
        high = [-subset_mean(-d, rank) for d in batch.change]
        return _columns((np.array(low), np.array(high)))
    means = np.stack([random_subset_means(d, SUBSETS, batch.subsets) for d in batch.change])
    return means[:, [rank - 1]], means[:, [-rank]]


def _paired_t(batch: Batch) -> Pair:
    value, error = mean_and_error(batch.change[..., None])
    return _around(value[:, 0], error[:, 0], batch.n - 1)


def _trimmed_difference(batch: Batch) -> Pair:
    shift = trimmed.difference_trimmed_mean(batch.change, TRIM)
    return _around(*shift, trimmed.left(batch.n, TRIM) - 1)


def _trimmed_pair(batch: Batch) -> Pair:
    shift = trimmed.trimmed_mean_difference(batch.ends, TRIM)
    return _around(*shift, trimmed.left(batch.n, TRIM) - 1)


def _median(batch: Batch) -> Pair:
    found = interpolation(batch.n, LEVEL)
    assert found is not None
    return _columns(interpolated_limits(batch.change, found))


def _fall(batch: Batch) -> Pair:
    fell = np.count_nonzero(batch.change < 0, axis=-1)
    return _columns(clopper_pearson(fell, batch.n, LEVEL))


def _rank_biserial(batch: Batch) -> Pair:
    size, sign = np.abs(batch.change), np.sign(batch.change)
    rises = np.maximum(signed_ranks(size, sign), 0).sum(axis=-1) / 2
    low, high = _share_table(batch.n)
    place = rises.astype(np.int64)
    return _columns((2 * low[place] - 1, 2 * high[place] - 1))


@functools.lru_cache(maxsize=8)
def _share_table(n: int) -> Pair:
    """Return the limits of the share that rises for every rank sum, without ties."""
    sums = np.arange(n * (n + 1) // 2 + 1)
    return share_limits(np.arange(1, n + 1), sums, sums, LEVEL)


def _rank_pair(batch: Batch) -> Pair:
    placements = rank_pair.swap_columns(batch.ends).sum(axis=-1)
    quantile = float(special.stdtrit(batch.n - 1, (1 + LEVEL) / 2))
    value, error = rank_pair.effect_of(placements), rank_pair.error_of(placements)
    return _columns(rank_model.logit_interval(value, error, quantile))


def _rank_anova(batch: Batch) -> Pair:
    effects = rank_model.relative_effects(rank_model.overall_midranks(batch.values))
    quantile = float(special.stdtrit(batch.n - 1, (1 + LEVEL) / 2))
    errors = rank_model.effect_errors(batch.values)
    low, high = rank_model.effect_intervals(effects, errors, quantile)
    return low[:, -1:], high[:, -1:]


def _d_z(batch: Batch) -> Pair:
    t = effect_sizes.standardized(batch.change) * math.sqrt(batch.n)
    low, high = noncentrality_limits(t, batch.n - 1, LEVEL)
    return _columns((low / math.sqrt(batch.n), high / math.sqrt(batch.n)))


def _d_av(batch: Batch) -> Pair:
    value, error = effect_sizes.average_standardized(batch.ends)
    margin = float(special.ndtri((1 + LEVEL) / 2)) * error
    return _columns((value - margin, value + margin))


def _percentile(batch: Batch, name: str) -> Pair:
    found = bootstrap.percentile(batch.resampled[name].drawn, LEVEL)
    return found.low, found.high


def _or_percentile(batch: Batch, name: str, limits: bootstrap.Limits) -> Pair:
    low, high = _percentile(batch, name)
    none = limits.degenerate
    return np.where(none, low, limits.low), np.where(none, high, limits.high)


def _bca(batch: Batch, name: str) -> Pair:
    it = batch.resampled[name]
    return _or_percentile(batch, name, bootstrap.bca(it.observed, it.drawn, it.left_out, LEVEL))


def _bootstrap_t(batch: Batch, name: str) -> Pair:
    it = batch.resampled[name]
    limits = bootstrap.bootstrap_t(it.observed, it.se, it.drawn, it.drawn_se, LEVEL)
    return _or_percentile(batch, name, limits)


def _simultaneous(batch: Batch) -> Pair:
    it = batch.resampled["means"]
    found = bootstrap.simultaneous_t(it.observed, it.se, it.drawn, it.drawn_se, LEVEL)
    return found.low, found.high


def _robust_standardized(batch: Batch) -> Pair:
    name = "robust standardized difference"
    return _holding(_percentile(batch, name), batch.resampled[name].observed)


def _kendall_w(batch: Batch) -> Pair:
    it = batch.resampled["Kendall's W"]
    limits = bootstrap.percentile(it.drawn, LEVEL)
    low, high = (
        np.clip(effect_sizes.less_bias(limit, it.observed, batch.n), 0, 1)
        for limit in (limits.low, limits.high)
    )
    # all subjects rank alike: no resample differs, and an exact bound is given
    low = np.where(limits.degenerate, effect_sizes.agreement_limit(batch.n, LEVEL), low)
    high = np.where(limits.degenerate, 1.0, high)
    return _holding((low, high), np.minimum(it.observed, 1.0))


def _holding(limits: Pair, value: Floats) -> Pair:
    """Widen an interval that misses its estimate until it ends there, as the effect sizes do."""
    low, high = limits
    return np.minimum(low, value), np.maximum(high, value)


# ── the list ──────────────────────────────────────────────────────────────────────────────────

LAWS: tuple[Errors, ...] = ("normal", "t3", "contaminated", "lognormal")


@dataclass(frozen=True, slots=True)
class Kind:
    """One kind of interval.

    Parameters
    ----------
    name : str
        The method that gives it.
    estimand : str
        What it is to cover, a name of `truths`.
    asks : str
        What it asks of the data beyond independent subjects.
    promise : {"exact", "at least", "approximate"}
        Whether it promises its level, at least its level, or its level in large samples, where
        what it asks for is given.
    laws : tuple of str
        The laws under which it is given.
    limits : callable
        Batch -> limits (D, m) and (D, m); m estimands are covered together.
    least : int
        Fewest subjects it is given for.
    is_resampled : bool
        Whether it comes from bootstrap resamples.
    stated : callable
        Level that the interval states, from the number of subjects.
    """

    name: str
    estimand: str
    asks: str
    promise: Promise
    laws: tuple[str, ...]
    limits: Callable[[Batch], Pair]
    least: int = 6
    is_resampled: bool = False
    stated: Callable[[int], float] = lambda n: LEVEL


def _signed_rank_level(n: int) -> float:
    found = walsh.interval_rank(n, LEVEL)
    return math.nan if found is None else found.level


def _sign_flip_level(n: int) -> float:
    return 1 - 2 * flip_rank(n) / (subsets_of(n) + 1)


def _bootstraps(estimand: str, asks: str) -> tuple[Kind, ...]:
    """Return the three bootstrap intervals of one estimand."""
    ways: dict[str, Callable[[Batch, str], Pair]] = {
        "percentile": _percentile,
        "BCa": _bca,
        "bootstrap-t": _bootstrap_t,
    }

    def of_estimand(way: Callable[[Batch, str], Pair]) -> Callable[[Batch], Pair]:
        return lambda batch: way(batch, estimand)

    return tuple(
        Kind(
            f"bootstrap_interval, {way}",
            estimand,
            asks,
            "approximate",
            LAWS,
            of_estimand(limits),
            is_resampled=True,
        )
        for way, limits in ways.items()
    )


_SYMMETRY = "symmetric differences"
_VARIANCE = "a finite variance"
KINDS: tuple[Kind, ...] = (
    Kind("signed_rank", "pseudo-median", _SYMMETRY, "exact", SYMMETRIC, _signed_rank,
         stated=_signed_rank_level),
    Kind("sign_flip", "mean", _SYMMETRY, "exact", SYMMETRIC, _sign_flip, stated=_sign_flip_level),
    Kind("paired_t", "mean", "normal differences", "exact", ("normal",), _paired_t),
    *_bootstraps("mean", _VARIANCE),
    Kind("trimmed_difference", "trimmed mean", "nothing more", "approximate", LAWS,
         _trimmed_difference),
    *_bootstraps("trimmed mean", "nothing more"),
    Kind("trimmed_pair", "difference of trimmed means", "nothing more", "approximate", LAWS,
         _trimmed_pair),
    Kind("median_difference", "median", "nothing more", "approximate", LAWS, _median),
    Kind("bootstrap_interval, simultaneous", "means", _VARIANCE, "approximate", LAWS,
         _simultaneous, is_resampled=True),
    Kind("probability_of_fall", "probability of a fall", "nothing more", "at least", LAWS, _fall),
    Kind("rank_biserial", "rank-biserial correlation", "a shift of a symmetric law", "at least",
         SYMMETRIC, _rank_biserial),
    Kind("rank_pair", "relative effect", "nothing more", "approximate", LAWS, _rank_pair),
    Kind("rank_anova", "relative effect of the last occasion", "nothing more", "approximate", LAWS,
         _rank_anova),
    Kind("kendall_w", "Kendall's W", "nothing more", "approximate", LAWS, _kendall_w,
         is_resampled=True),
    Kind("robust_standardized_difference", "robust standardized difference", "nothing more",
         "approximate", LAWS, _robust_standardized, least=10, is_resampled=True),
    Kind("standardized_mean_difference", "d_z", "normal differences", "exact",
         ("normal",), _d_z),
    Kind("standardized_mean_difference", "d_av", "normal pairs", "approximate", ("normal",), _d_av),
)  # fmt: skip
