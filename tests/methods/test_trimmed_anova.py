"""The trimmed-mean analysis of variance against loops, the ANOVA and full enumeration."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pandas as pd
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy import stats
from statsmodels.stats.anova import AnovaRM

import robustrm as rm
from robustrm.results import note_codes
from tests.methods import trimming_by_loops as loops
from tests.methods.tables import PAIR, measured, present, raw

TRIMS = st.sampled_from([0.0, 0.1, 0.2, 0.25, 0.3])
# Eight subjects, skewed, one of them extreme; invented.
EIGHT = [
    [9.1, 7.2, 6.0], [4.0, 3.1, 2.5], [12.0, 12.5, 8.0], [6.6, 5.0, 5.9],
    [3.3, 2.1, 2.1], [47.5, 26.0, 30.4], [5.2, 5.2, 3.9], [7.0, 6.1, 4.4],
]  # fmt: skip
FOUR = [[9.1, 7.2, 6.0], [4.0, 3.1, 2.5], [12.0, 12.5, 8.0], [6.6, 5.0, 5.9]]


def told(result: rm.TestResult) -> dict:
    return {key: value for key, value in result.to_dict().items() if key != "subjects"}


# ── the F form ────────────────────────────────────────────────────────────────────────────────


@pytest.mark.property
@pytest.mark.parametrize("scale", ["raw", "log"])
@given(rows=measured(), trim=TRIMS)
def test_f_degrees_of_freedom_and_p_agree_with_plain_loops(scale, rows, trim):
    assume(len(rows) - 2 * loops.cut(len(rows), trim) >= 2)
    values = np.log(rows) if scale == "log" else np.array(rows)
    expected = loops.within_subject_f(values.tolist(), trim)
    assume(expected.f > 1e-6 and expected.qe > 1e-6 * float(np.max(np.abs(values))) ** 2)
    result = rm.trimmed_anova(raw(rows).on_scale(scale), trim=trim)
    n, k = values.shape
    h = n - 2 * loops.cut(n, trim)
    assert result.statistic == pytest.approx(expected.f, rel=1e-8)
    assert result.details["qc"] == pytest.approx(expected.qc, rel=1e-8)
    assert result.details["qe"] == pytest.approx(expected.qe, rel=1e-8)
    assert result.details["epsilon_box"] == pytest.approx(expected.box, rel=1e-5)
    assert result.df == pytest.approx(expected.df, rel=1e-4)
    assert result.p_value == pytest.approx(stats.f.sf(result.statistic, *result.df), rel=1e-8)
    assert result.details["p_f"] == result.p_value
    df = (k - 1, (h - 1) * (k - 1))
    assert result.details["f_df"] == df
    uncorrected = stats.f.sf(expected.f, *df)
    assert result.details["p_uncorrected"] == pytest.approx(uncorrected, rel=1e-6)
    assert (result.details["g"], result.details["h"]) == (loops.cut(n, trim), h)


@pytest.mark.reference
@pytest.mark.property
@pytest.mark.parametrize("scale", ["raw", "log"])
@given(rows=measured())
def test_without_trimming_f_and_the_epsilons_are_those_of_the_anova(scale, rows):
    table = raw(rows).on_scale(scale)
    result, usual = rm.trimmed_anova(table, trim=0), rm.anova(table)
    assume(usual.statistic > 1e-6)  # below, F is the rounding of both
    assert result.statistic == pytest.approx(usual.statistic, rel=1e-10)
    assert result.p_value == pytest.approx(usual.details["p_hf"], rel=1e-8)
    pairs = {
        "epsilon_box": "epsilon_gg",
        "epsilon_hf": "epsilon_hf",
        "p_uncorrected": "p_uncorrected",
        "qc": "ss_occasion",
        "qe": "ss_error",
    }
    for ours, theirs in pairs.items():
        assert result.details[ours] == pytest.approx(usual.details[theirs], rel=1e-8), ours
    frame = pd.DataFrame(np.log(rows) if scale == "log" else rows).reset_index()
    long = frame.melt(id_vars="index", var_name="occasion")
    expected = AnovaRM(long, "value", "index", within=["occasion"]).fit().anova_table.iloc[0]
    assert result.statistic == pytest.approx(expected["F Value"], rel=1e-9)
    assert result.details["p_uncorrected"] == pytest.approx(expected["Pr > F"], rel=1e-8)


@pytest.mark.property
@given(rows=measured(n=st.integers(3, 15), k=st.just(2)), trim=TRIMS)
def test_with_two_occasions_f_is_the_square_of_t(rows, trim):
    """Qc = hΔ²/2 and Qe = SSD(w₂ − w₁)/2, so F = h(h − 1)Δ²/SSD = t²; ε is 1."""
    assume(len(rows) - 2 * loops.cut(len(rows), trim) >= 2)
    t = rm.trimmed_pair(raw(rows), *PAIR, trim=trim)
    assume(math.isfinite(t.statistic) and 1e-4 < abs(t.statistic) < 1e4)
    f = rm.trimmed_anova(raw(rows), trim=trim)
    assert f.statistic == pytest.approx(t.statistic**2, rel=1e-7)
    assert f.p_value == pytest.approx(t.p_value, rel=1e-6)
    assert f.details["epsilon_hf"] == 1


def test_the_extremes_of_each_occasion_do_not_count():
    """With one cut at each end, the largest value of every occasion may be as large as it likes."""
    expected = rm.trimmed_anova(raw(EIGHT))
    for extreme in ([60, 26.5, 31], [1e6, 1e9, 1e3], [1e17, 1e9, 1e3]):
        rows = [row if row[0] != 47.5 else extreme for row in EIGHT]
        found = rm.trimmed_anova(raw(rows))
        assert found.statistic != rm.anova(raw(rows)).statistic
        # the extreme values are pulled in to the second largest, whatever they were
        assert found.statistic == pytest.approx(expected.statistic, rel=1e-9)
        assert found.p_value == pytest.approx(expected.p_value, rel=1e-8)


@pytest.mark.parametrize("null", ["f", "bootstrap"])
def test_units_and_a_common_shift_change_no_answer(null):
    base = rm.trimmed_anova(raw(EIGHT), null=null, draws=299, rng=4)
    for rows in (np.array(EIGHT) * 1000, np.array(EIGHT) + 50):
        found = rm.trimmed_anova(raw(rows), null=null, draws=299, rng=4)
        assert found.statistic == pytest.approx(base.statistic, rel=1e-9)
        assert found.p_value == pytest.approx(base.p_value, rel=1e-8)
    logs = [
        rm.trimmed_anova(raw(rows).log(), null=null, draws=299, rng=4)
        for rows in (EIGHT, np.array(EIGHT) * 1000)
    ]
    assert logs[1].statistic == pytest.approx(logs[0].statistic, rel=1e-9)
    assert logs[1].p_value == pytest.approx(logs[0].p_value, rel=1e-8)


def test_means_and_deviations_of_the_occasions_are_on_the_scale_of_the_table():
    for table, values in ((raw(EIGHT), EIGHT), (raw(EIGHT).log(), np.log(EIGHT))):
        details = rm.trimmed_anova(table).details
        columns = np.transpose(values).tolist()
        means = [loops.trimmed_mean(c, 0.2) for c in columns]
        w = [loops.winsorized(c, 0.2) for c in columns]
        assert details["trimmed_means"] == pytest.approx(means)
        assert details["winsorized_sds"] == pytest.approx([np.std(c, ddof=1) for c in w])


def test_the_result_says_what_was_asked():
    result = rm.trimmed_anova(raw(EIGHT).log(), trim=0.125)
    assert (result.null, result.draws, result.p_interval) == ("parametric", None, None)
    assert result.estimand == "12.5% trimmed geometric means"
    assert result.hypothesis == "The occasions have equal 12.5% trimmed means of the logarithms."
    assert rm.trimmed_anova(raw(EIGHT)).estimand == "20% trimmed means"


# ── the bootstrap ─────────────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize(("rows", "trim"), [(FOUR, 0.25), (FOUR, 0.0), (EIGHT[:5], 0.2)])
def test_the_bootstrap_comes_near_the_full_list_of_resamples(rows, trim):
    """All nⁿ resamples by plain loops: 256 of four subjects, 3,125 of five."""
    at_least, flat, total = loops.bootstrap_t(rows, trim)
    result = rm.trimmed_anova(raw(rows), trim=trim, null="bootstrap", draws=19_999, rng=11)
    low, high = present(result.p_interval)
    assert low <= at_least / total <= high
    share = result.details["flat_resamples"] / 19_999
    assert share == pytest.approx(flat / total, abs=0.02)


def test_p_counts_the_observed_table_and_has_its_interval():
    result = rm.trimmed_anova(raw(EIGHT).log(), null="bootstrap", draws=499, rng=1)
    b = round(result.p_value * 500) - 1
    assert result.p_value == (b + 1) / 500
    expected = stats.binomtest(b, 499).proportion_ci(0.99, "exact")
    assert result.p_interval == pytest.approx((expected.low, expected.high), rel=1e-9)
    assert (result.null, result.draws, result.df) == ("bootstrap", 499, ())
    assert "499 resamples" in str(result.notes[0])


def test_the_bootstrap_has_the_statistic_of_the_f_form_and_its_p_beside():
    table = raw(EIGHT).log()
    f, drawn = rm.trimmed_anova(table), rm.trimmed_anova(table, null="bootstrap", rng=1)
    assert drawn.statistic == f.statistic
    assert drawn.details["p_f"] == f.p_value
    assert drawn.draws == 9999


def test_the_same_seed_gives_the_same_answer():
    def drawn(rng):
        return rm.trimmed_anova(raw(EIGHT), null="bootstrap", draws=299, rng=rng)

    assert told(drawn(5)) == told(drawn(5)) == told(drawn(np.random.default_rng(5)))
    assert len({drawn(seed).p_value for seed in range(4)}) > 1


def test_the_order_and_the_names_of_the_subjects_move_no_draw():
    expected = told(rm.trimmed_anova(raw(EIGHT), null="bootstrap", draws=299, rng=5))
    for order in itertools.islice(itertools.permutations(range(8)), 1, 40000, 9973):
        rows = [EIGHT[i] for i in order]
        names = [f"P{i}" for i in order]
        found = rm.trimmed_anova(raw(rows, subjects=names), null="bootstrap", draws=299, rng=5)
        assert told(found) == expected


@pytest.mark.property
@given(rows=measured(n=st.integers(3, 8), k=st.integers(2, 4)), trim=TRIMS)
def test_p_of_the_bootstrap_is_in_bounds(rows, trim):
    assume(len(rows) - 2 * loops.cut(len(rows), trim) >= 2)
    result = rm.trimmed_anova(raw(rows), trim=trim, null="bootstrap", draws=99, rng=0)
    if math.isnan(result.p_value):
        assert "no residual variation" in note_codes(result.notes)
        return
    assert 1 / 100 <= result.p_value <= 1
    low, high = present(result.p_interval)
    assert low <= result.p_value <= high or result.p_value == 1


def test_equal_trimmed_means_have_p_1():
    """The middle of each occasion averages 0.3: F is 0 but for rounding."""
    rows = [[0.0, 0.7, 0.2], [0.1, 0.3, 1.0], [0.5, 0.1, 0.0], [0.9, 0.3, 0.4]]
    for null in ("f", "bootstrap"):
        result = rm.trimmed_anova(raw(rows), trim=0.25, null=null, draws=199, rng=1)
        assert result.statistic == 0
        assert result.p_value == 1


def test_many_flat_resamples_are_told():
    few = rm.trimmed_anova(raw(FOUR), null="bootstrap", draws=999, rng=1)
    assert "flat resamples" in note_codes(few.notes)
    assert few.details["flat_resamples"] > 0
    many = rm.trimmed_anova(raw(EIGHT), null="bootstrap", draws=999, rng=1)
    assert "flat resamples" not in note_codes(many.notes)


# ── what is told or refused ───────────────────────────────────────────────────────────────────

FLAT = [
    [[1, 2, 3], [4, 5, 6], [10, 11, 12]],
    [[0.1, 0.3, 0.7], [0.2, 0.4, 0.8], [0.4, 0.6, 1.0]],
    [[5, 5, 5], [7, 7, 7]],
    # all alike but the extremes, which are pulled in
    [[0.1, 0.3, 0.7], [0.2, 0.4, 0.8], [0.2, 0.4, 0.8], [0.2, 0.4, 0.8], [5, 9, 2]],
]


@pytest.mark.parametrize("null", ["f", "bootstrap"])
@pytest.mark.parametrize("rows", FLAT)
def test_without_residual_variation_no_p_is_given_and_a_note_says_why(rows, null):
    result = rm.trimmed_anova(raw(rows), null=null, draws=99, rng=1)
    assert math.isnan(result.statistic)
    assert math.isnan(result.p_value)
    assert math.isnan(result.details["epsilon_hf"])
    assert result.p_interval is None
    assert "no residual variation" in note_codes(result.notes)


def test_a_cut_of_nobody_and_few_who_are_left_are_told():
    codes = note_codes(rm.trimmed_anova(raw(FOUR)).notes)
    assert codes == ("nothing trimmed", "few left")
    note = rm.trimmed_anova(raw(FOUR)).notes[0]
    assert "From 5 subjects" in str(note)
    assert note_codes(rm.trimmed_anova(raw(EIGHT[:7])).notes) == ("few left",)
    assert note_codes(rm.trimmed_anova(raw(EIGHT)).notes) == ()
    assert note_codes(rm.trimmed_anova(raw(EIGHT), trim=0).notes) == ()  # asked for: no news


def test_too_few_subjects_are_refused_in_words():
    with pytest.raises(
        rm.TooFewError, match="needs at least 2 subjects with all 3 occasions, got 1"
    ):
        rm.trimmed_anova(raw([[1, 2, 4]]))
    with pytest.raises(
        rm.TooFewError,
        match=r"needs at least 2 subjects left after the cut, got 1: `trim` = 0.4 cuts 2 at each "
        r"end of 5 with all 3 occasions\. Trim less\.",
    ):
        rm.trimmed_anova(raw(EIGHT[:5]), trim=0.4)


def test_options_that_are_not_known_are_refused():
    table = raw(EIGHT)
    with pytest.raises(rm.ArgumentError, match=r"`trim` must be in \[0, 0.5\), got 20. .*0.2\?"):
        rm.trimmed_anova(table, trim=20)
    with pytest.raises(rm.ArgumentError, match=r"`null` must be one of 'f', 'bootstrap'"):
        rm.trimmed_anova(table, null="exact")
    with pytest.raises(rm.ArgumentError, match="`draws` must be a whole number of at least 99"):
        rm.trimmed_anova(table, null="bootstrap", draws=10)


def test_values_below_the_limit_enter_as_the_substitute():
    entered = np.where(np.array(EIGHT) < 3, 1.5, EIGHT)
    expected = rm.trimmed_anova(raw(entered))
    found = rm.trimmed_anova(raw(EIGHT, lower_limit=3.0))
    assert found.statistic == pytest.approx(expected.statistic, rel=1e-10)
