"""Times of the null-distribution engine, beside a general permutation test on the same data.

The general test is ``scipy.stats.permutation_test`` with a vectorized statistic and 99,999
rearrangements in batches of 2,000, which suit the cache; the engine is exact where it says so.
Times are the best of three, the ratio is ours over SciPy's. The time of two halves depends on the
observed value: it is longest where the law is densest. Run it as a script:

    python tests/benchmarks/bench_null.py
"""

from __future__ import annotations

import time

import numpy as np
from scipy import stats

from robustrm.kernels.null.engine import tail
from robustrm.kernels.null.forms import centring, linear
from robustrm.kernels.null.tables import permutation_tables, sign_tables

RESAMPLES = 99_999


def timed(function, *args, repeats=3, **options):
    """Result of a call, and its best time."""
    seconds = []
    for _ in range(repeats):
        start = time.perf_counter()
        result = function(*args, **options)
        seconds.append(time.perf_counter() - start)
    return result, min(seconds)


def report(name, engine, general):
    """Print both answers, each a pair of result and seconds."""
    (ours, seconds), (theirs, their_seconds) = engine, general
    left = f"{name:24s} {ours.how:13s} p = {ours.p_value:.5f} {seconds:7.3f} s"
    right = f"scipy p = {theirs.pvalue:.5f} {their_seconds:6.3f} s"
    print(f"{left}   {right}   ratio {seconds / their_seconds:6.2f}", flush=True)


def spread(*samples, axis):
    """Sum of squared deviations of the occasion means, for `scipy.stats.permutation_test`."""
    means = np.stack([sample.mean(axis=axis) for sample in samples])
    return ((means - means.mean(axis=0)) ** 2).sum(axis=0)


def general(columns, statistic=spread):
    return stats.permutation_test(
        columns,
        statistic,
        permutation_type="samples",
        alternative="greater",
        vectorized=True,
        n_resamples=RESAMPLES,
        batch=2_000,
        rng=1,
    )


def centred(rng, n, k, shift):
    scores = rng.standard_gamma(2, size=(n, k)) + np.linspace(0, shift, k)
    return scores - scores.mean(axis=1, keepdims=True)


def compare(name, scores):
    """One table: exact by the engine, Monte Carlo by the general test."""
    ours = timed(tail, permutation_tables(scores), scores.sum(axis=0), centring(scores.shape[1]))
    report(name, ours, timed(general, tuple(scores.T)))


def main():
    rng = np.random.default_rng(2024)
    for n in (10, 12, 14):
        compare(f"means, n = {n}, k = 3", centred(rng, n, 3, 1.2))
    compare("means, n = 7, k = 4", centred(rng, 7, 4, 1.5))
    for n, k in ((30, 3), (20, 4), (30, 4), (12, 5), (8, 6)):
        compare(f"Friedman, n = {n}, k = {k}", stats.rankdata(centred(rng, n, k, 0.7), axis=1))
    flips = rng.standard_gamma(2, size=40) - 1.5
    ours = timed(tail, sign_tables(flips), flips.sum(), linear(1))
    test = stats.permutation_test
    options = {"permutation_type": "samples", "vectorized": True, "n_resamples": RESAMPLES}
    report("sign flip, n = 40", ours, timed(test, (flips,), np.mean, batch=2_000, rng=1, **options))
    for n, k in ((30, 3), (30, 5), (33, 8)):
        scores = centred(rng, n, k, 0.7)
        tables, total = permutation_tables(scores), scores.sum(axis=0)
        size = 1_000_000 if k < 8 else RESAMPLES
        _, seconds = timed(
            tail, tables, total, centring(k), repeats=3, null="monte carlo", draws=size, rng=1
        )
        _, peer = timed(general, tuple(scores.T), repeats=3)
        ours, theirs = size / seconds, RESAMPLES / peer
        print(
            f"Monte Carlo, n = {n}, k = {k}: {ours:,.0f} draws a second, "
            f"scipy {theirs:,.0f}, {ours / theirs:.1f} times"
        )


if __name__ == "__main__":
    main()
