"""The smallest attainable p against the arithmetic of sign patterns."""

from __future__ import annotations

import pytest

import robustrm as rm
from robustrm.methods.attainable import attainable_of, attainable_signed_rank
from tests.methods.tables import pair_of, raw


@pytest.mark.parametrize(
    ("n", "smallest"), [(4, 0.125), (5, 0.0625), (6, 0.03125), (7, 0.015625), (8, 0.0078125)]
)
def test_the_smallest_two_sided_p_is_one_pattern_in_each_direction(n, smallest):
    assert attainable_signed_rank(n, 1).smallest_p == smallest
    assert attainable_signed_rank(n, 1, sides=1).smallest_p == smallest / 2


@pytest.mark.parametrize(("m", "least"), [(1, 6), (3, 7), (6, 8), (10, 9)])
def test_a_first_holm_step_at_five_percent_needs_one_plus_log2_of_20_m_subjects(m, least):
    assert attainable_signed_rank(least, m).reachable
    assert not attainable_signed_rank(least - 1, m).reachable


@pytest.mark.parametrize(
    ("adjust", "smallest"),
    [("none", 0.03125), ("bonferroni", 0.09375), ("holm", 0.09375), ("hommel", 0.03125)],
)
def test_six_subjects_and_three_pairs_by_adjustment(adjust, smallest):
    found = attainable_signed_rank(6, 3, adjust=adjust)
    assert found.smallest_p_adjusted == pytest.approx(smallest)


def test_the_sentence_says_what_cannot_be_reached():
    assert str(attainable_signed_rank(6, 3)) == (
        "With 6 subjects and 3 comparisons the smallest p is 0.0312, after Holm 0.0938; "
        "no comparison can reach 0.0500 that way."
    )
    assert str(attainable_signed_rank(9, 1)) == (
        "With 9 subjects and 1 comparison the smallest p is 0.00391."
    )


def test_zero_differences_raise_the_smallest_p_of_a_family():
    plain = rm.follow_up(pair_of([1, 2, 3, 4, 5, 6]))
    with_zeros = rm.follow_up(pair_of([1, 2, 3, 4, 0, 0]))
    assert attainable_of(plain).smallest_p == 2.0**-5
    assert attainable_of(with_zeros).smallest_p == 2.0**-3


def test_a_family_reaches_what_it_says_when_all_move_alike():
    table = raw([[i, i + 1 + i / 10, i + 3 + i / 5] for i in range(1, 8)])
    family = rm.follow_up(table, family="all")
    reached = attainable_of(family)
    assert reached.smallest_p_adjusted == pytest.approx(min(c.p_adjusted for c in family))
    assert reached.to_dict()["sentence"] == str(reached)


@pytest.mark.parametrize(("n", "m"), [(0, 1), (3, 0), (2.5, 1)])
def test_counts_must_be_whole_and_positive(n, m):
    with pytest.raises(rm.ArgumentError, match="must be a whole number of at least 1"):
        attainable_signed_rank(n, m)
