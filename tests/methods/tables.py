"""Tables and strategies that the tests of the methods share."""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from fractions import Fraction
from typing import TypeVar

import numpy as np
from hypothesis import strategies as st
from numpy.typing import ArrayLike

import robustrm as rm

LABELS = ("week 0", "week 2", "week 6", "week 12", "week 24", "week 52")
PAIR = LABELS[:2]


def raw(values: ArrayLike, **options) -> rm.OccasionTable:
    """Make a raw-scale table with the usual labels."""
    return rm.OccasionTable.from_array(
        values, occasions=LABELS[: np.shape(values)[1]], marker="ferritin", unit="µg/L", **options
    )


def pair_of(differences: Sequence[float], base: float = 1000) -> rm.OccasionTable:
    """Make a table of two occasions whose differences (second − first) are the ones given."""
    return raw([[base, base + d] for d in differences])


T = TypeVar("T")
N, K = st.integers(2, 8), st.integers(2, 4)


def present(value: T | None) -> T:
    """Return what must be there."""
    assert value is not None
    return value


def tables(n=N, k=K, least=1, most=9):
    """Whole values in a small range: ties within and between subjects are common."""
    cell = st.integers(least, most)
    return st.tuples(n, k).flatmap(
        lambda shape: st.lists(
            st.lists(cell, min_size=shape[1], max_size=shape[1]),
            min_size=shape[0],
            max_size=shape[0],
        )
    )


MANY, OCCASIONS = st.integers(3, 12), st.integers(3, 5)


def measured(n=MANY, k=OCCASIONS):
    """Values with three decimals over five orders of magnitude, as a skewed marker has them."""
    cell = st.integers(10, 10**6).map(lambda units: units / 1000)
    return st.tuples(n, k).flatmap(
        lambda shape: st.lists(
            st.lists(cell, min_size=shape[1], max_size=shape[1]),
            min_size=shape[0],
            max_size=shape[0],
        )
    )


def differences(most_n: int, size: int = 6, least_n: int = 1):
    """Whole differences in a small range: ties and zeros are common."""
    return st.lists(st.integers(-size, size), min_size=least_n, max_size=most_n)


def untied(least_n: int, most_n: int):
    """Whole differences without ties in size and without zeros."""
    sizes = st.lists(st.integers(1, 10**5), min_size=least_n, max_size=most_n, unique=True)
    return sizes.flatmap(
        lambda values: st.lists(
            st.sampled_from((-1, 1)), min_size=len(values), max_size=len(values)
        ).map(lambda signs: [a * b for a, b in zip(values, signs, strict=True)])
    )


def twice_ranks(values: Sequence[float]) -> list[int]:
    """Twice the mid-ranks, by counting: 1 + 2 (number smaller) + (number equal, itself too)."""
    return [sum(2 * (w < v) + (w == v) for w in values) + 1 for v in values]


def share(hits: int, total: int) -> float:
    """Return an exact proportion as the nearest float."""
    return float(Fraction(int(hits), int(total)))


def row_orders(row: Sequence[int]) -> np.ndarray:
    """Every arrangement of a row, equal ones as often as they occur."""
    return np.array(list(itertools.permutations(row)), dtype=np.int16)
