"""Trimmed-mean tests by plain loops over lists, written from the printed formulas.

Wilcox, *Introduction to Robust Estimation and Hypothesis Testing*: F and its degrees of freedom
in chapter 8 (with v_jk, A and B as printed there, not by contrasts), dependent trimmed means in
chapter 5, one sample in chapters 3 and 4. Chapters and formulas from memory.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from fractions import Fraction
from typing import NamedTuple

Rows = Sequence[Sequence[float]]


def share_of(trim: float) -> Fraction:
    """Return the share as the decimal that it is written as."""
    return Fraction(str(trim))


def cut(n: int, trim: float) -> int:
    return math.floor(share_of(trim) * n)


def trimmed_mean(sample: Sequence[float], trim: float) -> float:
    g = cut(len(sample), trim)
    kept = sorted(sample)[g : len(sample) - g]
    return math.fsum(kept) / len(kept)


def winsorized(sample: Sequence[float], trim: float) -> list[float]:
    g = cut(len(sample), trim)
    ordered = sorted(sample)
    low, high = ordered[g], ordered[len(sample) - g - 1]
    return [low if x < low else high if x > high else x for x in sample]


def covariance(a: Sequence[float], b: Sequence[float]) -> float:
    mean_a, mean_b = math.fsum(a) / len(a), math.fsum(b) / len(b)
    products = [(x - mean_a) * (y - mean_b) for x, y in zip(a, b, strict=True)]
    return math.fsum(products) / (len(a) - 1)


class WithinSubjectF(NamedTuple):
    f: float
    qc: float
    qe: float
    box: float
    hf: float
    df: tuple[float, float]


def within_subject_f(rows: Rows, trim: float) -> WithinSubjectF:
    n, k = len(rows), len(rows[0])
    h = n - 2 * cut(n, trim)
    columns = [list(column) for column in zip(*rows, strict=True)]
    means = [trimmed_mean(column, trim) for column in columns]
    grand = math.fsum(means) / k
    qc = h * math.fsum((mean - grand) ** 2 for mean in means)
    w = [winsorized(column, trim) for column in columns]
    by_occasion = [math.fsum(column) / n for column in w]
    by_subject = [math.fsum(w[j][i] for j in range(k)) / k for i in range(n)]
    overall = math.fsum(by_occasion) / k
    qe = math.fsum(
        (w[j][i] - by_occasion[j] - by_subject[i] + overall) ** 2
        for i in range(n)
        for j in range(k)
    )
    f = (qc / (k - 1)) / (qe / ((h - 1) * (k - 1))) if qe > 1e-20 else math.nan
    box = _box(w)
    below = (k - 1) * (n - 1 - (k - 1) * box)
    hf = min(1.0, max(1 / (k - 1), (n * (k - 1) * box - 2) / below)) if below > 1e-9 else 1.0
    return WithinSubjectF(f, qc, qe, box, hf, ((k - 1) * hf, (k - 1) * (h - 1) * hf))


def _box(w: Rows) -> float:
    k = len(w)
    v = [[covariance(w[j], w[m]) for m in range(k)] for j in range(k)]
    overall = math.fsum(itertools.chain.from_iterable(v)) / k**2
    diagonal = math.fsum(v[j][j] for j in range(k)) / k
    rows = [math.fsum(v[j]) / k for j in range(k)]
    a = k**2 * (diagonal - overall) ** 2 / (k - 1)
    squares = math.fsum(x * x for x in itertools.chain.from_iterable(v))
    b = squares - 2 * k * math.fsum(r * r for r in rows) + k**2 * overall**2
    return a / b if b > 1e-20 else math.nan


class Shift(NamedTuple):
    value: float
    error: float
    df: int


def trimmed_pair(first: Sequence[float], second: Sequence[float], trim: float) -> Shift:
    """Return second − first with √(d_1 + d_2 − 2d_12)."""
    n = len(first)
    h = n - 2 * cut(n, trim)
    w1, w2 = winsorized(first, trim), winsorized(second, trim)
    d1, d2, d12 = (
        (n - 1) * covariance(a, b) / (h * (h - 1)) for a, b in ((w1, w1), (w2, w2), (w1, w2))
    )
    value = trimmed_mean(second, trim) - trimmed_mean(first, trim)
    return Shift(value, math.sqrt(max(d1 + d2 - 2 * d12, 0.0)), h - 1)


def one_sample(sample: Sequence[float], trim: float) -> Shift:
    """Return the trimmed mean with √(SSD_w / (h(h − 1)))."""
    n = len(sample)
    h = n - 2 * cut(n, trim)
    w = winsorized(sample, trim)
    squares = (n - 1) * covariance(w, w)
    return Shift(trimmed_mean(sample, trim), math.sqrt(squares / (h * (h - 1))), h - 1)


def nominal_error(sample: Sequence[float], trim: float) -> float:
    """Return s_w / ((1 − 2γ)√n)."""
    w = winsorized(sample, trim)
    return math.sqrt(covariance(w, w)) / ((1 - 2 * trim) * math.sqrt(len(sample)))


def bootstrap_t(rows: Rows, trim: float) -> tuple[int, int, int]:
    """Count, over all nⁿ resamples of whole rows: F* >= F, Qe* = 0, and all of them.

    Resamples without residual variation count among the first.
    """
    n, k = len(rows), len(rows[0])
    observed = within_subject_f(rows, trim).f
    means = [trimmed_mean([row[j] for row in rows], trim) for j in range(k)]
    centred = [[row[j] - means[j] for j in range(k)] for row in rows]
    at_least = flat = total = 0
    for chosen in itertools.product(range(n), repeat=n):
        f = within_subject_f([centred[i] for i in chosen], trim).f
        flat += math.isnan(f)
        at_least += math.isnan(f) or f >= observed * (1 - 1e-9)
        total += 1
    return at_least, flat, total
