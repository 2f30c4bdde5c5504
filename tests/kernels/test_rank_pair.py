"""Placements and swaps of two occasions: against ranks, loops and every swap done by hand."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from robustrm.kernels.rank_pair import effect_of, error_of, statistic_of, swap_columns
from tests.methods.tables import tables

PAIRS = tables(st.integers(2, 7), st.just(2), most=8)


def placements(rows):
    """Z_i by overall and within-occasion ranks, as Munzel & Brunner (2002) write it."""
    first, second = np.transpose(rows)
    n = len(rows)
    overall = stats.rankdata([*first, *second])
    within = np.r_[stats.rankdata(first), stats.rankdata(second)]
    placed = (overall - within) / n
    return placed[n:] - placed[:n]


@pytest.mark.reference
@pytest.mark.property
@given(rows=PAIRS)
def test_every_pattern_of_swaps_gives_the_placements_of_the_swapped_table(rows):
    columns = swap_columns(np.array(rows, dtype=float))
    for signs in itertools.product((1, -1), repeat=len(rows)):
        swapped = [row if sign > 0 else row[::-1] for row, sign in zip(rows, signs, strict=True)]
        expected = 2 * len(rows) * placements(swapped)
        np.testing.assert_allclose(columns @ signs, expected, atol=1e-9)


@pytest.mark.property
@given(rows=PAIRS)
def test_effect_error_and_statistic_are_those_of_the_definition(rows):
    found = swap_columns(np.array(rows, dtype=float)).sum(axis=-1)
    n = len(rows)
    beats = [(y > x) + (y == x) / 2 for x, _ in rows for _, y in rows]
    p = sum(beats) / n**2
    z = placements(rows)
    assert effect_of(found) == pytest.approx(p, abs=1e-14)
    assert error_of(found) == pytest.approx(z.std(ddof=1) / math.sqrt(n), abs=1e-9)
    if np.ptp(z) > 1e-9:
        expected = math.sqrt(n) * (p - 0.5) / z.std(ddof=1)
        assert statistic_of(found) == pytest.approx(expected, abs=1e-12)


@pytest.mark.parametrize(
    ("rows", "expected"),
    [
        ([[1, 5], [2, 6], [3, 7]], math.inf),  # all above
        ([[5, 1], [6, 2], [7, 3]], -math.inf),
        ([[1, 2], [3, 4], [5, 6]], math.inf),  # in step
        ([[4, 4], [4, 4]], 0.0),
    ],
)
def test_without_spread_the_statistic_is_infinite_or_zero(rows, expected):
    found = swap_columns(np.array(rows, dtype=float)).sum(axis=-1)
    assert error_of(found) == 0
    assert statistic_of(found) == expected


def test_many_tables_at_once_are_the_tables_one_by_one():
    values = np.random.default_rng(2).integers(1, 9, size=(3, 4, 6, 2)).astype(float)
    columns = swap_columns(values)
    assert columns.shape == (3, 4, 6, 6)
    np.testing.assert_array_equal(columns[2, 1], swap_columns(values[2, 1]))
    assert statistic_of(columns.sum(axis=-1)).shape == (3, 4)
