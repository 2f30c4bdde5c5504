"""Tails of a studentized sum: against every pattern of signs, and its own draws."""

from __future__ import annotations

import itertools
import math
import tracemalloc

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from robustrm.kernels.null import studentized
from robustrm.kernels.null.studentized import cost, count, ratio, tail

SIDES = ("greater", "less", "two-sided")
sides = pytest.mark.parametrize("side", SIDES)
# Any whole-number columns do: the room knows nothing of ranks.
COLUMNS = st.integers(2, 8).flatmap(
    lambda n: st.lists(
        st.lists(st.integers(-3, 3), min_size=n, max_size=n), min_size=n, max_size=n
    ).map(lambda rows: np.array(rows, dtype=float))
)


def statistics(columns):
    """t of the sum under every pattern, the observed one first; infinite or 0 without spread."""
    n = len(columns)
    found = []
    for signs in itertools.product((1, -1), repeat=n):
        sums = columns @ signs
        total, spread = sums.sum(), n * (sums**2).sum() - sums.sum() ** 2
        if total == 0:
            found.append(0.0)
        elif spread == 0:
            found.append(math.copysign(math.inf, total))
        else:
            found.append(math.sqrt(n - 1) * total / math.sqrt(spread))
    return np.array(found)


def shares(values, value):
    """Upper and lower tail, in counts of all patterns."""
    slack = 1e-9 * abs(value) if math.isfinite(value) else 0.0
    return (values >= value - slack).mean(), (values <= value + slack).mean()


def expected_p(values, value, side):
    upper, lower = shares(values, value)
    return {"greater": upper, "less": lower, "two-sided": min(1.0, 2 * min(upper, lower))}[side]


@sides
@pytest.mark.property
@given(columns=COLUMNS)
def test_p_and_the_smallest_p_equal_the_enumeration(side, columns):
    values = statistics(columns)
    found = tail(columns, side=side)
    assert found.tail.null == "exact"
    assert found.tail.arrangements == values.size
    assert found.tail.p_value == pytest.approx(expected_p(values, values[0], side), rel=1e-12)
    assert math.exp(found.tail.log_p) == pytest.approx(found.tail.p_value)
    smallest = min(expected_p(values, value, side) for value in values)
    assert found.smallest_p == pytest.approx(smallest, rel=1e-12)


@pytest.mark.parametrize(("longest", "block"), [(1, 1), (2, 16), (14, 1 << 18)])
def test_how_the_patterns_are_cut_changes_nothing(monkeypatch, longest, block):
    columns = np.random.default_rng(4).integers(-5, 6, size=(12, 12)).astype(float)
    whole = count(columns)
    monkeypatch.setattr(studentized, "LONGEST", longest)
    monkeypatch.setattr(studentized, "BLOCK", block)
    assert count(columns) == whole
    assert whole.patterns == 2**11


def test_subjects_that_move_nothing_cost_nothing():
    columns = np.random.default_rng(4).integers(-5, 6, size=(40, 40)).astype(float)
    columns[:, 12:] = 0
    assert cost(columns).operations == 2**11
    assert count(columns).patterns == 2**11
    assert tail(columns, side="two-sided").tail.arrangements == 2**40


def test_thirty_subjects_are_exact_and_two_thousand_are_not():
    assert cost(np.ones((30, 30))).affordable
    price = cost(np.ones((40, 40)))
    assert not price.affordable
    assert "operations (budget 2e9)" in price.sentence
    assert not cost(np.ones((2000, 2000))).affordable


def test_exact_beyond_the_budget_answers_nothing():
    found = tail(np.ones((40, 40)), side="greater", null="exact")
    assert math.isnan(found.tail.p_value)
    assert found.smallest_p is None


@sides
def test_drawn_intervals_cover_the_exact_p(side):
    columns = np.random.default_rng(5).integers(-4, 6, size=(11, 11)).astype(float)
    exact = tail(columns, side=side)
    drawn = tail(columns, side=side, null="monte carlo", stages=(20_000,), rng=1)
    assert (drawn.tail.null, drawn.tail.draws) == ("monte carlo", 20_000)
    assert drawn.tail.p_interval is not None
    assert drawn.tail.p_interval[0] <= exact.tail.p_value <= drawn.tail.p_interval[1]
    assert drawn.smallest_p == exact.smallest_p


def test_draws_go_on_while_a_threshold_is_in_doubt_and_keep_the_stream():
    columns = np.random.default_rng(6).integers(-4, 6, size=(50, 50)).astype(float)

    def drawn(**options):
        return tail(columns, side="two-sided", rng=3, **options).tail

    p_value = drawn(stages=(9_999,)).p_value
    staged = drawn(stages=(999, 9_999), thresholds=(p_value,))
    assert (staged.draws, staged.p_value) == (9_999, p_value)
    assert drawn(stages=(999, 9_999), thresholds=(0.9,)).draws == 999
    assert drawn(stages=(999,), block=7).p_value == drawn(stages=(999,)).p_value


def test_the_ratio_of_nothing_is_zero():
    assert ratio(np.zeros((2, 3))).tolist() == [0, 0]
    # by hand: 6 · 6 / 14 and −6 · 6 / 14
    assert ratio(np.array([[1.0, 2, 3], [-1, -2, -3]])) == pytest.approx([36 / 14, -36 / 14])


def test_memory_does_not_grow_with_the_number_of_patterns():
    columns = np.random.default_rng(7).integers(-4, 6, size=(22, 22)).astype(float)
    tracemalloc.start()
    count(columns)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 40e6  # 2^21 patterns of 22 numbers are 369 MB
