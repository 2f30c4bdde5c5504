"""Invented tables in which it is known what makes two rows disagree; every one from a seed."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

import robustrm as rm

PAIR = ("before", "after")


def of_log_ratios(
    log_ratios: ArrayLike, base: ArrayLike = 50.0, *, subjects: list[str] | None = None
) -> rm.OccasionTable:
    """Return two occasions with the given logarithms of after/before."""
    steps = np.asarray(log_ratios, dtype=float)
    first = np.broadcast_to(np.asarray(base, dtype=float), steps.shape)
    values = np.round(np.stack([first, first * np.exp(steps)], axis=1), 3)
    ids = subjects or [f"P{i + 1}" for i in range(steps.size)]
    return rm.OccasionTable.from_array(
        values, occasions=PAIR, subjects=ids, marker="ferritin", unit="µg/L"
    )


def one_outlier() -> rm.OccasionTable:
    """Thirteen of fourteen fall by about a quarter; P7 rises thirtyfold."""
    rng = np.random.default_rng(7)
    steps = rng.normal(-0.3, 0.05, 14)
    steps[6] = np.log(30)
    return of_log_ratios(steps, rng.uniform(40, 60, 14))


def another_scale() -> rm.OccasionTable:
    """All move by ratios about 0.7, between levels so far apart that two people rule the mean."""
    rng = np.random.default_rng(11)
    base = np.exp(np.linspace(1, 9, 14))
    steps = rng.normal(-0.35, 0.08, 14)
    steps[-2:] = 0.15, -0.05
    return of_log_ratios(steps, base)


def another_limit_value() -> rm.OccasionTable:
    """Twelve fall; three start below the limit and end just above it: by how much they rose is
    the substitute's word."""
    rng = np.random.default_rng(3)
    falls = np.round(
        np.stack([base := rng.uniform(40, 60, 12), base * np.exp(rng.normal(-0.35, 0.05, 12))], 1),
        2,
    )
    rises = np.array([[10, 10.4], [10, 10.5], [10, 10.6]])
    below = np.zeros((15, 2), dtype=bool)
    below[12:, 0] = True
    return rm.OccasionTable.from_array(
        np.concatenate([falls, rises]),
        occasions=PAIR,
        subjects=[f"P{i + 1}" for i in range(15)],
        below=below,
        lower_limit=10,
        marker="ferritin",
        unit="µg/L",
    )


def another_group() -> rm.OccasionTable:
    """P1 to P8 have three occasions and hardly move; P9 to P14 miss the last one and fall."""
    rng = np.random.default_rng(5)
    base = rng.uniform(40, 60, 14)
    steps = np.concatenate([[0.05, -0.04, 0.06, -0.03, 0.02, -0.07, 0.03, -0.05], [-0.5] * 6])
    steps[8:] += rng.normal(0, 0.05, 6)
    third = np.where(np.arange(14) < 8, base * np.exp(rng.normal(0, 0.05, 14)), np.nan)
    values = np.round(np.stack([base, base * np.exp(steps), third], axis=1), 3)
    return rm.OccasionTable.from_array(
        values,
        occasions=["week 0", "week 2", "week 6"],
        subjects=[f"P{i + 1}" for i in range(14)],
    )


def all_fall(n: int = 12) -> rm.OccasionTable:
    """Everybody falls by about a third."""
    rng = np.random.default_rng(1)
    return of_log_ratios(rng.normal(-0.4, 0.08, n), rng.uniform(40, 60, n))


def two_questions() -> rm.OccasionTable:
    """Six of sixteen rise by little, ten fall by much: more than direction has to be asked."""
    rng = np.random.default_rng(2)
    steps = np.concatenate([rng.uniform(0.01, 0.05, 6), rng.uniform(-0.6, -0.3, 10)])
    return of_log_ratios(steps, rng.uniform(40, 60, 16))
