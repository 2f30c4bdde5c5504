"""What an exact answer costs, which short cuts are taken, and what happens beyond the budget."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest

from robustrm.kernels.null import sorted_sums
from robustrm.kernels.null.engine import law, smallest_tail, tail
from robustrm.kernels.null.forms import centring, linear, quadratic
from robustrm.kernels.null.problem import Problem
from robustrm.kernels.null.symmetry import exchangeable
from robustrm.kernels.null.tables import (
    merge_rows,
    permutation_table,
    permutation_tables,
    score_table,
    sign_tables,
)
from robustrm.kernels.null.work import plan_work

RANKS = np.arange(1.0, 4)


def real_rows(n, k):
    scores = np.random.default_rng(11).normal(size=(n, k))
    return scores - scores.mean(axis=1, keepdims=True)


@pytest.mark.parametrize(
    ("tables", "form", "how"),
    [
        (permutation_tables(np.tile(RANKS, (30, 1))), centring(3), "sorted sums"),
        (permutation_tables(real_rows(12, 3)), centring(3), "two halves"),
        (sign_tables(np.arange(1.0, 61)), linear(1), "convolution"),
        (sign_tables(real_rows(40, 1) + np.pi), linear(1), "sorted halves"),
        (sign_tables(np.round(real_rows(30, 3))), centring(3), "convolution"),
    ],
)
def test_the_way_follows_from_scores_and_form(tables, form, how):
    cost = plan_work(tables, form)
    assert (cost.how, cost.affordable) == (how, True)


def test_beyond_the_budget_exact_says_so_and_auto_draws():
    scores = real_rows(30, 4)
    tables, observed = permutation_tables(scores), scores.sum(axis=0)
    cost = plan_work(tables, centring(4))
    assert not cost.affordable
    assert cost.operations > 2e9
    assert cost.sentence.startswith("exact would need about ")
    assert cost.sentence.endswith(" operations (budget 2e9)")
    demanded = tail(tables, observed, centring(4), null="exact")
    assert math.isnan(demanded.p_value)
    assert demanded.null == "exact"
    assert tail(tables, observed, centring(4), draws=99, rng=1).null == "monte carlo"
    assert law(tables, centring(4)) is None
    assert smallest_tail(tables, centring(4)) is None


def test_a_smaller_budget_turns_exact_into_monte_carlo():
    tables = permutation_tables(np.tile(RANKS, (8, 1)))
    assert plan_work(tables, centring(3), budget=10.0).sentence.endswith("(budget 1e1)")
    assert tail(tables, 8 * RANKS, centring(3), budget=10.0, draws=99, rng=1).draws == 99


def test_the_cost_of_huge_problems_is_a_number():
    tables = permutation_tables(np.tile(np.arange(10.0), (500, 1)))
    assert plan_work(tables, centring(10)).operations == math.inf
    assert "more than 1e300" in plan_work(tables, centring(10)).sentence


def test_complete_rows_have_one_class_and_blocks_have_theirs():
    rows = real_rows(3, 4)
    assert exchangeable(permutation_tables(rows), centring(4)) == ((0, 1, 2, 3),)
    blocks = [[0, 3], [1, 2]]
    tables = permutation_tables(rows, blocks=blocks)
    assert exchangeable(tables, centring(4, blocks=blocks)) == ((0, 3), (1, 2))
    # Permuted everywhere but measured within blocks: no relabelling across blocks.
    assert exchangeable(permutation_tables(rows), centring(4, blocks=blocks)) == ((0, 3), (1, 2))


def test_missing_cells_leave_only_relabellings_that_keep_every_pattern():
    seen = np.ones((3, 4), dtype=bool)
    seen[0, 0] = False
    tables = permutation_tables(real_rows(3, 4), observed=seen)
    assert exchangeable(tables, centring(4)) == ((0,), (1, 2, 3))
    seen[1, 1] = False
    tables = permutation_tables(real_rows(3, 4), observed=seen)
    assert exchangeable(tables, centring(4)) == ((0,), (1,), (2, 3))
    assert Problem(tables, centring(4)).orbits == (3, 3, 12)


def test_a_form_that_tells_occasions_apart_allows_no_relabelling():
    tables = permutation_tables(real_rows(3, 3))
    assert exchangeable(tables, quadratic([[1, -1, 0]])) == ((0, 1), (2,))
    assert exchangeable(tables, quadratic([[1, 0, -2]])) == ((0,), (1,), (2,))
    assert exchangeable(sign_tables(real_rows(3, 3)), centring(3)) == ((0,), (1,), (2,))


def test_listed_tables_reveal_their_own_relabellings():
    listed = [table.listed() for table in permutation_tables(real_rows(3, 3))]
    assert exchangeable(listed, centring(3)) == ((0, 1, 2),)


def test_a_balanced_table_counts_every_arrangement():
    # Latin square in logs: the observed sum is zero up to rounding, T about 1e-32.
    row = np.log([3.0, 7.0, 11.0])
    rows = np.array([np.roll(row, shift) for shift in range(3)]) - row.mean()
    assert tail(permutation_tables(rows), rows.sum(axis=0), centring(3)).p_value == 1.0


def test_reversed_doubles_count_as_ties():
    # 0.1 + 0.2 is not 0.3 in binary; all three sums below are equal in decimal.
    differences = np.array([0.1, 0.2, 0.3, 0.3])
    result = tail(sign_tables(differences), 0.3, linear(1, side="greater"))
    exact = tail(sign_tables(np.array([1.0, 2, 3, 3])), 3, linear(1, side="greater"))
    assert result.p_value == exact.p_value


def test_scores_that_are_not_numbers_give_no_answer():
    rows = np.array([[1.0, np.nan, 2.0], [1.0, 2.0, 3.0]])
    for null in ("auto", "exact", "monte carlo"):
        result = tail(permutation_tables(rows), rows.sum(axis=0), centring(3), null=null)
        assert math.isnan(result.p_value)
    assert law(permutation_tables(rows), centring(3)) is None


def test_arrangements_count_everything_and_sizes_the_distinct_ones():
    table = permutation_table([2.0, 2.0, 1.0, 5.0, 5.0])
    assert (table.arrangements, table.size, len(table.listed().vectors)) == (120, 30, 30)
    listed = score_table([[1.0], [1.0], [2.0]], [2, 4, 3])
    assert (listed.arrangements, listed.size, sorted(listed.weights)) == (9, 2, [1.0, 2.0])


@pytest.mark.parametrize("dense", [0, 4])
def test_the_law_does_not_depend_on_how_sums_are_merged(monkeypatch, dense):
    tables, form = permutation_tables(np.tile(np.arange(1.0, 5), (7, 1))), centring(4)
    whole = law(tables, form)
    assert whole is not None
    monkeypatch.setattr(sorted_sums, "CHUNK", 64)
    monkeypatch.setattr(sorted_sums, "PENDING", 200)
    monkeypatch.setattr(sorted_sums, "DENSE", dense)
    again = law(tables, form)
    assert again is not None
    np.testing.assert_array_equal(again.values, whole.values)
    np.testing.assert_array_equal(again.weights, whole.weights)


@pytest.mark.parametrize("size", range(1, 9))
def test_the_sorting_network_sorts(size):
    # Zero-one principle (Knuth, TAOCP 3, 5.3.4): a network that sorts all 0-1 vectors sorts all.
    for bits in itertools.product([0, 1], repeat=size):
        cells = list(bits)
        for a, b in sorted_sums.comparators(size):
            cells[a], cells[b] = min(cells[a], cells[b]), max(cells[a], cells[b])
        assert cells == sorted(bits)


def test_merging_adds_weights_of_equal_rows_only():
    rows = np.array([[0.0, 1.0], [1.0, 0.0], [0.0, 1.0], [0.0, 1.0 + 1e-13]])
    distinct, weights = merge_rows(rows, np.array([1.0, 2, 4, 8]))
    assert dict(zip(map(tuple, distinct), weights, strict=True)) == {
        (0.0, 1.0): 5,
        (1.0, 0.0): 2,
        (0.0, 1.0 + 1e-13): 8,
    }
    assert sorted(merge_rows(rows, np.array([1.0, 2, 4, 8]), grid=1e-9)[1]) == [2, 13]


def test_tables_are_copies_that_cannot_be_written():
    rows = np.array([[1.0, 2.0, 3.0]])
    (table,) = permutation_tables(rows)
    rows[0, 0] = 9
    assert table.scores[0] == 1
    with pytest.raises(ValueError, match="read-only"):
        table.scores[0] = 2
