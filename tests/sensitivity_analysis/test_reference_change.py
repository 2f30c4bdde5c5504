"""Change in one person: the published limits, the formula by hand, bounds, sources and words."""

from __future__ import annotations

import inspect
import io
import json
import math
import statistics
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

import robustrm as rm
from robustrm.sensitivity_analysis.reference_changes import reference_changes
from robustrm.sensitivity_analysis.variation import assay_variation, stable_variation

CV = st.floats(0.001, 3)
LEVEL = st.floats(0.5, 0.999)


def by_hand(cv_within: float, cv_assay: float, *, m: int = 1, level: float = 0.95) -> float:
    """Return the upper limit from the standard library alone."""
    z = statistics.NormalDist().inv_cdf((1 + level) / 2)
    variance = math.log(1 + cv_within**2) + math.log(1 + cv_assay**2) / m
    return math.exp(z * math.sqrt(2) * math.sqrt(variance))


# ── the formula ───────────────────────────────────────────────────────────────────────────


@pytest.mark.reference
def test_the_limits_of_a_marker_that_varies_as_c_reactive_protein_does():
    """Macy, Hayes & Tracy (1997) Clin Chem 43:52-58 give CV_I 42.2% and CV_A 5.2% (from memory).

    With 42% and 5% the lognormal form of Fokkema et al. (2006) Clin Chem 52:1602-1603 gives +208%
    and −68%; recomputed here with the standard library. The symmetric form of Fraser & Harris
    (1989), ±1.96 √2 √(0.42² + 0.05²), gives a fall of 117%, which cannot be.
    """
    low, high = rm.reference_change(0.42, 0.05)
    assert (round(100 * (high - 1)), round(100 * (low - 1))) == (208, -68)
    assert high == pytest.approx(by_hand(0.42, 0.05), rel=1e-12)
    symmetric = 1.96 * math.sqrt(2) * math.sqrt(0.42**2 + 0.05**2)
    assert round(100 * symmetric) == 117


@pytest.mark.property
@given(cv_within=CV, cv_assay=CV, m=st.integers(1, 9), level=LEVEL)
def test_the_formula_and_its_symmetry(cv_within, cv_assay, m, level):
    low, high = rm.reference_change(cv_within, cv_assay, replicates=m, level=level)
    assert high == pytest.approx(by_hand(cv_within, cv_assay, m=m, level=level), rel=1e-9)
    assert low * high == pytest.approx(1)


@pytest.mark.property
@given(cv=CV, other=CV, level=LEVEL)
def test_the_limits_widen_with_every_source_of_variation_and_narrow_with_replicates(
    cv, other, level
):
    base = rm.reference_change(cv, other, level=level)[1]
    assert rm.reference_change(cv * 1.1 if cv < 2.5 else cv, other, level=level)[1] >= base
    assert rm.reference_change(cv, other, replicates=2, level=level)[1] < base
    assert rm.reference_change(cv, 0, level=level)[1] < base
    assert rm.reference_change(cv, other, level=(1 + level) / 2)[1] > base


def test_stable_people_fall_outside_as_often_as_the_level_says():
    """20,000 pairs of lognormal values with 42% within and 5% of the assay, seed fixed.

    The standard error of a share of .05 is .0015.
    """
    rng = np.random.default_rng(20260304)
    sd = [math.sqrt(math.log(1 + cv**2)) for cv in (0.42, 0.05)]
    logs = np.sum([rng.normal(0, s, (20_000, 2)) for s in sd], axis=0)
    ratios = np.exp(logs[:, 1] - logs[:, 0])
    low, high = rm.reference_change(0.42, 0.05)
    assert np.mean((ratios < low) | (ratios > high)) == pytest.approx(0.05, abs=4 * 0.0015)


@pytest.mark.parametrize(
    ("cvs", "message"),
    [
        ((42, 0.05), r"`cv_within` must be a fraction of at most 3, got 42\. Did you mean 0\.42\?"),
        ((0.42, 5), r"`cv_assay` must be a fraction of at most 3, got 5\. Did you mean 0\.05\?"),
        ((-0.42, 0.05), r"`cv_within` must be a fraction of at least 0, got -0\.42"),
        ((0.42, -0.05), r"`cv_assay` must be a fraction of at least 0, got -0\.05"),
        ((math.nan, 0.05), "`cv_within` must be a fraction of at least 0, got nan"),
        ((math.inf, 0.05), "`cv_within` must be a fraction of at least 0, got inf"),
        ((True, 0.05), "`cv_within` must be a fraction of at least 0, got True"),
        (("0.42", 0.05), "`cv_within` must be a fraction of at least 0, got '0.42'"),
    ],
)
def test_a_cv_outside_its_range_is_refused(cvs, message):
    with pytest.raises(rm.ArgumentError, match=message):
        rm.reference_change(*cvs)


def test_a_cv_of_three_is_taken_and_one_far_beyond_has_no_guess():
    assert rm.reference_change(3, 0)[1] > 1
    with pytest.raises(rm.ArgumentError, match=r"got 4200\.$"):
        rm.reference_change(4200, 0)


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"replicates": 0}, "`replicates` must be a whole number of at least 1, got 0"),
        ({"level": 95}, r"`level` must be in \(0, 1\), got 95\. Did you mean 0.95\?"),
    ],
)
def test_an_option_outside_its_range_is_refused(options, message):
    with pytest.raises(rm.ArgumentError, match=message):
        rm.reference_change(0.42, 0.05, **options)


def test_no_cv_has_a_default():
    required = inspect.signature(rm.reference_change).parameters
    assert [p.name for p in required.values() if p.default is p.empty] == ["cv_within", "cv_assay"]
    table = rm.OccasionTable.from_array([[1, 2], [2, 3]], occasions=["a", "b"])
    for cv_assay in (None, 0.05):
        with pytest.raises(rm.ArgumentError, match="`cv_within` must be given with its source"):
            reference_changes(table, source="a paper", cv_assay=cv_assay)


# ── subjects and contrasts ────────────────────────────────────────────────────────────────

NAN = math.nan
GIVEN: dict[str, Any] = {"cv_within": 0.42, "cv_assay": 0.05, "source": "Invented (2026), table 1."}


@pytest.fixture
def table() -> rm.OccasionTable:
    """Limits .324 and 3.08; a value below 0.5 on either side, a gap, one on both sides."""
    values = [
        [9.0, 2.0, 9.0],
        [2.0, 7.0, NAN],
        [4.0, 0.5, 0.5],
        [1.0, 0.5, 1.0],
        [0.5, 2.0, 0.5],
        [0.5, 0.6, 1.0],
    ]
    return rm.OccasionTable.from_array(
        values,
        occasions=["week 0", "week 6", "week 12"],
        subjects=[f"P{i}" for i in (10, 2, 3, 4, 5, 6)],
        below=np.array(values) == 0.5,
        lower_limit=0.5,
        marker="CRP",
    )


def readings(changes: rm.ReferenceChanges, second: str) -> dict[str, tuple]:
    rows = changes.frame[changes.frame["second"] == second].to_dict("records")
    return {row["subject"]: (row["bound"], row["outside"], row["reading"]) for row in rows}


def test_a_value_beyond_a_limit_gives_a_bound_and_no_more(table):
    """Ratios by hand: .222; 3.5; at most .125; at most .5; at least 4; at least 1.2."""
    found = readings(reference_changes(table, **GIVEN), "week 6")
    more, unknown = "more than usual variation", "not known, a value beyond a limit"
    assert found == {
        "P2": ("measured", True, more),
        "P3": ("at most", True, more),
        "P4": ("at most", None, unknown),
        "P5": ("at least", True, more),
        "P6": ("at least", None, unknown),
        "P10": ("measured", True, more),
    }
    assert readings(reference_changes(table, **GIVEN), "week 12") == {
        "P2": ("none", None, "no value on one of the occasions"),
        "P3": ("at most", True, more),
        "P4": ("measured", False, "within usual variation"),
        "P5": ("none", None, unknown),
        "P6": ("at least", None, unknown),
        "P10": ("measured", False, "within usual variation"),
    }


def test_the_counts_are_those_of_the_rows_and_name_what_is_expected(table):
    counts = reference_changes(table, **GIVEN).counts.to_dict("records")
    keys = ("n", "n_below", "n_within", "n_above", "n_unknown")
    assert [[row[key] for key in keys] for row in counts] == [[6, 2, 0, 2, 2], [5, 1, 2, 0, 2]]
    assert [row["n_expected_outside"] for row in counts] == pytest.approx([0.3, 0.25])
    assert all(row["n"] == sum(row[key] for key in keys[1:]) for row in counts)


def test_values_above_an_upper_limit_bound_from_the_other_side():
    values = np.array([[20.0, 20.0], [20.0, 2.0], [2.0, 20.0], [0.5, 20.0]])
    table = rm.OccasionTable.from_array(
        values, occasions=["a", "b"], above=values == 20, below=values == 0.5
    )
    found = readings(reference_changes(table, **GIVEN), "b")
    assert [found[f"S{i}"][0] for i in (1, 2, 3, 4)] == ["none", "at most", "at least", "at least"]
    assert [found[f"S{i}"][1] for i in (1, 2, 3, 4)] == [None, True, True, True]


def test_a_ratio_at_a_limit_lies_within():
    low, high = rm.reference_change(0.42, 0.05)
    table = rm.OccasionTable.from_array(
        [[1.0, high], [1.0, math.nextafter(high, 9)], [1.0, low], [1.0, math.nextafter(low, 0)]],
        occasions=["a", "b"],
    )
    assert reference_changes(table, **GIVEN).frame["outside"].tolist() == [False, True, False, True]


def test_a_limit_of_somebody_else_plays_no_part():
    """A test re-censors at the largest limit; one person's ratio needs only that person's own."""
    table = rm.OccasionTable.from_array(
        [[0.4, 0.6], [3.0, 1.0]],
        occasions=["a", "b"],
        below=[[False, False], [False, True]],
        lower_limit=[[0.1, 0.1], [1.0, 1.0]],
    )
    changes = reference_changes(table, **GIVEN)
    assert changes.frame["ratio"].tolist() == pytest.approx([1.5, 1 / 3])


def test_the_contrasts_and_the_level_are_those_of_the_plan(table):
    plan = rm.Plan(contrasts=(("week 6", "week 12"),), level=0.9)
    changes = reference_changes(table, plan, **GIVEN)
    assert set(changes.frame["first"]) == {"week 6"}
    assert (changes.low, changes.high) == rm.reference_change(0.42, 0.05, level=0.9)
    assert reference_changes(table, plan, level=0.8, **GIVEN).level == 0.8
    assert "more than two results" not in [note.code for note in changes.notes]


def test_more_than_two_results_are_noted_with_their_chance(table):
    (note,) = [
        note
        for note in reference_changes(table, rm.Plan(contrasts="all"), **GIVEN).notes
        if note.code == "more than two results"
    ]
    assert "Each person has 3 comparisons" in note.fact
    assert "up to 15% of stable people lie outside in at least one" in note.consequence
    assert "level 0.9833" in note.action


def test_the_order_of_the_rows_changes_nothing(table):
    turned = table.select(subjects=table.subjects[::-1])
    one, other = reference_changes(table, **GIVEN), reference_changes(turned, **GIVEN)
    assert one.to_dict() == other.to_dict()
    assert one.frame["subject"].tolist()[:2] == ["P2", "P3"]


def test_the_result_is_plain_and_says_what_it_rests_on(table):
    changes = reference_changes(table, **GIVEN)
    text = json.dumps(changes.to_dict(), allow_nan=False)
    assert "Invented (2026), table 1." in text
    assert changes.sentences[0] == (
        "Two values of one stable person usually (95%) have a ratio between 0.324 (−68%) and 3.08 "
        "(+208%), from a CV within a person of 42.0% and of the assay of 5.0%. Source, as given: "
        "Invented (2026), table 1."
    )
    assert changes.sentences[1] == (
        "week 6 vs week 0: of 6 subjects with both values, 4 changed by more than usual variation "
        "(2 below the lower limit, 2 above the upper one), 0 lie within it, 2 not known. Of as "
        "many stable people about 0.3 would lie outside."
    )
    assert "the responsible clinician under the study's protocol" in str(changes)


def test_nobody_with_both_values_is_said():
    table = rm.OccasionTable.from_array([[1.0, NAN], [NAN, 2.0]], occasions=["a", "b"])
    assert reference_changes(table, **GIVEN).sentences[1] == "b vs a: nobody has both values."


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"source": None}, "`source` must say where the CVs come from.*There is no default CV"),
        ({"source": "  "}, "`source` must say"),
        ({"stable": ["week 0", "week 6"]}, "got `cv_within` and `cv_assay` beside it"),
        ({"cv_within": 0, "cv_assay": 0}, "must not both be 0"),
        ({"cv_within": 42}, r"Did you mean 0\.42\?"),
        ({"plan": rm.Plan(marker_kind="score")}, "a score has no ratio"),
        ({"replicates": 0}, "`replicates` must be a whole number of at least 1"),
        ({"level": 95}, r"`level` must be in \(0, 1\)"),
    ],
)
def test_what_cannot_be_used_is_refused(table, options, message):
    with pytest.raises(rm.ArgumentError, match=message):
        reference_changes(table, **{**GIVEN, **options})


def test_a_table_of_logarithms_or_with_a_zero_is_refused(table):
    with pytest.raises(rm.ArgumentError, match="OccasionTable on the raw scale, got 'log'"):
        reference_changes(table.log(), **GIVEN)
    zero = rm.OccasionTable.from_array([[0.0, 1.0]], occasions=["a", "b"])
    with pytest.raises(rm.DataError, match="below a"):
        reference_changes(zero, **GIVEN)


# ── variation from the study itself ───────────────────────────────────────────────────────

REPLICATES = (
    "id,week,crp\n"
    "P1,0,2.0\nP1,0,2.2\nP1,6,1.1\nP1,6,1.0\n"
    "P2,0,5.0\nP2,0,5.5\nP2,0,4.8\nP2,6,0.9\nP2,6,0.9\n"
)


def with_replicates(text: str = REPLICATES, how: Any = "geometric") -> rm.OccasionTable:
    return rm.read_table(
        io.BytesIO(text.encode()),
        subject="id",
        occasion="week",
        value="crp",
        order=["0", "6"],
        replicates=how,
    )


def test_the_cv_of_the_assay_is_pooled_over_the_sets():
    """Pooled by hand with the standard library, the interval by scipy's chi-square quantiles."""
    sets = [[2.0, 2.2], [1.1, 1.0], [5.0, 5.5, 4.8], [0.9, 0.9]]
    squares = sum((len(s) - 1) * statistics.variance([math.log(v) for v in s]) for s in sets)
    found = assay_variation(with_replicates())
    assert (found.df, found.n_sets, found.n_subjects) == (5, 4, 2)
    assert found.variance == pytest.approx(squares / 5)
    assert found.cv == pytest.approx(math.sqrt(math.exp(squares / 5) - 1))
    ends = [squares / stats.chi2.ppf(p, 5) for p in (0.975, 0.025)]
    assert [found.low, found.high] == pytest.approx([math.sqrt(math.exp(e) - 1) for e in ends])
    # how the table averages them plays no part
    assert assay_variation(with_replicates(how="mean")) == found


def test_the_interval_of_the_pooled_cv_holds_its_level():
    """2,000 tables of 8 duplicate sets with a CV of 10%; 4 standard errors of .95 are .02."""
    rng = np.random.default_rng(7)
    s = math.sqrt(math.log(1.01))
    sums = np.sum(np.diff(rng.normal(0, s, (2000, 8, 2)), axis=2)[..., 0] ** 2 / 2, axis=1)
    held = 0
    for total in sums:
        low, high = (total / stats.chi2.ppf(p, 8) for p in (0.975, 0.025))
        held += low <= s**2 <= high
    assert held / 2000 == pytest.approx(0.95, abs=0.02)
    # the same from one table of the package
    logs = rng.normal(0, s, (8, 2))
    lines = [f"P{i},0,{math.exp(v)}\n" for i, pair in enumerate(logs) for v in pair]
    lines += [f"P{i},6,1\n" for i in range(8)]
    found = assay_variation(with_replicates("id,week,crp\n" + "".join(lines)))
    total = float(np.sum(np.diff(logs, axis=1) ** 2 / 2))
    low, high = (total / stats.chi2.ppf(p, 8) for p in (0.975, 0.025))
    assert (found.low, found.high) == pytest.approx(
        (math.sqrt(math.expm1(low)), math.sqrt(math.expm1(high))), rel=1e-6
    )


def test_sets_of_subjects_that_were_left_out_play_no_part():
    table = with_replicates().select(subjects=["P1"])
    assert assay_variation(table).n_sets == 2


def test_own_replicates_give_the_assay_and_never_the_person():
    table = with_replicates()
    own = assay_variation(table)
    changes = reference_changes(table, cv_within=0.42, source="a paper")
    # two measurements at least behind every value
    assert (changes.low, changes.high) == rm.reference_change(0.42, own.cv, replicates=2)
    assert changes.variations == (own,)
    (note,) = [note for note in changes.notes if note.code == "own assay cv"]
    assert "too narrow where occasions were assayed in different runs" in note.consequence
    with pytest.raises(rm.ArgumentError, match="Replicates give the variation of the assay alone"):
        reference_changes(table, source="our replicates")


def test_a_given_assay_cv_is_not_divided_unasked():
    table = with_replicates()
    changes = reference_changes(table, **GIVEN)
    assert (changes.low, changes.high) == rm.reference_change(0.42, 0.05)
    assert "single measurements" in [note.code for note in changes.notes]
    halved = reference_changes(table, replicates=2, **GIVEN)
    assert halved.high == rm.reference_change(0.42, 0.05, replicates=2)[1]
    assert "the mean of 2 measurements" in halved.sentences[0]


def test_without_replicates_there_is_no_own_assay_cv(table):
    with pytest.raises(rm.TooFewError, match="set of at least 2 positive replicates, got none"):
        reference_changes(table, cv_within=0.42, source="a paper")


def test_equal_replicates_have_no_interval():
    text = "id,week,crp\nP1,0,2\nP1,0,2\nP1,6,1\nP1,6,1\n"
    found = assay_variation(with_replicates(text))
    assert (found.cv, found.low, found.high) == (0, None, None)
    assert "interval not estimable" in str(found)


def test_stable_occasions_give_the_whole_variation_with_limits_by_t():
    """Variance by hand, t quantile by scipy."""
    values = [[2.0, 2.6, 1.1], [5.0, 3.9, 4.4], [1.0, 1.4, 0.5], [3.0, NAN, 3.3]]
    table = rm.OccasionTable.from_array(values, occasions=["run-in", "week 0", "week 6"])
    squares = sum(math.log(b / a) ** 2 / 2 for a, b, _ in values[:3])
    found = stable_variation(table, ["run-in", "week 0"])
    assert (found.df, found.n_sets) == (3, 3)
    assert found.variance == pytest.approx(squares / 3)
    plan = rm.Plan(contrasts=(("week 0", "week 6"),))
    changes = reference_changes(
        table, plan, stable=["run-in", "week 0"], source="no change of treatment in the run-in"
    )
    reach = stats.t.ppf(0.975, 3) * math.sqrt(2 * squares / 3)
    assert (changes.low, changes.high) == pytest.approx((math.exp(-reach), math.exp(reach)))
    codes = [note.code for note in changes.notes]
    assert "own variation" in codes
    assert "own variation, same values" not in codes


def test_limits_by_t_hold_their_level_though_the_spread_is_estimated():
    """20,000 studies of six people and a new pair each; with z the share would be about .098."""
    rng = np.random.default_rng(11)
    pairs = rng.normal(0, 0.4, (20_000, 6, 2))
    s2 = np.mean(np.diff(pairs, axis=2)[..., 0] ** 2 / 2, axis=1)
    new = np.abs(np.diff(rng.normal(0, 0.4, (20_000, 2)), axis=1)[:, 0])
    # the factor that the package puts before √2 s, found back from its limits
    rows = np.exp(pairs[0])
    table = rm.OccasionTable.from_array(
        np.column_stack([rows, rows[:, 1]]), occasions=["a", "b", "c"]
    )
    plan = rm.Plan(contrasts=(("b", "c"),))
    changes = reference_changes(table, plan, stable=["a", "b"], source="invented")
    factor = math.log(changes.high) / math.sqrt(2 * s2[0])
    assert np.mean(new > factor * np.sqrt(2 * s2)) == pytest.approx(0.05, abs=0.007)


def test_values_that_set_the_limits_and_are_held_against_them_are_noted(table):
    changes = reference_changes(table, stable=["week 0", "week 6"], source="a run-in")
    codes = {note.code: note for note in changes.notes}
    assert "week 6 vs week 0" in codes["own variation, same values"].fact
    assert codes["own variation, limits"].fact.startswith("4 values beyond a limit left out")


def test_stable_occasions_that_cannot_serve_are_refused():
    table = rm.OccasionTable.from_array(
        [[1.0, 1.0, 2.0], [2.0, 2.0, 2.5], [NAN, 3.0, NAN]], occasions=["a", "b", "c"]
    )
    with pytest.raises(rm.ArgumentError, match="`stable` must name occasions at which values vary"):
        reference_changes(table, stable=["a", "b"], source="a run-in")
    with pytest.raises(rm.ArgumentError, match="`stable` must name one of 'a', 'b', 'c', got 'd'"):
        reference_changes(table, stable=["a", "d"], source="a run-in")
    with pytest.raises(rm.TooFewError, match="somebody with two measured values"):
        reference_changes(table.select(subjects=["S3"]), stable=["a", "b"], source="a run-in")
