"""What the engine hands back: one tail, or the whole law."""

from __future__ import annotations

import math
import sys
from dataclasses import dataclass
from typing import Literal

import numpy as np

from robustrm.kernels.null.tables import Array

How = Literal[
    "sorted sums",
    "two halves",
    "convolution",
    "sorted halves",
    "every pair",
    "corner",
    "monte carlo",
    "importance sampling",
    "saddlepoint",
]
Null = Literal["exact", "monte carlo", "importance sampling", "saddlepoint"]


@dataclass(frozen=True)
class Tail:
    """Probability, under the null, of a statistic at least as extreme as the observed one.

    Attributes
    ----------
    p_value : float
        NaN if a score is not finite, or if an exact answer was demanded beyond the budget.
    null : {"exact", "monte carlo", "importance sampling", "saddlepoint"}
    how : str
        Way of counting: "sorted sums", "two halves", "convolution", "sorted halves", "every pair"
        (of half sums, see `studentized`), "corner" (the few arrangements of a far tail); or the
        name of the null where nothing is counted.
    arrangements : int
        Product over the subjects of their arrangements, nothing fixed and nothing merged.
    log_p : float
        Natural logarithm of p, right where `p_value` has reached the smallest positive float64.
    p_interval : tuple of float or None
        99% interval: Clopper-Pearson of a Monte Carlo p, normal on log p of importance sampling.
    draws : int or None
        Monte Carlo draws, or those of importance sampling.
    effective_sample_size : float or None
        Importance sampling: so many equally weighted draws in the tail would say as much.
    """

    p_value: float
    null: Null
    how: How
    arrangements: int
    log_p: float
    p_interval: tuple[float, float] | None = None
    draws: int | None = None
    effective_sample_size: float | None = None


@dataclass(frozen=True)
class Share:
    """An exact count: `weight` times 2^`exponent` arrangements out of `total`, `sides` times."""

    weight: float
    exponent: int
    total: int
    sides: int = 1

    @property
    def log_p(self) -> float:
        """Natural logarithm of the probability."""
        if self.weight == 0:
            return -math.inf
        whole = math.log(self.total / 2**self.exponent)
        return min(0.0, math.log(self.weight) - whole + math.log(self.sides))

    @property
    def p_value(self) -> float:
        """The probability, kept above zero where float64 would underflow."""
        whole: float = self.total / 2**self.exponent
        share = min(1.0, self.sides * self.weight / whole)
        return share if self.weight == 0 else max(share, sys.float_info.min)


@dataclass(frozen=True, eq=False)
class Law:
    """Every attainable value of the statistic, ascending, with its probability.

    Attributes
    ----------
    values : ndarray, shape (v,)
    weights : ndarray, shape (v,)
        Numbers of arrangements divided by 2^`exponent`; their sum stands for `total`.
    slack : float
        Half the step between values: an observed value this near counts as equal.
    """

    values: Array
    weights: Array
    exponent: int
    total: int
    slack: float

    @property
    def probabilities(self) -> Array:
        """Probability of each value, (v,)."""
        whole: float = self.total / 2**self.exponent
        return self.weights / whole

    def at_least(self, value: float) -> Share:
        """Count the arrangements whose statistic is `value` or more."""
        weight = self.weights[self.values >= value - self.slack].sum()
        return Share(float(weight), self.exponent, self.total)

    def at_most(self, value: float) -> Share:
        """Count the arrangements whose statistic is `value` or less."""
        weight = self.weights[self.values <= value + self.slack].sum()
        return Share(float(weight), self.exponent, self.total)


def make_law(values: Array, weights: Array, exponent: int, total: int, slack: float) -> Law:
    """Merge equal values of the statistic into a law with read-only arrays."""
    distinct, inverse = np.unique(values, return_inverse=True)
    merged = np.bincount(inverse, weights).astype(np.float64)
    distinct.flags.writeable = merged.flags.writeable = False
    return Law(distinct, merged, exponent, total, slack)
