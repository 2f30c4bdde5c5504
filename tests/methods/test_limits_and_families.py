"""Where limits, ties and families meet: cases worked out by hand."""

from __future__ import annotations

import numpy as np
import pytest

import robustrm as rm
from robustrm.methods.attainable import attainable_of

PAIR = ["a", "b"]
THREE = ["a", "b", "c"]


def table_of(rows, **options) -> rm.OccasionTable:
    return rm.OccasionTable.from_array(rows, occasions=THREE[: len(rows[0])], **options)


def codes(notes) -> list[str]:
    return [note.code for note in notes]


def test_a_limit_between_the_steps_enters_as_it_is():
    """Half of 2.5 is 1.25: mean of 5 − 1.25, 2, −(4 − 1.25) + 1.25 ... = −1.125, by hand."""
    rows = [[2, 5], [7, 9], [4, 1], [6, 2], [8, 12], [20, 11]]
    entered = np.where(np.array(rows) < 2.5, 1.25, np.array(rows, float))
    estimate = rm.sign_flip(table_of(rows, lower_limit=2.5), "a", "b").estimate
    assert estimate is not None
    assert estimate.value == pytest.approx(float((entered[:, 1] - entered[:, 0]).mean()))
    assert estimate.value == pytest.approx(-1.125)


@pytest.mark.parametrize("rule", ["half", "limit", 0.1])
def test_whole_multiples_are_the_values(rule):
    rows = [[0.3, 0.2], [0.5, 0.7], [0.4, 0.9], [0.6, 0.1]]
    table = table_of(rows, lower_limit=0.25).recensored().substitute(rule)
    assert table.units is not None
    assert table.step is not None
    np.testing.assert_allclose(table.units * float(table.step), table.values, rtol=1e-12)


def test_the_smallest_closed_p_is_never_above_one_that_was_reached():
    """Three of 1, 2, 1 and three of 1, 2, 2: all six rise from a to b, two of 2⁶ patterns."""
    table = table_of([[1, 2, 1]] * 3 + [[1, 2, 2]] * 3)
    family = rm.follow_up(table, method="sign_flip", family="successive", adjust="closed")
    assert family["a", "b"].p_adjusted == 2 / 64
    assert attainable_of(family).smallest_p_adjusted == 2 / 64


def test_quantiles_do_not_order_what_has_no_order():
    """<0.8 and a measured 0.4 have no order: all five values lie below 0.8, no more is known."""
    below = [[True, False], [True, False], *[[False, False]] * 3]
    rows = [[0.8, 1], [0.8, 1.2], [0.4, 1], [0.5, 1.3], [0.6, 0.9]]
    limits = [[0.8, 0.3], [0.8, 0.3], *[[0.3, 0.3]] * 3]
    table = table_of(rows, below=below, lower_limit=limits)
    from robustrm.methods.summary import summarize

    first = summarize(table)[0]
    assert (first.q1, first.median, first.largest) == (None, None, None)


RISING = [
    [0.33, 0.3, 0.3], [1.14, 0.84, 0.41], [0.56, 0.4, 1.05], [2.44, 0.67, 0.3],
    [1.65, 0.76, 0.5], [3.99, 1.17, 0.3], [0.46, 1.83, 0.48], [2.03, 0.56, 0.3],
]  # fmt: skip
MARKS = [[0, 1, 1], *[[0, 0, 0]] * 2, [0, 0, 1], [0, 0, 0], [0, 0, 1], [0, 0, 0], [0, 0, 1]]


@pytest.mark.parametrize(("level", "reading"), [(0.95, "unchanged"), (0.90, "changes")])
def test_the_reading_is_that_of_the_adjusted_p_at_the_level_asked_for(level, reading):
    """Holm's P of c runs from .078 to .109: one side of .05, both sides of .10."""
    table = table_of(RISING, below=MARKS, lower_limit=0.3).log()
    over = rm.follow_up(table, level=level)["a", "c"].result.details["over_substitutes"]
    assert over["p_adjusted"] == pytest.approx((0.078125, 0.109375))
    assert over["reading"] == reading


def test_a_row_without_a_limit_moves_with_the_others():
    rows = [
        [1.03, 0.94, 0.3], [1.46, 0.61, 0.3], [0.98, 0.35, 0.3], [0.3, 0.3, 0.3],
        [0.9, 0.62, 0.32], [0.47, 0.61, 1.04], [1.7, 0.76, 0.53], [0.86, 0.66, 0.54],
    ]  # fmt: skip
    marks = [[False, i == 3, False] for i in range(8)]
    family = rm.follow_up(table_of(rows, below=marks, lower_limit=0.3).log())
    moved = family["a", "c"].result.details
    assert "substitutes" not in moved
    low, high = moved["over_substitutes"]["p_adjusted"]
    assert low < high


def test_the_noise_of_a_sum_is_no_difference():
    """0.1 + 0.7 is not 0.8 in floats; seven pairs with one tie give 2 of 2⁶."""
    rows = [
        [0.1 + 0.7, 0.8],
        [0.3, 0.4],
        [0.2, 0.35],
        [0.1, 0.3],
        [0.4, 0.65],
        [0.2, 0.5],
        [0.35, 0.7],
    ]
    table = table_of(rows)
    assert table.step is None
    assert rm.sign_test(table, *PAIR).p_value == 2 / 64
    assert rm.signed_rank(table, *PAIR).p_value == 2 / 64


def test_an_infinite_f_has_the_exact_p_with_ties_too():
    """Four subjects of 1, 1, 2: each has three arrangements, so (1/3)³."""
    table = table_of([[1, 1, 2]] * 4)
    assert rm.friedman(table).details["p_iman_davenport"] == pytest.approx(1 / 27)
    assert rm.quade(table).details["p_f"] == pytest.approx(1 / 27)


def test_closed_testing_follows_the_null_asked_for():
    table = table_of([[1, 2, 4], [2, 4, 3], [3, 5, 9]])
    drawn = rm.follow_up(table, method="sign_flip", adjust="closed", null="monte carlo", rng=1)
    assert {c.result.null for c in drawn} == {"monte carlo"}
    with pytest.raises(rm.ArgumentError, match="`null` must be one of"):
        rm.follow_up(table, method="sign_flip", adjust="closed", null="some")
    rng = np.random.default_rng(1)
    large = rm.OccasionTable.from_array(rng.normal(size=(40, 4)), occasions=[*THREE, "d"])
    with pytest.raises(rm.BudgetError, match="closed testing of this table, got 'exact'"):
        rm.follow_up(large, method="sign_flip", adjust="closed", null="exact")


def test_ten_and_above_ten_is_no_zero_difference():
    rows = [[10, 10], [5, 6], [3, 4.5], [2, 2.5], [1, 4]]
    table = table_of(rows, above=[[0, 1], *[[0, 0]] * 4], upper_limit=10)
    result = rm.signed_rank(table, *PAIR)
    assert result.details["n_sizeless"] == 1
    assert "size unknown" in codes(result.notes)
    assert "zeros" not in codes(result.notes)


def test_a_closed_family_beyond_forty_subjects_repeats_with_the_seed():
    rng = np.random.default_rng(1)
    values = rng.lognormal(3, 0.5, (45, 3)).round(1)
    runs = [
        rm.follow_up(
            table_of(values).log(), method="sign_flip", adjust="closed", rng=5,
            null="monte carlo", options={"draws": 999},
        )
        for _ in range(2)
    ]  # fmt: skip
    assert [c.to_dict() for c in runs[0]] == [c.to_dict() for c in runs[1]]


def test_a_substitute_is_not_carried_over_a_later_common_limit():
    marks = [[1, 0], [0, 1], *[[0, 0]] * 5]
    rows = [[0.3, 1.5], [0.5, 0.8], [2, 1.0], [3, 1.2], [1.7, 0.9], [2.5, 1.1], [1.9, 1.0]]
    table = table_of(rows, below=marks, lower_limit=[0.3, 0.8])
    with pytest.raises(rm.ArgumentError, match="must come after the table is brought to"):
        rm.sign_flip(table.substitute("half"), *PAIR)


def test_a_part_of_a_negative_limit_is_refused():
    rows = [[-2, -1.5], [-2, -1.2], [-0.5, 0.5]]
    table = table_of(rows, below=[[1, 0], [1, 0], [0, 0]], lower_limit=-2)
    with pytest.raises(rm.ArgumentError, match="a part of a negative limit lies above it"):
        rm.sign_flip(table, *PAIR)
    assert rm.sign_flip(table, *PAIR, substitute="limit").n_subjects == 3


def test_a_cell_that_states_its_limit_keeps_it():
    table = table_of([[0.3, 1.5], [2, 1]], below=[[1, 0], [0, 0]], lower_limit=0.5)
    assert table.lower_limit.tolist() == [[0.3, 0.5], [0.5, 0.5]]


def test_differences_that_agree_to_rounding_have_no_t():
    first = np.array([1 / 3, 2 / 7, 5 / 9, 1 / 9, 22 / 7])
    result = rm.paired_t(table_of(np.c_[first, first + 0.1]), *PAIR)
    assert np.isnan(result.statistic)
    assert codes(result.notes) == ["no variation"]


def test_one_sided_p_beside_two_sided_intervals_is_said():
    rows = [[10, 10 + x, 10.5 + x] for x in (-1, 2, 3, 4, 5, 6, -2, 8)]
    family = rm.follow_up(table_of(rows), options={"alternative": "greater"})
    assert "one-sided" in codes(family.notes)


def test_the_normal_approximation_has_the_direction_of_the_test():
    """Six falls of six: the upper tail is large, the lower small, by every pair test."""
    table = table_of([[10 + i, 9 - i / 3] for i in range(6)])
    for test in (rm.signed_rank, rm.sign_test, rm.sign_flip):
        up = test(table, *PAIR, alternative="greater").details["p_normal"]
        down = test(table, *PAIR, alternative="less").details["p_normal"]
        assert down < 0.05 < 0.9 < up
        assert up + down == pytest.approx(1)
