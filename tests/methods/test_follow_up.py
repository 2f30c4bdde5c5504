"""Families of comparisons: who is in a pair, what is adjusted, what is refused."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from statsmodels.stats.multitest import multipletests

import robustrm as rm
from robustrm.results import note_codes
from tests.methods.tables import LABELS, present, raw

NAN = math.nan
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


@pytest.mark.parametrize(
    ("family", "expected"),
    [
        ("first", [(0, 1), (0, 2), (0, 3)]),
        ("all", list(itertools.combinations(range(4), 2))),
        ("successive", [(0, 1), (1, 2), (2, 3)]),
        ([("week 6", "week 0"), ("week 2", "week 12")], [(2, 0), (1, 3)]),
    ],
)
def test_the_members_of_a_family_in_their_declared_order(family, expected):
    found = rm.follow_up(TABLE, family=family)
    assert [(c.first, c.second) for c in found] == [(LABELS[i], LABELS[j]) for i, j in expected]
    assert found.family == (family if isinstance(family, str) else "named")
    assert len(found) == len(expected)


@pytest.mark.parametrize("method", ["signed_rank", "paired_t"])
def test_a_member_is_the_test_of_its_own_pair(method):
    for c in rm.follow_up(TABLE, method=method, family="all"):
        alone = getattr(rm, method)(TABLE, c.first, c.second)
        assert c.result == alone
        assert (c.p_value, c.estimate) == (alone.p_value, alone.estimate)


@pytest.mark.reference
@pytest.mark.parametrize(
    ("adjust", "theirs"),
    [("holm", "holm"), ("hommel", "hommel"), ("bh", "fdr_bh"), ("bonferroni", "bonferroni")],
)
def test_adjusted_p_values_are_those_of_statsmodels_over_the_family(adjust, theirs):
    found = rm.follow_up(TABLE, family="all", adjust=adjust)
    expected = multipletests([c.p_value for c in found], method=theirs)[1]
    assert [c.p_adjusted for c in found] == pytest.approx(np.minimum(expected, 1), rel=1e-10)


# ── missing cells ─────────────────────────────────────────────────────────────────────────────

GAPS = [[NAN, *ROWS[0][1:]], [*ROWS[1][:2], NAN, NAN], *ROWS[2:]]


def test_each_pair_uses_all_subjects_that_have_both_of_its_occasions():
    found = rm.follow_up(raw(GAPS), family="all")
    sizes = {(c.first, c.second): c.result.n_subjects for c in found}
    assert sizes["week 0", "week 2"] == 6
    assert sizes["week 0", "week 6"] == 5
    assert sizes["week 6", "week 12"] == 6
    assert found["week 0", "week 6"].result.subjects == ("S3", "S4", "S5", "S6", "S7")
    assert found.to_frame()["n_subjects"].tolist() == list(sizes.values())
    assert "different n" in note_codes(found.notes)


def test_a_pair_that_cannot_be_tested_stays_in_the_family_and_counts():
    rows = [[a, b, NAN] if i % 2 else [NAN, b, c] for i, (a, b, c, _) in enumerate(ROWS)]
    found = rm.follow_up(raw(rows), family="all", adjust="bonferroni")
    lost = found["week 0", "week 6"]
    assert math.isnan(lost.p_value)
    assert math.isnan(lost.p_adjusted)
    assert lost.result.n_subjects == 0
    assert note_codes(lost.result.notes) == ("not estimable",)
    assert "stays in the family and counts" in str(lost.result.notes[0])
    tested = found["week 0", "week 2"]
    assert tested.p_adjusted == pytest.approx(min(1, 3 * tested.p_value))


# ── intervals ─────────────────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize("method", ["signed_rank", "paired_t"])
def test_simultaneous_intervals_are_made_at_the_bonferroni_level(method):
    table = raw([*ROWS, *[[2 * x for x in row] for row in ROWS]])
    found = rm.follow_up(table, method=method, family="all", intervals="simultaneous", level=0.9)
    for c in found:
        alone = getattr(rm, method)(table, c.first, c.second, level=1 - 0.1 / 6).estimate
        joint = present(c.estimate)
        assert joint.low == pytest.approx(alone.low, rel=1e-12)
        assert joint.high == pytest.approx(alone.high, rel=1e-12)
        assert present(joint.level) >= 1 - 0.1 / 6 - 1e-12
    assert note_codes(found.notes) == ("simultaneous intervals",)
    assert "made at level 0.98333 (Bonferroni)" in str(found.notes[0])


def test_separate_intervals_beside_adjusted_p_values_say_so():
    found = rm.follow_up(TABLE)
    assert "not adjusted for 3 comparisons; the p values are" in str(found.notes[0])
    assert "Holm" in str(found.notes[0])
    assert found.notes[0].code == "separate intervals"
    assert "separate intervals" not in note_codes(rm.follow_up(TABLE, adjust="none").notes)


# ── randomness ────────────────────────────────────────────────────────────────────────────────


def drawn(family, rng):
    options = {"draws": 199}
    return rm.follow_up(TABLE, family=family, null="monte carlo", options=options, rng=rng)


def test_monte_carlo_is_repeated_by_its_seed_and_changed_by_another():
    one, same, other = drawn("all", 7), drawn("all", 7), drawn("all", 8)
    assert [c.p_value for c in one] == [c.p_value for c in same]
    assert [c.p_value for c in one] != [c.p_value for c in other]
    assert {c.result.null for c in one} == {"monte carlo"}
    assert {c.result.draws for c in one} == {199}


def test_adding_pairs_changes_no_other_monte_carlo_p():
    alone = drawn([("week 0", "week 6")], 7)["week 0", "week 6"]
    for family in ("all", "first"):
        assert drawn(family, 7)["week 0", "week 6"].p_value == alone.p_value


@pytest.mark.parametrize("make", [np.random.default_rng, np.random.SeedSequence])
def test_a_generator_or_a_seed_sequence_is_a_seed_too(make):
    assert drawn("all", make(3)) == drawn("all", make(3))


# ── refusals ──────────────────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize(
    ("options", "text"),
    [
        ({"family": "frist"}, r"`family` must be one of .* got 'frist'\. Did you mean 'first'\?"),
        ({"family": []}, "`family` must hold pairs of two occasions"),
        ({"family": [("week 0",)]}, "`family` must hold pairs of two occasions"),
        ({"family": [("week 0", "week 1")]}, r"`family` must name one of .* got 'week 1'"),
        ({"family": [("week 0", "week 0")]}, "`family` must hold different pairs"),
        (
            {"family": [("week 0", "week 2"), ("week 2", "week 0")]},
            "`family` must hold different pairs",
        ),
        ({"method": "friedman"}, r"`method` must be one of .* got 'friedman'"),
        ({"adjust": "hom"}, r"`adjust` must be one of .* got 'hom'\. Did you mean 'holm'\?"),
        ({"intervals": "joint"}, "`intervals` must be one of 'separate', 'simultaneous'"),
        ({"level": 95}, r"`level` must be in \(0, 1\), got 95\. Did you mean 0\.95\?"),
        ({"options": {"zeroes": "drop"}}, r"`options of signed_rank` .* Did you mean 'zeros'\?"),
        ({"method": "paired_t", "options": {"zeros": "drop"}}, "`options of paired_t` must be"),
    ],
)
def test_what_is_not_understood_is_refused_with_the_next_step(options, text):
    with pytest.raises(rm.ArgumentError, match=text):
        rm.follow_up(TABLE, **options)
