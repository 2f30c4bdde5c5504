"""Closed permutation testing of pairs, against enumeration in plain loops."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from robustrm.errors import ArgumentError
from robustrm.methods.closed import joins, partitions_of
from robustrm.methods.follow_up import follow_up
from robustrm.methods.sign_flip import sign_flip
from robustrm.table import OccasionTable

LABELS = ["w0", "w1", "w2", "w3"]


def table_of(rows) -> OccasionTable:
    return OccasionTable.from_array(rows, occasions=LABELS[: len(rows[0])])


def ranks_together(values: list[float]) -> list[float]:
    """Mid-ranks by counting, twice over, so that they are whole."""
    return [sum((b < a) + (b <= a) for b in values) + 1 for a in values]


def aligned(rows):
    """2k times the centred ranks of the subject-centred values, in plain loops."""
    k = len(rows[0])
    centred = [[k * y - sum(row) for y in row] for row in rows]
    pooled = ranks_together([y for row in centred for y in row])
    ranked = [pooled[i * k : (i + 1) * k] for i in range(len(rows))]
    return [[k * r - sum(row) for r in row] for row in ranked]


def statistic(rows, partition) -> float:
    """Sum over blocks of the squared distance of the block's sums from their mean, times blocks."""
    sums = [sum(column) for column in zip(*rows, strict=True)]
    scale = math.lcm(*(len(block) for block in partition))
    total = 0
    for block in partition:
        inside = [sums[j] for j in block]
        total += scale * sum(s * s for s in inside) - scale // len(block) * sum(inside) ** 2
    return total


def arrangements(row, partition):
    """All ways to place a row's scores within the blocks."""
    for orders in itertools.product(*(itertools.permutations(block) for block in partition)):
        placed = list(row)
        for block, order in zip(partition, orders, strict=True):
            for here, there in zip(block, order, strict=True):
                placed[here] = row[there]
        yield placed


def enumerated_p(scores, partition) -> float:
    observed = statistic(scores, partition)
    counts = [
        statistic(rows, partition) >= observed
        for rows in itertools.product(*(list(arrangements(row, partition)) for row in scores))
    ]
    return sum(counts) / len(counts)


def set_partitions(items):
    """All set partitions, recursively."""
    if not items:
        yield []
        return
    first, *rest = items
    for smaller in set_partitions(rest):
        yield [[first], *smaller]
        for i, block in enumerate(smaller):
            yield [*smaller[:i], [first, *block], *smaller[i + 1 :]]


def test_all_pairs_close_to_all_set_partitions():
    """Bell numbers 5, 15, 52, 203, without the partition into single occasions."""
    for k, bell in {3: 5, 4: 15, 5: 52, 6: 203}.items():
        found = partitions_of(list(itertools.combinations(range(k), 2)), k)
        assert len(found) == bell - 1
        expected = {
            tuple(sorted(tuple(sorted(block)) for block in partition))
            for partition in set_partitions(list(range(k)))
        }
        assert set(found) == {p for p in expected if any(len(block) > 1 for block in p)}


def test_a_smaller_family_has_only_its_own_intersections():
    found = partitions_of([(0, 1), (0, 2)], 4)
    assert found == [((0, 1), (2,), (3,)), ((0, 1, 2), (3,)), ((0, 2), (1,), (3,))]


@given(
    rows=st.lists(st.lists(st.integers(0, 6), min_size=3, max_size=3), min_size=1, max_size=5),
    method=st.sampled_from(["sign_flip", "aligned_ranks"]),
)
def test_every_p_equals_enumeration_at_three_occasions(rows, method):
    family = follow_up(table_of(rows), method=method, family="all", adjust="closed")
    k = 3
    scores = (
        aligned(rows) if method == "aligned_ranks" else [[k * y - sum(r) for y in r] for r in rows]
    )
    partitions = partitions_of([(0, 1), (0, 2), (1, 2)], k)
    p_of = {partition: enumerated_p(scores, partition) for partition in partitions}
    for comparison, pair in zip(family, [(0, 1), (0, 2), (1, 2)], strict=True):
        expected = max(p for partition, p in p_of.items() if joins(partition, pair))
        assert comparison.p_adjusted == pytest.approx(expected, rel=1e-12)
        alone = next(
            p for p in partitions if sum(map(len, p)) == k and joins(p, pair) and len(p) == 2
        )
        assert comparison.p_value == pytest.approx(p_of[alone], rel=1e-12)


def test_four_occasions_equal_enumeration():
    rows = [[5, 3, 2, 1], [7, 7, 4, 2], [4, 1, 3, 2]]
    family = follow_up(table_of(rows), method="sign_flip", family="all", adjust="closed")
    scores = [[4 * y - sum(row) for y in row] for row in rows]
    pairs = list(itertools.combinations(range(4), 2))
    p_of = {part: enumerated_p(scores, part) for part in partitions_of(pairs, 4)}
    for comparison, pair in zip(family, pairs, strict=True):
        expected = max(p for part, p in p_of.items() if joins(part, pair))
        assert comparison.p_adjusted == pytest.approx(expected, rel=1e-12)
        assert comparison.result.details["partition_null"] == "exact"


def test_the_pair_alone_is_the_sign_flip_of_the_pair():
    rng = np.random.default_rng(3)
    table = table_of(np.exp(rng.normal(size=(9, 3))).round(3)).log()
    family = follow_up(table, method="sign_flip", family="all", adjust="closed")
    for comparison in family:
        alone = sign_flip(table, comparison.first, comparison.second)
        assert comparison.p_value == pytest.approx(alone.p_value, rel=1e-12)
        assert comparison.estimate == alone.estimate


def test_six_subjects_who_agree_reach_0_031_where_holm_stops_at_0_094():
    """From the counts alone: 2 of 2⁶ sign patterns; Holm multiplies by 3."""
    rows = [[i, i + 2 + i % 3, i + 7 + i] for i in range(1, 7)]
    family = follow_up(table_of(rows), method="sign_flip", family="all", adjust="closed")
    assert [c.p_adjusted for c in family] == [2 / 64] * 3
    assert [c.result.details["p_holm"] for c in family] == [6 / 64] * 3
    assert family.smallest_p_adjusted == 2 / 64


def test_each_row_says_which_partition_decided():
    rows = [[5, 3, 9], [7, 6, 1], [4, 1, 8], [6, 2, 3], [9, 5, 7]]
    text = str(follow_up(table_of(rows), method="sign_flip", family="all", adjust="closed"))
    assert "w1 vs w0: decided by " in text
    assert "Holm" in text


def test_monte_carlo_beyond_the_budget_is_said_and_repeats_with_the_seed():
    rng = np.random.default_rng(8)
    table = table_of(rng.normal(size=(24, 4)).round(6))
    options = {"draws": 999}
    first, second = (
        follow_up(table, method="sign_flip", adjust="closed", rng=5, options=options)
        for _ in range(2)
    )
    assert [c.p_adjusted for c in first] == [c.p_adjusted for c in second]
    nulls = {c.result.details["partition_null"] for c in first}
    assert "monte carlo" in nulls


def test_rows_with_a_gap_are_left_out():
    rows = [[5, 3, 2], [7, 6, math.nan], [4, 1, 3], [6, 2, 1]]
    family = follow_up(table_of(rows), method="sign_flip", adjust="closed")
    assert [c.result.n_subjects for c in family] == [3, 3]


@pytest.mark.parametrize(
    ("changes", "text"),
    [
        ({"method": "signed_rank"}, "must be 'sign_flip' or 'aligned_ranks' with adjust='closed'"),
        ({"options": {"alternative": "less"}}, "must be 'two-sided' with adjust='closed'"),
        ({"options": {"zeros": "drop"}}, "options with adjust='closed'"),
    ],
)
def test_what_closed_testing_does_not_take_is_refused(changes, text):
    settings = {"method": "sign_flip", "adjust": "closed", **changes}
    with pytest.raises(ArgumentError, match=text):
        follow_up(table_of([[1, 2, 3], [2, 4, 5]]), **settings)


def test_more_than_six_occasions_are_refused():
    table = OccasionTable.from_array([list(range(7))] * 3, occasions=[f"w{j}" for j in range(7)])
    with pytest.raises(ArgumentError, match="at most 6 occasions, got 7"):
        follow_up(table, method="sign_flip", adjust="closed")


def test_the_declared_substitute_enters_everywhere():
    """With '<0.3' entered as the limit, the table is that of plain values 0.3, marked below."""
    rows = [[0.3, 0.8, 1.9], [1.2, 0.9, 2.5], [0.7, 0.3, 0.8], [2.2, 1.4, 3.1], [0.9, 0.8, 1.7]]
    marks = [[(j == 0 and i == 0) or (j == 1 and i == 2) for j in range(3)] for i in range(5)]
    marked = OccasionTable.from_array(rows, occasions=LABELS[:3], below=marks)
    options = {"substitute": "limit"}
    censored = follow_up(marked, method="sign_flip", adjust="closed", options=options)
    plain = follow_up(table_of(rows), method="sign_flip", adjust="closed")
    for one, other in zip(censored, plain, strict=True):
        assert one.p_adjusted == other.p_adjusted
        assert one.estimate == other.estimate
