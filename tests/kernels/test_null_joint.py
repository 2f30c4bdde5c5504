"""Joint permutation test of many statistics: by loops over every arrangement of small tables."""

from __future__ import annotations

import itertools
import statistics as library
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from robustrm.kernels.null.joint import at_least, joint_test, rearranged, rearrangements

GAPPED = np.array([[1, 1, 1, 1], [1, 0, 1, 1], [0, 1, 0, 1]], dtype=bool)


def all_orders(observed: np.ndarray, draws: int, seed: int, block: int | None = None) -> np.ndarray:
    rng = np.random.default_rng(seed)
    return np.concatenate(list(rearrangements(observed, draws, rng, block=block)))


def test_the_table_itself_comes_first_and_cells_move_only_among_the_observed_of_a_row():
    orders = all_orders(GAPPED, 200, seed=1)
    assert orders.shape == (201, 3, 4)
    np.testing.assert_array_equal(orders[0], np.tile(np.arange(4), (3, 1)))
    np.testing.assert_array_equal(np.sort(orders, axis=-1), np.broadcast_to(orders[0], (201, 3, 4)))
    missing = np.broadcast_to(~GAPPED, orders.shape)
    places = np.broadcast_to(np.arange(4), orders.shape)
    np.testing.assert_array_equal(orders[missing], places[missing])


@pytest.mark.parametrize("block", [1, 7, 50, 1000])
def test_the_block_size_changes_no_rearrangement(block: int):
    np.testing.assert_array_equal(
        all_orders(GAPPED, 100, seed=2, block=block), all_orders(GAPPED, 100, seed=2)
    )


def test_every_order_of_a_row_is_equally_likely_and_rows_are_independent():
    # chi-square test by SciPy; the seed is fixed, the limit is that of one in a million
    orders = all_orders(np.ones((2, 3), dtype=bool), 36_000, seed=3)[1:]
    codes = (orders * [9, 3, 1]).sum(axis=-1)
    _, counts = np.unique(codes[:, 0] * 100 + codes[:, 1], return_counts=True)
    assert counts.size == 36
    assert stats.chisquare(counts).pvalue > 1e-6


def test_cells_go_where_the_order_says():
    cells = np.array([[10.0, 20.0, 30.0], [1.0, 2.0, 3.0]])
    orders = np.array([[[0, 1, 2], [0, 1, 2]], [[2, 0, 1], [1, 2, 0]]])
    expected = [cells, [[30.0, 10.0, 20.0], [2.0, 3.0, 1.0]]]
    np.testing.assert_array_equal(rearranged(cells, orders), expected)


@given(st.lists(st.lists(st.integers(0, 4), min_size=2, max_size=2), min_size=1, max_size=12))
def test_counts_are_those_of_a_loop(rows: list[list[int]]):
    values = np.array(rows) / 4
    expected = [
        [sum(other[s] >= row[s] for other in rows) for s in range(2)] for row in rows
    ]  # whole numbers compare exactly
    np.testing.assert_array_equal(at_least(values), expected)


def test_values_that_agree_to_rounding_count_as_equal_and_what_is_undefined_comes_last():
    values = np.array([[0.3], [0.1 + 0.2], [0.5], [-1.0]])
    np.testing.assert_array_equal(at_least(values), [[3], [3], [1], [4]])


def test_the_joint_p_is_that_of_loops_over_every_arrangement():
    """Three statistics of a 3 x 3 table, all 216 tables, in exact fractions."""
    table = [[5, 1, 3], [9, 8, 2], [4, 6, 1]]
    rows = [list(itertools.permutations(row)) for row in table]
    arrangements = list(itertools.product(*rows))
    assert list(map(list, arrangements[0])) == table

    def of(arrangement) -> list[int]:
        sums = [sum(column) for column in zip(*arrangement, strict=True)]
        ranks = [[sorted(row).index(v) for v in row] for row in arrangement]
        rank_sums = [sum(column) for column in zip(*ranks, strict=True)]
        return [sum(s * s for s in sums), sum(s * s for s in rank_sums), abs(sums[2] - sums[0])]

    found = [of(arrangement) for arrangement in arrangements]
    p = [
        [Fraction(sum(other[s] >= one[s] for other in found), len(found)) for s in range(3)]
        for one in found
    ]
    medians = [library.median(each) for each in p]
    joint = Fraction(sum(m <= medians[0] for m in medians), len(found))

    largest = np.max(found, axis=0)
    result = joint_test(np.array(found) / largest)
    assert result.p_values == pytest.approx([float(each) for each in p[0]], abs=1e-15)
    assert result.median == pytest.approx(float(medians[0]), abs=1e-15)
    assert result.p_value == pytest.approx(float(joint), abs=1e-15)
    assert (result.hits, result.draws) == (int(joint * 216) - 1, 215)


def test_an_even_number_of_statistics_has_the_mean_of_the_middle_two():
    rng = np.random.default_rng(4)
    values = rng.random((50, 4))
    p = [[np.mean(values[:, s] >= one[s]) for s in range(4)] for one in values]
    medians = [library.median(each) for each in p]
    result = joint_test(values)
    assert result.median == pytest.approx(medians[0], abs=1e-15)
    assert result.p_value == pytest.approx(np.mean(np.array(medians) <= medians[0] + 1e-12))


def test_one_statistic_has_its_own_p_value():
    values = np.random.default_rng(5).random((100, 1))
    result = joint_test(values)
    assert result.p_value == result.median == result.p_values[0]
    assert result.p_value == np.mean(values[:, 0] >= values[0, 0])


def test_the_joint_p_of_random_order_is_never_too_often_small():
    # 400 sets of exchangeable rows; SciPy's binomial limit of one in a million
    rng = np.random.default_rng(6)
    common = rng.random((400, 100, 1))
    values = (common + rng.random((400, 100, 5))) / 2
    hits = sum(joint_test(each).p_value <= 0.05 for each in values)
    assert hits <= stats.binom.isf(1e-6, 400, 0.05)
