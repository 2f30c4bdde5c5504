"""What every additive test shares: its ways to a p value, their notes and their limits."""

from __future__ import annotations

import math
import re

import numpy as np
import pytest

import robustrm as rm
from robustrm.methods.additive import NullOptions, chi2_problem, complete_pair, complete_rows
from robustrm.methods.registry import METHODS
from robustrm.results import note_codes
from tests.methods.tables import LABELS, PAIR, present, raw

ADDITIVE = [m for m in METHODS if m.is_additive]
EXACT_FAR = {"sign_test", "signed_rank", "friedman"}  # whole scores, cheap for many subjects
each = pytest.mark.parametrize("method", ADDITIVE, ids=lambda m: m.name)
each_costly = pytest.mark.parametrize(
    "method", [m for m in ADDITIVE if m.name not in EXACT_FAR], ids=lambda m: m.name
)


def call(method, table, **options):
    """Call a method on a table: two-occasion methods on the first two labels."""
    if method.kind == "pair":
        return method.load()(table, *PAIR, **options)
    if "order" in method.requires:
        options["order"] = table.occasions
    return method.load()(table, **options)


def gamma(n, k, seed=4):
    """Skewed values with three decimals and a rise over the occasions."""
    rng = np.random.default_rng(seed)
    rise = np.linspace(1, 1.4, k)
    return (rng.lognormal(2, 0.8, size=(n, 1)) * rng.lognormal(0, 0.3, size=(n, k)) * rise).round(3)


@each
def test_monte_carlo_agrees_with_exact_within_its_interval(method):
    table = raw(gamma(8, 3)).log()
    exact = call(method, table)
    drawn = call(method, table, null="monte carlo", draws=9999, rng=20)
    assert exact.null == "exact"
    assert (exact.draws, exact.p_interval) == (None, None)
    assert (drawn.null, drawn.draws) == ("monte carlo", 9999)
    low, high = present(drawn.p_interval)
    assert low <= exact.p_value <= high
    assert low <= drawn.p_value <= high
    assert drawn.statistic == exact.statistic
    assert drawn.arrangements == exact.arrangements
    assert drawn.details["smallest_p"] == exact.details["smallest_p"]


@each
def test_monte_carlo_p_is_a_share_of_the_draws_and_the_observed_one(method):
    """(b + 1) / (B + 1), doubled for two sides (Phipson & Smyth 2010)."""
    result = call(method, raw(gamma(8, 3)), null="monte carlo", draws=999, rng=3)
    assert result.p_value * 1000 == pytest.approx(round(result.p_value * 1000), abs=1e-9)
    again = call(method, raw(gamma(8, 3)), null="monte carlo", draws=999, rng=3)
    assert again.p_value == result.p_value


@each
def test_a_drawn_p_says_so_with_its_interval(method):
    result = call(method, raw(gamma(8, 3)), null="monte carlo", draws=999, rng=3)
    (note,) = [note for note in result.notes if note.code == "monte carlo"]
    assert re.match(
        r"P by 999 random arrangements: [\d.]+, 99% interval [\d.]+ to [\d.]+", str(note)
    )


@each_costly
def test_exact_beyond_the_budget_is_refused_with_its_cost(method):
    values = gamma(70, 6)
    values[0, 0] = np.nan if method.name == "skillings_mack" else values[0, 0]
    options = {"scores": [0.0, 0.3, 1.7, 2.9, 5.1, 11.3]} if method.name == "page_trend" else {}
    table = raw(values).log()
    with pytest.raises(rm.BudgetError) as refused:
        call(method, table, null="exact", **options)
    assert re.fullmatch(
        r"`null` must be 'auto' or 'monte carlo' for this table, got 'exact': "
        r"exact would need about (\S+|more than 1e300) operations \(budget 2e9\)\.",
        str(refused.value),
    )
    result = call(method, table, draws=99, rng=1, **options)
    assert (result.null, result.draws) == ("monte carlo", 99)
    assert "monte carlo" in note_codes(result.notes)


@each
def test_the_smallest_p_is_not_known_beyond_the_budget_and_else_a_number(method):
    small = call(method, raw(gamma(6, 3)))
    assert 0 < small.details["smallest_p"] <= small.p_value
    if method.name not in EXACT_FAR:
        options = {"scores": [0.0, 0.3, 1.7, 2.9, 5.1, 11.3]} if "scores" in method.options else {}
        values = gamma(70, 6)
        values[0, 0] = np.nan if method.name == "skillings_mack" else values[0, 0]
        large = call(method, raw(values).log(), draws=99, rng=1, **options)
        assert large.details["smallest_p"] is None


@each
@pytest.mark.parametrize("null", ["Exact", "asymptotic", ""])
def test_another_null_is_refused(method, null):
    with pytest.raises(
        rm.ArgumentError, match="`null` must be one of 'auto', 'exact', 'monte carlo'"
    ):
        call(method, raw(gamma(5, 3)), null=null)


@each
@pytest.mark.parametrize("draws", [98, 0, -5, (999, 99), (), 1.5, True])
def test_draws_that_are_no_rising_whole_numbers_are_refused(method, draws):
    with pytest.raises(
        rm.ArgumentError, match="`draws` must be rising whole numbers of at least 99"
    ):
        call(method, raw(gamma(5, 3)), draws=draws)


@each
def test_the_order_of_the_rows_and_the_names_of_the_subjects_change_nothing(method):
    values = gamma(7, 3)
    for null in ("auto", "monte carlo"):
        one = call(method, raw(values), null=null, draws=199, rng=5)
        other = call(method, raw(values[::-1]), null=null, draws=199, rng=5)
        assert (one.statistic, one.p_value) == (other.statistic, other.p_value)


# ── the pieces ────────────────────────────────────────────────────────────────────────────────


def test_draws_go_on_while_a_threshold_is_in_doubt():
    values = gamma(9, 3)
    p = rm.mean_permutation(raw(values)).p_value

    def drawn(threshold):
        return rm.mean_permutation(
            raw(values), null="monte carlo", draws=(99, 999), thresholds=(threshold,), rng=1
        )

    clear, doubt = drawn(0.9999), drawn(p)
    assert (clear.draws, doubt.draws) == (99, 999)
    assert "is not resolved against" in str(doubt.notes[0])
    assert "Raise `draws`" in str(doubt.notes[0])
    assert "is not resolved" not in str(clear.notes[0])


def test_a_problem_holds_the_observed_sum_and_the_statistic_of_it():
    table = raw([[1, 2, 3], [1, 3, 2]])
    scores = np.array([[-2.0, 0, 2], [-2, 2, 0]])
    problem = chi2_problem(table, scores)
    assert problem.observed.tolist() == [-4, 2, 2]
    # T = 24, A = 16, χ² = 2 · 24 / 16
    assert problem.observed_statistic == 3
    found = problem.tail(NullOptions())
    assert (found.tail.null, found.notes) == ("exact", ())
    # of the 36 arrangements 6 agree throughout (T = 32) and 12 but for two neighbours (T = 24)
    assert found.tail.p_value == pytest.approx(18 / 36)
    assert found.smallest_p == pytest.approx(6 / 36)
    assert set(found.fields()) == {"p_value", "null", "p_interval", "arrangements", "draws"}


def test_a_single_pair_has_one_score_a_subject():
    result = rm.sign_flip(raw([[1, 4]]), *PAIR)
    assert (result.p_value, result.arrangements) == (1, 2)


def test_complete_rows_are_at_common_limits_and_in_canonical_order():
    values = [[3.0, 1.0], [np.nan, 2.0], [0.5, 0.9]]
    below = [[False, False], [False, False], [True, False]]
    used = complete_rows(raw(values, below=below, lower_limit=[0.5, 1.5]), "The test")
    assert used.subjects == ("S1", "S3") or used.subjects == ("S3", "S1")
    # at the common limit 1.5 three of the four values cannot be told apart
    assert int(used.below.sum()) == 3
    again = complete_rows(raw(values[::-1], below=below[::-1], lower_limit=[0.5, 1.5]), "The test")
    assert again.values.tolist() == used.values.tolist()


def test_a_table_without_complete_rows_is_refused_by_name():
    table = raw([[1, np.nan, 2], [np.nan, 1, 2]])
    with pytest.raises(rm.TooFewError) as refused:
        complete_rows(table, "The test")
    assert str(refused.value) == "The test needs at least 1 subject with all 3 occasions, got none."
    with pytest.raises(rm.TooFewError) as refused:
        complete_pair(table, LABELS[1], LABELS[0], "The test")
    assert str(refused.value) == (
        "The test of 'week 0' against 'week 2' needs at least 1 subject with both, got none."
    )


@each
def test_one_subject_is_enough_and_proves_nothing(method):
    result = call(method, raw([[1.0, 2.5, 7.0]]))
    assert result.n_subjects == 1
    assert not math.isnan(result.p_value)
    assert result.p_value >= 1 / 6
