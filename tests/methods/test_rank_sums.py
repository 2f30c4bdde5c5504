"""Nemenyi's and Conover's comparisons: other code, enumeration, and what a family promises."""

from __future__ import annotations

import copy
import inspect
import itertools
import json
import math
import pickle

import numpy as np
import pandas as pd
import pytest
import scikit_posthocs
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

import robustrm as rm
from robustrm.methods.rank_sums import critical_q
from robustrm.methods.registry import METHODS, SINGLE_STEP_METHODS
from robustrm.results import note_codes
from tests.methods.tables import LABELS, measured, present, raw, row_orders, tables, twice_ranks

NAN = math.nan
FAMILY_METHODS = [method for method in METHODS if method.kind == "family"]
NAMES = [method.name for method in FAMILY_METHODS]
each = pytest.mark.parametrize("method", NAMES)

ROWS = [
    [9.1, 7.2, 6.0, 5.5],
    [4.0, 3.1, 2.5, 2.7],
    [12.0, 12.5, 8.0, 9.9],
    [6.6, 5.0, 5.9, 4.1],
    [3.3, 2.1, 2.0, 1.7],
    [7.5, 6.0, 4.4, 6.2],
    [5.2, 5.6, 3.9, 3.1],
]
TABLE = raw(ROWS)
PERFECT = [[9, 7, 6], [4, 3, 2], [12, 8, 5], [7, 5, 4]]
TIED = [*ROWS, [2.0, 2.0, 1.0, 1.0], [3.0, 3.0, 3.0, 3.0]]


def of(rows, method: str, family="all", **options) -> rm.FollowUps:
    """All pairs of a table by one method."""
    return rm.follow_up(raw(rows), method=method, family=family, **options)


def told(family: rm.FollowUps) -> str:
    """Everything a family says but the names of its subjects, to the last digit."""
    plain = family.to_dict()
    for comparison in plain["comparisons"]:
        comparison["result"].pop("subjects")
    return json.dumps(plain)


def numbers(family: rm.FollowUps) -> list[tuple[float, ...]]:
    """P, adjusted p, estimate and limits of every pair."""
    found: list[tuple[float, ...]] = []
    for c in family:
        e = present(c.estimate)
        low, high = (NAN if end is None else end for end in (e.low, e.high))
        found.append((c.p_value, c.p_adjusted, e.value, low, high))
    return found


def check_bounds(family: rm.FollowUps) -> None:
    for c in family:
        assert 0 < c.p_value <= c.p_adjusted <= 1
        assert math.isfinite(c.result.statistic) or c.result.notes
        e = present(c.estimate)
        assert abs(e.value) <= c.result.n_occasions - 1
        if e.low is not None:
            assert e.low <= e.value <= present(e.high)
            assert family.level - 1e-9 <= present(e.level) < 1


# ── other code ────────────────────────────────────────────────────────────────────────────────


def by_loops(rows, method: str) -> dict[tuple[int, int], tuple[float, float, float]]:
    """Statistic, p and adjusted p of every pair, from counted ranks and SciPy's distributions.

    Nemenyi: Demšar (2006), equation of the critical difference. Conover (1999), section 5.8:
    |R_j − R_i| against t · √(2(bA − ΣR²)/((b − 1)(k − 1))).
    """
    n, k = len(rows), len(rows[0])
    ranks = [[r / 2 for r in twice_ranks(row)] for row in rows]
    sums = [sum(column) for column in zip(*ranks, strict=True)]
    df: float = (n - 1) * (k - 1)
    squares = sum(r * r for row in ranks for r in row)
    se = math.sqrt(2 * (n * squares - sum(s * s for s in sums)) / df)
    if method == "nemenyi":
        se, df = n * math.sqrt(k * (k + 1) / (6 * n)), math.inf
    found = {}
    for i, j in itertools.combinations(range(k), 2):
        t = (sums[j] - sums[i]) / se
        p = 2 * (stats.norm.sf(abs(t)) if math.isinf(df) else stats.t.sf(abs(t), df))
        found[i, j] = (t, p, stats.studentized_range.sf(math.sqrt(2) * abs(t), k, df))
    return found


def spread_is_left(rows) -> bool:
    return len({tuple(twice_ranks(row)) for row in rows}) > 1


@each
@given(rows=st.one_of(measured(), tables(n=st.integers(2, 9), k=st.integers(2, 5))))
def test_every_pair_equals_loops_and_scipy(method, rows):
    if not spread_is_left(rows):
        return
    expected = by_loops(rows, method)
    found = of(rows, method)
    pairs = itertools.combinations(range(len(rows[0])), 2)
    for c, pair in zip(found, pairs, strict=True):
        t, p, p_adjusted = expected[pair]
        assert c.result.statistic == pytest.approx(t, rel=1e-9, abs=1e-12)
        assert c.p_value == pytest.approx(p, rel=1e-9)
        assert c.p_adjusted == pytest.approx(max(p, p_adjusted), rel=1e-8, abs=1e-10)


def test_nemenyi_is_what_scikit_posthocs_finds_called_directly():
    frame = pd.DataFrame(ROWS, columns=list(LABELS[:4]))
    theirs = scikit_posthocs.posthoc_nemenyi_friedman(frame)
    for c in of(ROWS, "nemenyi"):
        assert c.p_adjusted == pytest.approx(theirs.loc[c.first, c.second], rel=1e-10)


def test_conover_is_what_scikit_posthocs_finds_but_for_the_degrees_of_freedom():
    """Its single step takes the range at infinitely many of them, as for a known variance."""
    frame = pd.DataFrame(ROWS, columns=list(LABELS[:4]))
    each_pair = scikit_posthocs.posthoc_conover_friedman(frame)
    single = scikit_posthocs.posthoc_conover_friedman(frame, p_adjust="single-step")
    for c in of(ROWS, "conover"):
        t = abs(c.result.statistic)
        assert c.p_value == pytest.approx(each_pair.loc[c.first, c.second], rel=1e-10)
        known = stats.studentized_range.sf(math.sqrt(2) * t, 4, math.inf)
        assert single.loc[c.first, c.second] == pytest.approx(known, rel=1e-8)
        if t > 1:
            assert c.p_adjusted > single.loc[c.first, c.second]


def test_with_few_subjects_the_range_of_a_known_variance_rejects_too_often():
    """Enumeration of 8 subjects on 3 occasions: the first row is fixed, 6⁷ arrangements."""
    n, k = 8, 3
    sums: dict[tuple[int, ...], int] = {(1, 2, 3): 1}
    for _ in range(n - 1):
        grown: dict[tuple[int, ...], int] = {}
        for (a, b, c), count in sums.items():
            for x, y, z in row_orders([1, 2, 3]).tolist():
                key = (a + x, b + y, c + z)
                grown[key] = grown.get(key, 0) + count
        sums = grown
    level = dict.fromkeys(("own", "known", "nemenyi"), 0)
    df = (n - 1) * (k - 1)
    for rank_sums, count in sums.items():
        spread = max(rank_sums) - min(rank_sums)
        rest = n * n * 14 - sum(s * s for s in rank_sums)  # 14 = 1 + 4 + 9
        se = math.sqrt(2 * rest / df)
        level["own"] += count * (spread * math.sqrt(2) >= critical_q(k, 0.95, df) * se)
        level["known"] += count * (spread * math.sqrt(2) >= critical_q(k, 0.95) * se)
        level["nemenyi"] += count * (
            spread >= critical_q(k, 0.95) * math.sqrt(n * k * (k + 1) / 12)
        )
    share = {name: hits / 6 ** (n - 1) for name, hits in level.items()}
    assert share["own"] < 0.05
    assert share["nemenyi"] < 0.05
    assert 0.07 < share["known"] < 0.09


@each
@pytest.mark.parametrize("level", [0.8, 0.95, 0.999])
def test_an_interval_leaves_out_zero_where_the_adjusted_p_is_below_the_level(method, level):
    rng = np.random.default_rng(3)
    seen = set()
    for _ in range(40):
        rows = rng.lognormal(0, 0.5, (9, 4)) * [1.0, 0.9, 0.7, 0.5]
        for c in of(rows.round(3), method, level=level):
            e = present(c.estimate)
            outside = not present(e.low) <= 0 <= present(e.high)
            assert outside == (c.p_adjusted < 1 - level)
            seen.add(outside)
    assert seen == {True, False}


def test_the_level_of_one_interval_is_that_of_its_own_quantile():
    for method, tail in (("nemenyi", stats.norm.cdf), ("conover", stats.t(18).cdf)):
        c = next(iter(of(ROWS, method)))
        e = present(c.estimate)
        reach = (present(e.high) - e.value) / c.result.details["standard_error"]
        assert e.level == pytest.approx(2 * tail(reach) - 1, rel=1e-9)
        assert (e.kind, e.no_change, e.unit) == ("studentized range", 0.0, None)


def test_limits_are_cut_where_mean_ranks_end():
    far = present(of(PERFECT, "nemenyi")[LABELS[0], LABELS[2]].estimate)
    assert (far.value, far.low) == (-2, -2)


# ── the family ────────────────────────────────────────────────────────────────────────────────


@each
def test_a_smaller_family_changes_no_number(method):
    whole = of(ROWS, method)
    for family in ("first", "successive", [LABELS[1:3]]):
        for c in of(ROWS, method, family):
            assert c.to_dict() == whole[c.first, c.second].to_dict()


@each
def test_the_family_says_that_all_pairs_count_and_intervals_hold_together(method):
    found = of(ROWS, method, "first", intervals="separate")
    assert (found.adjust, found.intervals, found.family) == ("single-step", "simultaneous", "first")
    assert note_codes(found.notes) == ("all pairs of occasions", "simultaneous intervals")
    assert "among all 4 occasions, of the 7 subjects" in str(found)
    assert "over all 6 pairs, of which the family has 3." in str(found)
    assert "of which" not in str(of(ROWS, method))


@each
def test_the_p_of_a_pair_depends_on_the_other_occasions(method):
    fewer = rm.follow_up(TABLE.select(occasions=LABELS[:3]), method=method, family="all")
    assert fewer[LABELS[0], LABELS[1]].p_value != of(ROWS, method)[LABELS[0], LABELS[1]].p_value


@each
def test_a_pair_named_backwards_turns_round(method):
    there = of(ROWS, method, [(LABELS[0], LABELS[2])])
    back = of(ROWS, method, [(LABELS[2], LABELS[0])])
    (p, p_adjusted, value, low, high), *_ = numbers(there)
    assert numbers(back) == [(p, p_adjusted, -value, -high, -low)]
    one, other = (next(iter(f)).result for f in (there, back))
    assert one.statistic == -other.statistic
    assert one.details["mean_ranks"] == other.details["mean_ranks"][::-1]


@each
def test_two_occasions_have_nothing_to_adjust(method):
    found = of([row[:2] for row in ROWS], method)
    c = next(iter(found))
    assert c.p_adjusted == pytest.approx(c.p_value, rel=1e-9)
    assert found.notes == ()


@pytest.mark.parametrize(
    ("options", "text"),
    [
        ({"adjust": "holm"}, r"`adjust` must be 'single-step' with method 'nemenyi'.*Leave it out"),
        (
            {"adjust": "closed"},
            "`adjust` must be 'single-step' with method 'nemenyi', got 'closed'",
        ),
        ({"adjust": "singel-step"}, r"`adjust` must be one of .* Did you mean 'single-step'\?"),
        ({"options": {"alternative": "less"}}, "`options of nemenyi` must be one of 'level'"),
        ({"family": [("week 0", "week 3")]}, r"`family` must name one of .* got 'week 3'"),
        ({"level": 95}, r"`level` must be in \(0, 1\), got 95"),
        ({"method": "nemeny"}, r"`method` must be one of .* Did you mean 'nemenyi'\?"),
        (
            {"method": "sign_test", "adjust": "single-step"},
            "`method` must be 'nemenyi' or 'conover' with adjust='single-step', got 'sign_test'",
        ),
    ],
)
def test_what_the_method_does_not_take_is_refused(options, text):
    with pytest.raises(rm.ArgumentError, match=text):
        rm.follow_up(TABLE, **{"method": "nemenyi", **options})


@each
def test_its_own_adjustment_may_be_named(method):
    assert told(of(ROWS, method, adjust="single-step")) == told(of(ROWS, method))


def test_other_methods_are_adjusted_by_holm_unless_told_otherwise():
    assert rm.follow_up(TABLE).adjust == "holm"
    assert told(rm.follow_up(TABLE, adjust="holm")) == told(rm.follow_up(TABLE))


# ── the smallest p ────────────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize("rows", [[[1, 2, 3]] * 3, [[1, 2, 3], [1, 1, 2], [1, 2, 2]]])
def test_the_smallest_p_of_nemenyi_is_that_of_the_best_arrangement(rows):
    every = [
        of([list(row) for row in arranged], "nemenyi")
        for arranged in itertools.product(*(row_orders(row).tolist() for row in rows))
    ]
    for family in every[:3]:
        assert family.smallest_p == pytest.approx(
            min(c.p_value for found in every for c in found), rel=1e-12
        )
        assert family.smallest_p_adjusted == pytest.approx(
            min(c.p_adjusted for found in every for c in found), rel=1e-9
        )


def test_a_design_that_cannot_reach_the_level_is_told_so():
    plan = rm.Plan(pair="nemenyi", adjust="single-step", contrasts="all", seed=1)
    analysis = rm.analyze(raw([[1, 2, 3], [1, 2, 3]]), plan)
    assert not analysis.attainable.reachable
    # z = (3 − 1)/√(3 · 4/(6 · 2)) = 2
    smallest = stats.studentized_range.sf(2 * math.sqrt(2), 3, math.inf)
    assert analysis.attainable.smallest_p_adjusted == pytest.approx(smallest, rel=1e-9)
    assert "after single-step adjustment 0.112; no comparison can reach" in str(analysis.attainable)
    conover = rm.analyze(TABLE, plan.replace(pair="conover"))
    assert str(conover.attainable) == "P values of this test have no smallest one."


def test_the_table_of_smallest_p_values_has_tests_by_arrangement_alone():
    assert not set(rm.attainable(TABLE).method) & set(NAMES)


# ── perfect agreement, and nothing but ties ───────────────────────────────────────────────────


def conover_t(rows) -> list[float]:
    """Sizes of t of all pairs, up to a factor; infinite where all rank alike, 0 for a tied pair."""
    ranks = [twice_ranks(row) for row in rows]
    sums = [sum(column) for column in zip(*ranks, strict=True)]
    rest = len(rows) * sum(r * r for row in ranks for r in row) - sum(s * s for s in sums)
    gaps = [abs(a - b) for a, b in itertools.combinations(sums, 2)]
    return [gap / math.sqrt(rest) if rest else math.inf if gap else 0.0 for gap in gaps]


@pytest.mark.parametrize("row", [[9, 7, 6], [9, 7, 7], [3, 1, 1], [2, 1]])
@pytest.mark.parametrize("n", [2, 3, 4])
def test_perfect_agreement_has_the_exact_p_of_its_arrangements(row, n):
    rows = [[cell + i for cell in row] for i in range(n)]
    every = np.array(
        [
            conover_t(arranged)
            for arranged in itertools.product(*(row_orders(r).tolist() for r in rows))
        ]
    )
    found = of(rows, "conover")
    for place, c in enumerate(found):
        assert note_codes(c.result.notes) == ("perfect agreement",)
        if math.isnan(c.result.statistic):
            assert (present(c.estimate).value, c.p_value, c.p_adjusted) == (0, 1, 1)
            continue
        assert c.result.statistic == -math.inf
        assert c.result.null == "exact"
        assert c.p_value == pytest.approx(np.isinf(every[:, place]).mean(), rel=1e-12)
        assert c.p_adjusted == pytest.approx(np.isinf(every).any(axis=1).mean(), rel=1e-12)
        assert present(c.estimate).low is None


def test_perfect_agreement_does_not_disturb_nemenyi():
    found = of(PERFECT, "nemenyi")
    assert all(c.result.null == "asymptotic" and not c.result.notes for c in found)


def test_a_p_below_every_exact_one_is_noted():
    """Seven subjects rank alike and one almost: t is far out, and its p below (1/6)⁷."""
    rows = [[9 + i, 7 + i, 5 + i] for i in range(7)] + [[9, 5, 7]]
    found = of(rows, "conover")
    for c in found:
        below = c.p_value < 6.0**-7
        assert ("below every exact p" in note_codes(c.result.notes)) == below
    assert found[LABELS[0], LABELS[2]].p_value < 6.0**-7
    note = found[LABELS[0], LABELS[2]].result.notes[0]
    assert "below 3.57e−06" in note.fact


@each
@pytest.mark.parametrize("value", [0.0, 7.0, 0.1, 1e-9, 1e9])
def test_a_table_without_change_has_p_one_and_says_why(method, value):
    for c in of(np.full((6, 3), value), method):
        assert (c.p_value, c.p_adjusted) == (1, 1)
        assert math.isnan(c.result.statistic)
        assert note_codes(c.result.notes) == ("all tied",)
        assert present(c.estimate).low is None


def test_ties_are_told_where_the_variance_does_not_know_them():
    tied = of(TIED, "nemenyi")
    assert "2 of 9 subjects with tied values" in str(next(iter(tied)).result)
    assert {code for c in of(TIED, "conover") for code in note_codes(c.result.notes)} == set()
    assert {code for c in of(ROWS, "nemenyi") for code in note_codes(c.result.notes)} == set()


# ── what the methods of a family promise ──────────────────────────────────────────────────────


def test_the_registry_names_the_methods_with_an_adjustment_of_their_own():
    assert tuple(NAMES) == SINGLE_STEP_METHODS


@pytest.mark.parametrize("method", FAMILY_METHODS, ids=lambda m: m.name)
def test_the_registry_lists_the_options_and_the_front_desk_has_no_function(method):
    parameters = inspect.signature(method.load()).parameters.values()
    options = [p.name for p in parameters if p.kind is p.KEYWORD_ONLY]
    assert tuple(options) == method.options
    assert [p.name for p in parameters if p.kind is not p.KEYWORD_ONLY] == ["table", "pairs"]
    assert not hasattr(rm, method.name)
    assert not method.is_additive
    assert method.question.endswith("?")


@pytest.mark.parametrize("method", FAMILY_METHODS, ids=lambda m: m.name)
def test_the_docstring_tells_the_limits_and_the_sources(method):
    text = present(inspect.getdoc(method.load()))
    for section in ("Parameters", "Returns", "Raises", "Notes", "References", "Examples"):
        assert f"\n{section}\n{'-' * len(section)}\n" in text, section


@each
@pytest.mark.parametrize("scale", ["raw", "log"])
def test_a_row_says_what_was_asked_of_whom(method, scale):
    for c in rm.follow_up(TABLE.on_scale(scale), method=method, family="all"):
        result = c.result
        assert (result.method, result.scale, result.alternative) == (method, scale, "two-sided")
        assert result.n_subjects == len(result.subjects) == len(ROWS)
        assert result.n_occasions == 4
        assert result.null == "asymptotic"
        assert "exchangeable" in result.hypothesis
        assert result.estimand == "difference of mean ranks among all occasions"
        assert present(c.estimate).scale == "raw"


@each
def test_a_family_survives_json_and_travel(method):
    family = of(ROWS, method)
    plain = family.to_dict()
    assert json.loads(json.dumps(plain, allow_nan=False)) == plain
    assert told(pickle.loads(pickle.dumps(family))) == told(copy.deepcopy(family)) == told(family)
    assert len(family.to_frame()) == 6


@each
def test_the_input_is_left_as_it_was(method):
    values = np.array(ROWS)
    table = raw(values)
    before = table.to_long()
    rm.follow_up(table, method=method)
    np.testing.assert_array_equal(values, ROWS)
    assert before.equals(table.to_long())


@each
@given(rows=measured(), data=st.data())
def test_the_order_and_the_names_of_the_subjects_change_no_bit(method, rows, data):
    order = data.draw(st.permutations(range(len(rows))))
    names = data.draw(st.permutations([f"P{i}" for i in range(len(rows))]))
    shuffled = raw([rows[i] for i in order], subjects=names)
    assert told(rm.follow_up(shuffled, method=method, family="all")) == told(of(rows, method))


@each
def test_subjects_are_listed_in_natural_order(method):
    names = ["P10", "P9", "P2", "P1", "P30", "P4", "P20"]
    result = next(iter(rm.follow_up(raw(ROWS, subjects=names), method=method))).result
    assert result.subjects == ("P1", "P2", "P4", "P9", "P10", "P20", "P30")


@each
@given(rows=tables(n=st.integers(2, 6), k=st.just(3)))
def test_a_monotone_transform_moves_no_number(method, rows):
    expected = numbers(of(rows, method))
    for other in (raw(np.power(rows, 3)), raw(rows).log()):
        found = rm.follow_up(other, method=method, family="all")
        np.testing.assert_array_equal(numbers(found), expected)


@each
def test_the_order_of_the_columns_changes_no_answer(method):
    expected = of(ROWS, method)
    for order in ([2, 0, 3, 1], [1, 0, 2, 3]):
        table = TABLE.select(occasions=[LABELS[j] for j in order])
        pairs = [(c.first, c.second) for c in expected]
        found = rm.follow_up(table, method=method, family=pairs)
        np.testing.assert_allclose(numbers(found), numbers(expected), rtol=1e-10)


@each
@given(rows=tables(n=st.integers(2, 7), k=st.integers(2, 4)))
def test_p_values_and_intervals_are_in_bounds_on_small_tied_tables(method, rows):
    check_bounds(of(rows, method))


@each
@pytest.mark.parametrize("n", [40, 400])
def test_many_subjects_who_almost_agree_have_a_p_that_is_not_zero(method, n):
    rows = [[1.0, 2.0, 3.0, 4.0]] * (n - 1) + [[1.0, 2.0, 4.0, 3.0]]
    for some in (rows, rows[:-1]):
        check_bounds(of(some, method))


@each
@pytest.mark.parametrize("factor", [1e-300, 1e-12, 1e12, 1e150, 1e300])
@pytest.mark.parametrize("scale", ["raw", "log"])
def test_huge_and_tiny_values_are_answered_without_a_warning(method, factor, scale):
    table = raw(np.array(ROWS) * factor).on_scale(scale)
    check_bounds(rm.follow_up(table, method=method))


@each
@pytest.mark.parametrize(
    ("rows", "n"),
    [
        ([[3.0, 1.0, 2.0]], "1"),
        ([[1.0, NAN, NAN], [NAN, 2.0, NAN], [NAN, NAN, 3.0]], "none"),
        ([[1.0, 2.0, 3.0], [NAN, 2.0, 4.0]], "1"),
    ],
)
def test_too_few_complete_subjects_are_refused_in_words(method, rows, n):
    message = f"needs at least 2 subjects with all 3 occasions, got {n}"
    with pytest.raises(rm.TooFewError, match=message):
        of(rows, method)


@each
def test_missing_cells_leave_the_complete_rows(method):
    gaps = [*ROWS, [7.7, NAN, 6.1, 5.0], [NAN, 3.3, 2.8, 2.0], [8.0, 6.3, 5.5, NAN]]
    table = raw(gaps)
    found = rm.follow_up(table, method=method, family="all")
    assert next(iter(found)).result.subjects == tuple(f"S{i}" for i in range(1, 8))
    chosen = table.select(subjects=[f"S{i}" for i in range(1, 8)])
    assert told(found) == told(rm.follow_up(chosen, method=method, family="all"))
    assert numbers(found) == numbers(of(ROWS, method))


@each
def test_values_beyond_the_limit_are_tied_and_below_all_others(method):
    rows = [*ROWS, [0.5, 0.9, 0.5, 0.7], [1.0, 0.5, 0.8, 0.5]]
    below = np.array(rows) == 0.5
    limited = raw(rows, below=below, lower_limit=0.5)
    found = rm.follow_up(limited, method=method, family="all")
    tied = of(np.where(below, 0.1, rows), method)
    assert numbers(found) == numbers(tied)
    assert numbers(rm.follow_up(limited.log(), method=method, family="all")) == numbers(tied)


# ── in an analysis ────────────────────────────────────────────────────────────────────────────


@each
def test_an_analysis_takes_the_method_as_its_plan(method):
    plan = rm.Plan(pair=method, adjust="single-step", omnibus="friedman", seed=1)
    analysis = rm.analyze(TABLE, plan)
    expected = rm.follow_up(TABLE.log(), method=method)
    assert told(analysis.primary) == told(expected)


@each
def test_an_analysis_shows_the_method_beside_or_says_why_not(method):
    shown = rm.analyze(TABLE, rm.Plan(companions=(method,), seed=1))
    rows = [row for row in shown.supplementary if row.result.method == method]
    assert [(row.p_adjusted, row.adjust) for row in rows] == [
        (c.p_adjusted, "single-step") for c in rm.follow_up(TABLE.log(), method=method)
    ]
    gaps = [[1.0, 2.0, NAN], [2.0, NAN, 3.0], [NAN, 3.0, 5.0], [1.0, 4.0, 6.0]]
    without = rm.analyze(raw(gaps), rm.Plan(companions=(method,), seed=1))
    told_why = [skip.reason for skip in without.skips]
    assert any("needs at least 2 subjects with all 3 occasions" in reason for reason in told_why)
