"""Bootstrap intervals of all pairwise changes in one run, beside one general call a pair.

The data are invented: 20 subjects on 4 occasions. Six 20% trimmed means of differences get BCa
intervals of 95% from 9,999 resamples: once by ``rm.bootstrap_interval``, where all six share the
resamples, and by six calls of ``scipy.stats.bootstrap`` on paired samples with a vectorized
statistic, once with the same trimmed mean and once with ``scipy.stats.trim_mean``. Times are the
best of fifteen rounds. Limits are compared as shares of SciPy's draws below each: two runs differ
by √2 of the error of one, which is that of z₀ and of the quantile together. Run it as a script:

    python tests/benchmarks/bench_bootstrap.py
"""

from __future__ import annotations

import itertools
import math
import time

import numpy as np
from scipy import special, stats

import robustrm as rm
from robustrm.kernels import bootstrap, location

DRAWS = 9_999
OCCASIONS = ("week 0", "week 2", "week 6", "week 12")
PAIRS = tuple(itertools.combinations(range(4), 2))


def marker():
    """Invent a skewed marker with a modest fall over the occasions."""
    rng = np.random.default_rng(2024)
    level = rng.lognormal(1, 1, size=(20, 1))
    return np.round(level * rng.lognormal(-0.1 * np.arange(4), 0.4, size=(20, 4)), 2)


def trimmed_changes(y):
    """Trimmed means of the differences of every pair, for `rm.bootstrap_interval`."""
    return np.stack([location.trimmed_mean(y[..., b] - y[..., a], 0.2) for a, b in PAIRS], axis=-1)


def same_trimmed_mean(first, second, axis=-1):
    return location.trimmed_mean(np.moveaxis(second - first, axis, -1), 0.2)


def library_trimmed_mean(first, second, axis=-1):
    return stats.trim_mean(second - first, 0.2, axis=axis)


def six_calls(values, statistic, seed=1):
    """SciPy's answer for each pair."""
    return [
        stats.bootstrap(
            (values[:, a], values[:, b]),
            statistic,
            paired=True,
            vectorized=True,
            method="BCa",
            n_resamples=DRAWS,
            rng=seed + i,
        )
        for i, (a, b) in enumerate(PAIRS)
    ]


def timed(ways, repeats=15):
    """Result and best time of each way, all of them in every round: a busy moment hits all."""
    best = dict.fromkeys(ways, math.inf)
    results = {}
    for _ in range(repeats):
        for name, run in ways.items():
            start = time.perf_counter()
            results[name] = run()
            best[name] = min(best[name], time.perf_counter() - start)
    return results, best


def errors(values, ours, theirs):
    """Distances of the twelve limits, in errors of the difference of two runs."""
    left = bootstrap.jackknife(values, trimmed_changes)
    drawn = np.stack([one.bootstrap_distribution for one in theirs], axis=-1)
    ascending = bootstrap.ordered(drawn)
    observed = trimmed_changes(values)
    correction = bootstrap.bca_correction(observed, ascending, left)
    z = float(special.ndtri(0.975))
    sds = [bootstrap.bca_sd(correction, side, DRAWS) * math.sqrt(2) for side in (-z, z)]
    for j, (mine, other) in enumerate(zip(ours, theirs, strict=True)):
        interval = other.confidence_interval
        for sd, limits in zip(
            sds, ((mine.low, interval.low), (mine.high, interval.high)), strict=True
        ):
            below = np.searchsorted(ascending[j], limits) / DRAWS
            yield abs(below[0] - below[1]) / sd[j]


def main():
    values = marker()
    table = rm.OccasionTable.from_array(values, occasions=OCCASIONS)
    one_run = "one run, six BCa intervals"
    same, library = "six calls of scipy, same trimmed mean", "six calls of scipy, its trim_mean"
    results, seconds = timed(
        {
            one_run: lambda: rm.bootstrap_interval(table, trimmed_changes, method="bca", rng=1),
            same: lambda: six_calls(values, same_trimmed_mean),
            library: lambda: six_calls(values, library_trimmed_mean),
        }
    )
    for name, taken in seconds.items():
        ratio = taken / seconds[one_run]
        print(f"{name:40s} {1e3 * taken:7.1f} ms  {ratio:5.1f} times as long")
    ours, theirs = results[one_run], results[library]
    for (a, b), mine, other in zip(PAIRS, ours, theirs, strict=True):
        interval = other.confidence_interval
        print(
            f"{OCCASIONS[b]:>8} − {OCCASIONS[a]:<8} {mine.value:7.3f}  ours {mine.low:7.3f} to "
            f"{mine.high:7.3f}  scipy {interval.low:7.3f} to {interval.high:7.3f}"
        )
    worst = max(errors(values, ours, theirs))
    verdict = "agree" if worst < 3.5 else "DO NOT agree"  # twelve limits
    print(f"limits {verdict} within Monte Carlo error: largest distance {worst:.2f} errors")


if __name__ == "__main__":
    main()
