"""Far tails asked of the methods themselves: what they accept, answer and say."""

from __future__ import annotations

import re

import numpy as np
import pytest

import robustrm as rm
from robustrm.methods.registry import METHODS
from robustrm.results import note_codes
from tests.methods.tables import PAIR, present, raw

LINES = ("sign_test", "signed_rank", "sign_flip", "page_trend")
ADDITIVE = [m for m in METHODS if m.is_additive]
each = pytest.mark.parametrize("method", ADDITIVE, ids=lambda m: m.name)
each_line = pytest.mark.parametrize(
    "method", [m for m in ADDITIVE if m.name in LINES], ids=lambda m: m.name
)
each_square = pytest.mark.parametrize(
    "method", [m for m in ADDITIVE if m.name not in LINES], ids=lambda m: m.name
)


def call(method, table, **options):
    """Call a method on a table: two-occasion methods on the first two labels."""
    if method.kind == "pair":
        return method.load()(table, *PAIR, **options)
    if "order" in method.requires:
        options["order"] = table.occasions
    return method.load()(table, **options)


def skewed(n, k, rise, seed=4):
    """Skewed values with three decimals and a rise over the occasions."""
    rng = np.random.default_rng(seed)
    own = rng.lognormal(2, 0.8, size=(n, 1))
    steps = rng.lognormal(0, 0.3, size=(n, k)) * np.exp(np.linspace(0, rise, k))
    return (own * steps).round(3)


def test_the_linear_methods_are_those():
    def is_line(method):
        found = call(method, raw(skewed(5, 3, 0.1)))
        return method.kind == "pair" or found.alternative is not None

    assert {m.name for m in ADDITIVE if is_line(m)} == set(LINES)


@each
def test_importance_sampling_agrees_with_exact(method):
    """Exact from the same method, at n = 12, k = 3."""
    table = raw(skewed(12, 3, 0.25)).log()
    exact = call(method, table, null="exact")
    found = call(method, table, null="importance sampling", draws=20_000, rng=1)
    assert found.p_value == pytest.approx(exact.p_value, rel=0.1)
    assert found.arrangements == exact.arrangements
    assert found.statistic == exact.statistic
    if found.null == "exact":
        assert "counted" in note_codes(found.notes)
        assert (found.draws, found.p_interval) == (None, None)
        assert found.p_value == pytest.approx(exact.p_value, rel=1e-9)
        return
    assert found.null == "importance sampling"
    assert found.draws == 20_000
    low, high = present(found.p_interval)
    assert low <= exact.p_value <= high
    assert found.details["effective_sample_size"] > 1000
    (note,) = [note for note in found.notes if note.code == "importance sampling"]
    assert re.fullmatch(
        r"P by importance sampling with 20000 draws \(effective sample size \d+\): [\d.e−]+, "
        r"99% interval [\d.e−]+ to [\d.e−]+\.",
        note.fact,
    )
    again = call(method, table, null="importance sampling", draws=20_000, rng=1)
    assert again.p_value == found.p_value


@each_line
def test_a_saddlepoint_is_near_exact_and_says_what_it_is(method):
    table = raw(skewed(36, 3, 0.1)).log()
    exact = call(method, table, null="exact")
    found = call(method, table, null="saddlepoint")
    assert found.p_value == pytest.approx(exact.p_value, rel=0.03)
    assert (found.null, found.draws, found.p_interval) == ("saddlepoint", None, None)
    (note,) = [note for note in found.notes if note.code == "saddlepoint"]
    assert "approximation" in note.fact


@each_square
def test_a_saddlepoint_of_a_quadratic_form_is_refused(method):
    with pytest.raises(
        rm.ArgumentError,
        match=r"`null` must be one of 'auto', 'exact', 'monte carlo', 'importance sampling', got",
    ):
        call(method, raw(skewed(6, 3, 0.2)), null="saddlepoint")


@pytest.mark.parametrize("null", ["importance sampling", "saddlepoint"])
def test_where_there_is_no_such_null_it_is_refused(null):
    table = raw(skewed(8, 3, 0.2))
    with pytest.raises(rm.ArgumentError, match="`null` must be one of 'auto', 'exact', 'monte"):
        rm.rank_pair(table, *PAIR, null=null)
    with pytest.raises(rm.ArgumentError, match="`null` must be one of 'auto', 'exact', 'monte"):
        rm.follow_up(table, method="sign_flip", adjust="closed", null=null)


def test_nine_occasions_are_too_many_to_list():
    table = rm.OccasionTable.from_array(
        skewed(12, 9, 0.3), occasions=[f"week {j}" for j in range(9)]
    )
    with pytest.raises(
        rm.BudgetError,
        match=r"`null` must be 'auto' or 'monte carlo' for this table, got 'importance sampling': "
        r".* at most 40,320, and here are 362,880\.",
    ):
        rm.mean_permutation(table, null="importance sampling")


def test_a_far_tail_that_monte_carlo_cannot_reach():
    """20 subjects, 4 occasions, real values: 24^20 arrangements, beyond the exact budget."""
    table = raw(skewed(20, 4, 0.9)).log()
    with pytest.raises(rm.BudgetError):
        rm.mean_permutation(table, null="exact")
    found = rm.mean_permutation(table, null="importance sampling", rng=1)
    assert found.null == "importance sampling"
    assert found.p_value < 1e-8
    low, high = present(found.p_interval)
    assert high / low < 1.2
    other = rm.mean_permutation(table, null="importance sampling", rng=2)
    assert other.p_value == pytest.approx(found.p_value, rel=0.1)


def test_few_effective_draws_are_told():
    table = raw(skewed(20, 4, 0.9)).log()
    found = rm.mean_permutation(table, null="importance sampling", draws=99, rng=1)
    (note,) = [note for note in found.notes if note.code == "importance sampling"]
    assert found.details["effective_sample_size"] < 100
    assert "may be too short" in note.consequence
    assert note.action == "Raise `draws`."


def test_draws_in_doubt_of_a_threshold_are_raised():
    table = raw(skewed(20, 4, 0.3)).log()
    p = rm.mean_permutation(table, null="importance sampling", draws=20_000, rng=1).p_value
    found = rm.mean_permutation(table, null="importance sampling", thresholds=(p,), rng=1)
    assert found.draws == 200_000


@pytest.mark.parametrize("null", ["importance sampling", "saddlepoint"])
def test_a_flat_table_has_p_one(null):
    table = raw(np.full((6, 3), 5.0))
    assert rm.signed_rank(table, *PAIR, null=null).p_value == 1
    if null == "importance sampling":
        assert rm.friedman(table, null=null).p_value == 1


def test_missing_visits():
    values = skewed(9, 3, 0.4)
    values[0, 1] = values[4, 2] = values[7, 0] = np.nan
    exact = rm.skillings_mack(raw(values), null="exact")
    found = rm.skillings_mack(raw(values), null="importance sampling", rng=1)
    assert found.p_value == pytest.approx(exact.p_value, rel=0.1)


def test_follow_ups_pass_it_on():
    table = raw(skewed(30, 3, 0.3)).log()
    found = rm.follow_up(table, method="sign_flip", null="saddlepoint")
    exact = rm.follow_up(table, method="sign_flip", null="exact")
    for one, other in zip(found, exact, strict=True):
        assert one.p_value == pytest.approx(other.p_value, rel=0.1)
