"""Exact Friedman p against resampled p: time on the same table.

``scipy.stats.permutation_test`` shuffles each subject's ranks over the occasions
(``permutation_type="samples"``) with a vectorized statistic and 99,999 resamples, once in its
default single batch and once in batches of 2,000, which suit the cache; robustrm counts all
arrangements. Times are the best of three. Run it as a script:

    python tests/benchmarks/bench_friedman.py
"""

from __future__ import annotations

import functools
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


def counted(table: rm.OccasionTable) -> float:
    """p by counting all arrangements, with everything else that the test reports."""
    return rm.friedman(table, null="exact").p_value


def resampled(ranks: np.ndarray, batch: int | None) -> float:
    """p of the same statistic by random arrangements."""
    found = stats.permutation_test(
        tuple(ranks.T),
        friedman_statistic,
        permutation_type="samples",
        vectorized=True,
        n_resamples=RESAMPLES,
        alternative="greater",
        rng=np.random.default_rng(1),
        batch=batch,
    )
    return float(found.pvalue)


def seconds(run: Callable[[], float]) -> tuple[float, float]:
    """Return the best time of three runs, and the p value."""
    best, p = np.inf, np.nan
    for _ in range(3):
        start = time.perf_counter()
        p = run()
        best = min(best, time.perf_counter() - start)
    return best, p


def main() -> None:
    """Print the exact answer of each table, then the resampled ones with their ratio of times."""
    print(f"{'n × k':>8}  {'way':<28}{'p':>10}{'seconds':>10}{'ratio':>8}")
    for n, k in SHAPES:
        values = scores_of_change(n, k)
        table = rm.OccasionTable.from_array(values, occasions=[f"week {j}" for j in range(k)])
        ranks = stats.rankdata(values, axis=1)
        ways: dict[str, Callable[[], float]] = {
            "robustrm, exact": functools.partial(counted, table),
            "resampled, one batch": functools.partial(resampled, ranks, None),
            "resampled, batches of 2,000": functools.partial(resampled, ranks, 2_000),
        }
        exact = 0.0
        for way, run in ways.items():
            time_taken, p = seconds(run)
            exact = exact or time_taken
            size = f"{n} × {k}"
            print(f"{size:>8}  {way:<28}{p:>10.3g}{time_taken:>10.3f}{time_taken / exact:>8.1f}")


if __name__ == "__main__":
    main()
