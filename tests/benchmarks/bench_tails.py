"""Time and accuracy of far tails: importance sampling and saddlepoint, beside the exact engine.

One line a table: p and its 99% interval as a factor, effective sample size, seconds, and the exact
p with its seconds where the budget allows it. Last, many signed ranks at once. Run it as a script:

    python tests/benchmarks/bench_tails.py
"""

from __future__ import annotations

import math
import time

import numpy as np

from robustrm.kernels.null.engine import tail
from robustrm.kernels.null.forms import centring, linear
from robustrm.kernels.null.saddlepoint import shared_flip_log_p
from robustrm.kernels.null.tables import permutation_tables, sign_tables


def timed(function, *args, repeats=3, **options):
    """Result of a call, and its best time."""
    seconds = []
    for _ in range(repeats):
        start = time.perf_counter()
        result = function(*args, **options)
        seconds.append(time.perf_counter() - start)
    return result, min(seconds)


def report(name, tables, observed, form, null):
    exact, cost = timed(tail, tables, observed, form, null="exact", repeats=1)
    found, seconds = timed(tail, tables, observed, form, null=null, draws=20_000, rng=1)
    line = f"{name:26s} {found.null:19s} p = {found.p_value:.3e}"
    if found.p_interval is not None:
        factor = found.p_interval[1] / found.p_value
        line += f" x/: {factor:.3f}, effective {found.effective_sample_size:6,.0f}"
    line = f"{line:84s} {1e3 * seconds:7.1f} ms"
    if not math.isnan(exact.p_value):
        error = found.p_value / exact.p_value - 1
        line += f"   exact {exact.p_value:.3e}, {1e3 * cost:7.1f} ms, error {100 * error:+.1f}%"
    print(line, flush=True)


def values(rng, n, k, rise):
    """Skewed values less their subject's mean."""
    drawn = rng.lognormal(0, 0.6, size=(n, k)) * np.exp(np.linspace(0, rise, k))
    return drawn - drawn.mean(axis=1, keepdims=True)


def many_signed_ranks(rng, tests, n):
    ranks = rng.permuted(np.tile(np.arange(1.0, n + 1), (tests, 1)), axis=1)
    scores = ranks * np.where(rng.random((tests, n)) < 0.6, 1, -1)
    _, seconds = timed(shared_flip_log_p, scores)
    each = 1e6 * seconds / tests
    print(f"saddlepoint of {tests:,} signed ranks, n = {n}: {seconds:.2f} s, {each:.0f} µs each")


def main():
    rng = np.random.default_rng(2024)
    sampling = "importance sampling"
    for n, k, rise in ((14, 3, 0.8), (20, 3, 0.5), (20, 3, 1.2), (60, 3, 0.8), (8, 4, 0.5)):
        s = values(rng, n, k, rise)
        name = f"values, {n} x {k}"
        report(name, permutation_tables(s), s.sum(axis=0), centring(k), sampling)
    for n, k in ((20, 4), (20, 5), (15, 6), (12, 7)):
        s = values(rng, n, k, 0.9)
        name = f"values, {n} x {k}"
        report(name, permutation_tables(s), s.sum(axis=0), centring(k), sampling)
    for n, k in ((20, 3), (12, 4), (8, 5)):
        s = values(rng, n, k, 0.9).argsort(axis=1).argsort(axis=1) * 2.0 - (k - 1)
        report(f"ranks, {n} x {k}", permutation_tables(s), s.sum(axis=0), centring(k), sampling)
    for n, k in ((28, 3), (40, 4), (40, 5)):
        s = values(rng, n, k, 0.4)
        report(f"mirrored rows, {n} x {k}", sign_tables(s), s.sum(axis=0), centring(k), sampling)
    for n in (30, 40, 60):
        d = rng.normal(0.5, 1, size=n)
        for null in (sampling, "saddlepoint"):
            report(f"sign flip, n = {n}", sign_tables(d), d.sum(), linear(1), null)
    many_signed_ranks(rng, 10_000, 12)
    many_signed_ranks(rng, 10_000, 30)


if __name__ == "__main__":
    main()
