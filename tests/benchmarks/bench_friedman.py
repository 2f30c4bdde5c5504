"""Exact Friedman p against resampled p: time on the same table.

``scipy.stats.permutation_test`` shuffles each subject's values over the occasions
(``permutation_type="samples"``) with a vectorized statistic and 99,999 resamples; robustrm counts all
arrangements. Times are the best of three (one for the resampling). Run it as a script:

    python tests/benchmarks/bench_friedman.py
"""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np
from scipy import stats

import robustrm as rm

RESAMPLES = 99_999
SHAPES = ((30, 3), (20, 4))


def scores_of_change(n: int, k: int) -> np.ndarray:
    """Invent a skewed marker with a modest fall over the occasions."""
    rng = np.random.default_rng(20240 + n)
    level = rng.lognormal(1, 1, size=(n, 1))
    return np.round(level * rng.lognormal(-0.1 * np.arange(k), 0.4, size=(n, k)), 2)


def friedman_statistic(*samples: np.ndarray, axis: int) -> np.ndarray:
    """Sum of squared rank sums: all that varies over the arrangements of ranks."""
    sums = np.stack([sample.sum(axis=axis) for sample in samples])
    return np.asarray((sums**2).sum(axis=0))


def resampled(ranks: np.ndarray) -> float:
    """p of the same statistic by random arrangements."""
    found = stats.permutation_test(
        tuple(ranks.T),
        friedman_statistic,
        permutation_type="samples",
        vectorized=True,
        n_resamples=RESAMPLES,
        alternative="greater",
        rng=np.random.default_rng(1),
        batch=2_000,
    )
    return float(found.pvalue)


def seconds(run: Callable[[], float], times: int) -> tuple[float, float]:
    """Return the best time of some runs, and the p value."""
    best, p = np.inf, np.nan
    for _ in range(times):
        start = time.perf_counter()
        p = run()
        best = min(best, time.perf_counter() - start)
    return best, p


def main() -> None:
    """Print a line for each shape of table."""
    print(f"{'n × k':>8}{'exact p':>12}{'seconds':>10}{'resampled p':>14}{'seconds':>10}{'ratio':>8}")
    for n, k in SHAPES:
        values = scores_of_change(n, k)
        table = rm.OccasionTable.from_array(values, occasions=[f"week {j}" for j in range(k)])
        ranks = stats.rankdata(values, axis=1)
        exact, p = seconds(lambda t=table: rm.friedman(t, null="exact").p_value, times=3)
        drawn, q = seconds(lambda r=ranks: resampled(r), times=1)
        size = f"{n} × {k}"
        print(f"{size:>8}{p:>12.3g}{exact:>10.3f}{q:>14.3g}{drawn:>10.2f}{drawn / exact:>8.0f}")


if __name__ == "__main__":
    main()
