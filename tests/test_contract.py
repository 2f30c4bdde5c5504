"""What every method on offer promises, tried on every line of the registry.

Methods of a whole family go through `follow_up`; theirs is in tests/methods/test_rank_sums.py.
"""

from __future__ import annotations

import copy
import inspect
import json
import math
import pickle
import re
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import robustrm as rm
from robustrm.methods import registry
from robustrm.methods.registry import Method
from tests.methods.tables import LABELS, PAIR, present, raw, tables

pytestmark = pytest.mark.contract

ROOT = Path(__file__).resolve().parents[1]
METHODS = [method for method in registry.METHODS if method.kind != "family"]
OMNIBUS = [method for method in METHODS if method.kind == "omnibus"]
PAIRS = [method for method in METHODS if method.kind == "pair"]
# Methods made for missing visits use every row that has two of them.
FOR_GAPS = {"skillings_mack"}

each = pytest.mark.parametrize("method", METHODS, ids=lambda m: m.name)
each_omnibus = pytest.mark.parametrize("method", OMNIBUS, ids=lambda m: m.name)
each_pair = pytest.mark.parametrize("method", PAIRS, ids=lambda m: m.name)
each_drawn = pytest.mark.parametrize(
    "method", [m for m in METHODS if "thresholds" in m.options], ids=lambda m: m.name
)
each_directed = pytest.mark.parametrize(
    "method", [m for m in METHODS if "alternative" in m.options], ids=lambda m: m.name
)

ROWS = [
    [9.1, 7.2, 6.0],
    [4.0, 3.1, 2.5],
    [12.0, 12.5, 8.0],
    [6.6, 5.0, 5.9],
    [3.3, 2.1, 2.1],
    [47.5, 26.0, 30.4],
    [5.2, 5.2, 3.9],
]


def call(method: Method, table: rm.OccasionTable, **options) -> rm.TestResult:
    """Call a method on a table: two-occasion methods on the first two labels."""
    stated = {"order": [label for label in LABELS if label in table.occasions]}
    required = {name: stated[name] for name in method.requires}
    pair = PAIR if method.kind == "pair" else ()
    return method.load()(table, *pair, **required, **options)


def told(result: rm.TestResult) -> str:
    """Everything a result says but the names of its subjects, to the last digit."""
    return json.dumps({k: v for k, v in result.to_dict().items() if k != "subjects"})


def check_bounds(result: rm.TestResult) -> None:
    if math.isnan(result.p_value):
        assert result.notes, "a p value that is not given needs a note"
    else:
        assert 0 < result.p_value <= 1
    if math.isnan(result.statistic):
        assert result.notes, "a statistic that is not defined needs a note"
    e = result.estimate
    if e is not None and e.low is not None:
        assert e.low <= e.value <= present(e.high)
        assert 0 < present(e.level) < 1


# ── how a method is offered ───────────────────────────────────────────────────────────────────


@each
def test_the_registry_lists_the_options_of_the_function(method):
    parameters = inspect.signature(method.load()).parameters.values()
    options = [p for p in parameters if p.kind is p.KEYWORD_ONLY]
    assert tuple(p.name for p in options) == method.options
    assert tuple(p.name for p in options if p.default is p.empty) == method.requires
    positional = [p.name for p in parameters if p.kind is p.POSITIONAL_OR_KEYWORD]
    assert positional == ["table", "first", "second"][: 3 if method.kind == "pair" else 1]


@each
def test_the_front_desk_offers_the_method(method):
    assert getattr(rm, method.name) is method.load()
    assert method.name in rm.__all__


@each
def test_the_docstring_tells_the_limits_and_the_sources(method):
    text = present(inspect.getdoc(method.load()))
    for section in ("Parameters", "Returns", "Raises", "Notes", "References", "Examples"):
        assert f"\n{section}\n{'-' * len(section)}\n" in text, section


@each
def test_the_method_has_a_page_in_the_docs(method):
    assert (ROOT / "docs" / "methods" / f"{method.name}.md").is_file()


@each
def test_title_and_question_are_written_for_a_reader(method):
    assert method.title[0].isupper()
    assert method.question.endswith("?")


# ── what a result carries ─────────────────────────────────────────────────────────────────────


@each
@pytest.mark.parametrize("scale", ["raw", "log"])
def test_a_result_says_what_was_asked_of_whom(method, scale):
    result = call(method, raw(ROWS).on_scale(scale))
    assert result.method == method.name
    assert result.n_subjects == len(result.subjects) == len(ROWS)
    assert result.n_occasions == (2 if method.kind == "pair" else 3)
    assert result.scale == scale
    assert result.hypothesis.endswith(".")
    assert result.estimand
    assert f"{result.n_subjects} × {result.n_occasions}" in str(result)
    assert len(result.to_frame()) == 1
    check_bounds(result)


@each
def test_an_exact_null_counts_its_arrangements_and_a_drawn_one_its_draws(method):
    result = call(method, raw(ROWS))
    if result.null == "exact":
        assert present(result.arrangements) >= 2
        assert (result.draws, result.p_interval) == (None, None)
    else:
        assert result.null in ("parametric", "asymptotic")


@each
def test_a_result_survives_json_and_travel(method):
    result = call(method, raw(ROWS))
    plain = result.to_dict()
    assert json.loads(json.dumps(plain, allow_nan=False)) == plain
    assert told(pickle.loads(pickle.dumps(result))) == told(result)
    assert told(copy.deepcopy(result)) == told(result)


@each
def test_nobody_can_change_a_result(method):
    result = call(method, raw(ROWS))
    with pytest.raises(TypeError):
        result.details["anything"] = 1  # type: ignore[index]  # a read-only view
    with pytest.raises(AttributeError):
        result.p_value = 0.01  # type: ignore[misc]  # it is read-only


@each
def test_the_input_is_left_as_it_was(method):
    values = np.array(ROWS)
    table = raw(values)
    before = table.to_long()
    call(method, table)
    np.testing.assert_array_equal(values, ROWS)
    assert before.equals(table.to_long())


# ── what may not matter ───────────────────────────────────────────────────────────────────────


@each
def test_the_order_and_the_names_of_the_subjects_change_no_bit(method):
    rng = np.random.default_rng(11)
    rows = rng.lognormal(1, 1, size=(8, 3)).round(3)
    expected = call(method, raw(rows))
    for _ in range(3):
        order = rng.permutation(len(rows))
        names = [f"P{i}" for i in rng.permutation(100)[: len(rows)]]
        assert told(call(method, raw(rows[order], subjects=names))) == told(expected)


@each
def test_subjects_are_listed_in_natural_order(method):
    names = ["P10", "P9", "P2", "P1", "P30", "P4", "P20"]
    result = call(method, raw(ROWS, subjects=names))
    assert result.subjects == ("P1", "P2", "P4", "P9", "P10", "P20", "P30")


@pytest.mark.parametrize("method", [m for m in METHODS if m.uses == "ranks"], ids=lambda m: m.name)
@given(rows=tables(n=st.integers(2, 6), k=st.just(3)))
def test_a_monotone_transform_moves_no_rank_method(method, rows):
    expected = call(method, raw(rows))
    cubes = call(method, raw(np.power(rows, 3)))
    logs = call(method, raw(rows).log())
    for other in (cubes, logs):
        for found, wanted in (
            (other.p_value, expected.p_value),
            (other.statistic, expected.statistic),
        ):
            assert found == wanted or (math.isnan(found) and math.isnan(wanted))


@each_omnibus
def test_the_order_of_the_columns_changes_no_answer(method):
    expected = call(method, raw(ROWS))
    for order in ([2, 0, 1], [1, 0, 2]):
        table = raw(ROWS).select(occasions=[LABELS[j] for j in order])
        found = call(method, table)
        assert found.p_value == pytest.approx(expected.p_value, rel=1e-10)
        assert found.statistic == pytest.approx(expected.statistic, rel=1e-10)


@each_pair
@given(rows=tables(n=st.integers(2, 8), k=st.just(2)))
def test_swapping_two_occasions_swaps_the_directions(method, rows):
    table, function = raw(rows), method.load()
    forward = {a: function(table, *PAIR, alternative=a) for a in ("two-sided", "greater", "less")}
    back = {a: function(table, *PAIR[::-1], alternative=a) for a in forward}
    for one, other in (("two-sided", "two-sided"), ("greater", "less"), ("less", "greater")):
        expected = forward[one].p_value
        assert back[other].p_value == pytest.approx(expected, rel=1e-10, nan_ok=True)


def _complement(probability):
    return 1 - probability


@each_pair
def test_an_estimate_turns_round_when_the_occasions_are_swapped(method):
    function = method.load()
    for table, turned in ((raw(ROWS), lambda x: -x), (raw(ROWS).log(), lambda x: 1 / x)):
        there = function(table, *PAIR).estimate
        back = function(table, *PAIR[::-1]).estimate
        if there.name.startswith("probability"):
            turned = _complement
        assert back.value == pytest.approx(turned(there.value), rel=1e-10)
        assert back.low == pytest.approx(turned(there.high), rel=1e-10)
        assert back.high == pytest.approx(turned(there.low), rel=1e-10)


@each_drawn
def test_the_same_seed_gives_the_same_answer(method):
    def drawn(rng):
        return call(method, raw(ROWS), null="monte carlo", draws=999, rng=rng)

    one = drawn(5)
    assert told(one) == told(drawn(5))
    assert told(one) == told(drawn(np.random.default_rng(5)))
    assert one.null == "monte carlo"
    assert one.draws == 999
    low, high = one.p_interval
    assert low <= one.p_value <= high or one.p_value == 1
    assert len({drawn(seed).p_value for seed in range(4)}) > 1


@each_drawn
def test_monte_carlo_comes_near_the_exact_p(method):
    exact = call(method, raw(ROWS), null="exact")
    drawn = call(method, raw(ROWS), null="monte carlo", draws=9999, rng=2)
    low, high = present(drawn.p_interval)
    assert low <= exact.p_value <= high


# ── small, flat and extreme tables ────────────────────────────────────────────────────────────


@each
@given(rows=tables(n=st.integers(2, 7), k=st.integers(2, 4)))
def test_p_values_and_intervals_are_in_bounds_on_small_tied_tables(method, rows):
    try:
        check_bounds(call(method, raw(rows)))
    except rm.TooFewError as error:
        # from 2 subjects up, only a method that needs more of them than are there may refuse
        needed = re.search(r"needs at least (\d+) subjects .*, got (\d+)\.$", str(error))
        assert needed
        assert int(needed[2]) == len(rows) < int(needed[1])


@each
@pytest.mark.parametrize("value", [0.0, 7.0, 0.1, 1e-9, 1e9])
def test_a_table_without_change_is_answered_in_words(method, value):
    result = call(method, raw(np.full((6, 3), value)))
    check_bounds(result)
    assert math.isnan(result.p_value) or result.p_value == 1


@each
@pytest.mark.parametrize("rows", [[[3.0, 1.0, 2.0]], [[2.0, 2.0, 2.0]]])
def test_one_subject_is_answered_or_refused_in_words(method, rows):
    try:
        check_bounds(call(method, raw(rows)))
    except rm.TooFewError as error:
        assert re.search(r"needs at least [2-9] subjects", str(error))  # noqa: PT017


@each
def test_two_occasions_are_enough(method):
    check_bounds(call(method, raw([row[:2] for row in ROWS])))


@each
@pytest.mark.parametrize("factor", [1e-300, 1e-12, 1e12, 1e150, 1e300])
@pytest.mark.parametrize("scale", ["raw", "log"])
def test_huge_and_tiny_values_are_answered_without_a_warning(method, factor, scale):
    table = raw(np.array(ROWS) * factor).on_scale(scale)
    check_bounds(call(method, table))


@each
def test_values_of_very_different_size_are_answered_without_a_warning(method):
    rows = [[1e-8, 1e8, 3.0], [2e-8, 1e7, 5.0], [1e-8, 4e8, 2.0], [3e8, 1e-8, 7.0]]
    check_bounds(call(method, raw(rows)))
    check_bounds(call(method, raw(rows).log()))


@each
def test_a_table_without_a_usable_subject_is_refused_in_words(method):
    rows = [[1.0, math.nan, math.nan], [math.nan, 2.0, math.nan], [math.nan, math.nan, 3.0]]
    with pytest.raises(rm.TooFewError, match=r"needs (at least \d subjects?|a subject)\b"):
        call(method, raw(rows))


# ── missing cells and limits ──────────────────────────────────────────────────────────────────

GAPS = [*ROWS, [7.7, math.nan, 6.1], [math.nan, 3.3, 2.8], [8.0, 6.3, math.nan]]


@each
def test_missing_cells_leave_the_complete_rows(method):
    table = raw(GAPS)
    result = call(method, table)
    if method.name in FOR_GAPS:
        assert result.n_subjects == len(GAPS)
        return
    kept = 7 + (method.kind == "pair")
    assert result.n_subjects == kept
    chosen = table.select(subjects=[f"S{i}" for i in (1, 2, 3, 4, 5, 6, 7, 10)[:kept]])
    assert told(result) == told(call(method, chosen))


@each
def test_values_beyond_a_limit_are_answered_and_differ_from_missing_ones(method):
    rows = [*ROWS, [0.5, 0.9, 0.5], [1.0, 0.5, 0.8]]
    below = np.array(rows) == 0.5
    for scale in ("raw", "log"):
        result = call(method, raw(rows, below=below, lower_limit=0.5).on_scale(scale))
        assert result.n_subjects == len(rows)
        check_bounds(result)


@each_directed
def test_an_unknown_direction_is_refused_with_the_nearest(method):
    with pytest.raises(rm.ArgumentError, match=r"`alternative` must be one of .*'greater'\?"):
        call(method, raw(ROWS), alternative="greather")


@each_pair
def test_an_unknown_or_repeated_occasion_is_refused(method):
    with pytest.raises(rm.ArgumentError, match=r"`second` must name one of .*got 'week 3'"):
        method.load()(raw(ROWS), "week 0", "week 3")
    with pytest.raises(rm.ArgumentError, match="`first` and `second` must differ"):
        method.load()(raw(ROWS), "week 0", "week 0")


@each_pair
def test_the_method_serves_a_family_of_comparisons(method):
    family = rm.follow_up(raw(ROWS), method=method.name, family="all")
    assert [c.result.method for c in family] == [method.name] * 3
    for c in family:
        check_bounds(c.result)
        assert c.p_value <= c.p_adjusted <= 1
