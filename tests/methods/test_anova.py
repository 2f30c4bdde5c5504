"""The within-subject analysis of variance against statsmodels and algebra."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from statsmodels.stats.anova import AnovaRM

import robustrm as rm
from robustrm.results import note_codes
from tests.methods.tables import PAIR, measured, raw

pytestmark = pytest.mark.reference


def statsmodels_anova(values):
    n, k = np.shape(values)
    frame = pd.DataFrame(
        {
            "subject": np.repeat(range(n), k),
            "occasion": np.tile(range(k), n),
            "value": np.ravel(values),
        }
    )
    return AnovaRM(frame, "value", "subject", within=["occasion"]).fit().anova_table.iloc[0]


@pytest.mark.property
@pytest.mark.parametrize("scale", ["raw", "log"])
@given(rows=measured())
def test_f_and_uncorrected_p_agree_with_statsmodels_anova_rm(scale, rows):
    result = rm.anova(raw(rows).on_scale(scale))
    assume(result.statistic > 1e-6)  # below, F is the rounding of both
    expected = statsmodels_anova(np.log(rows) if scale == "log" else rows)
    assert result.statistic == pytest.approx(expected["F Value"], rel=1e-10, abs=1e-12)
    assert result.details["p_uncorrected"] == pytest.approx(expected["Pr > F"], rel=1e-9)
    assert result.details["f_df"] == (expected["Num DF"], expected["Den DF"])


@pytest.mark.property
@given(rows=measured())
def test_sums_of_squares_add_up_to_the_total(rows):
    details = rm.anova(raw(rows)).details
    total = float(((np.array(rows) - np.mean(rows)) ** 2).sum())
    parts = [details[f"ss_{part}"] for part in ("occasion", "subject", "error")]
    assume(parts[0] + parts[2] > 1e-20)  # the least step is 0.001; less is rounding
    assert sum(parts) == pytest.approx(total, rel=1e-10)
    assert details["eta2_generalized"] == pytest.approx(parts[0] / total, rel=1e-10, abs=1e-15)
    share = parts[0] / (parts[0] + parts[2])
    assert details["eta2_partial"] == pytest.approx(share, rel=1e-10, abs=1e-15)


@pytest.mark.property
@given(rows=measured(n=st.integers(3, 12), k=st.just(2)))
def test_with_two_occasions_f_is_the_square_of_the_paired_t(rows):
    t = rm.paired_t(raw(rows), *PAIR)
    assume(math.isfinite(t.statistic) and abs(t.statistic) < 1e5)
    f = rm.anova(raw(rows))
    assert f.statistic == pytest.approx(t.statistic**2, rel=1e-8, abs=1e-12)
    assert f.p_value == pytest.approx(t.p_value, rel=1e-8)
    assert f.details["epsilon_gg"] == pytest.approx(1)


@pytest.mark.property
@given(rows=measured())
def test_epsilons_are_ordered_and_bounded(rows):
    details = rm.anova(raw(rows)).details
    lower, box, huynh = (details[f"epsilon_{name}"] for name in ("lower", "gg", "hf"))
    assume(not math.isnan(box))
    assert lower == 1 / (len(rows[0]) - 1)
    assert lower - 1e-12 <= box <= 1 + 1e-12
    assert huynh <= 1
    assert huynh >= box - 1e-9  # Huynh and Feldt (1976) correct Box's estimate upwards
    if details["p_uncorrected"] < 0.2:  # with F near 1 fewer degrees of freedom lower p
        assert details["p_uncorrected"] <= details["p_hf"] * (1 + 1e-9)
        assert details["p_hf"] <= details["p_gg"] * (1 + 1e-9)
        assert details["p_gg"] <= details["p_lower"] * (1 + 1e-9)


def test_the_reported_p_is_the_greenhouse_geisser_one_and_the_others_stand_in_a_note():
    rows = np.random.default_rng(4).lognormal(2, 0.5, size=(9, 4)).round(2)
    result = rm.anova(raw(rows))
    epsilon = result.details["epsilon_gg"]
    assert result.p_value == result.details["p_gg"]
    assert result.df == pytest.approx((3 * epsilon, 24 * epsilon))
    assert note_codes(result.notes) == ("sphericity",)
    text = str(result.notes[0])
    for word in ("Greenhouse-Geisser", "Huynh-Feldt", "lower bound", "uncorrected", "Mauchly's W"):
        assert word in text


def test_mauchly_is_not_defined_with_fewer_subjects_than_contrasts_plus_one():
    rows = np.random.default_rng(4).normal(10, 1, size=(3, 5)).round(3)
    result = rm.anova(raw(rows))
    assert math.isnan(result.details["mauchly_w"])
    assert math.isnan(result.details["mauchly_p"])
    assert "not defined with so few subjects" in str(result.notes[0])
    assert 0 < result.p_value <= 1


@pytest.mark.parametrize(
    "rows",
    [
        [[1, 2, 3], [4, 5, 6], [10, 11, 12]],
        [[0.1, 0.3, 0.7], [0.2, 0.4, 0.8], [0.4, 0.6, 1.0]],
        [[5, 5, 5], [7, 7, 7]],
    ],
)
def test_without_residual_variation_no_p_is_given_and_a_note_says_why(rows):
    result = rm.anova(raw(rows))
    assert math.isnan(result.statistic)
    assert math.isnan(result.p_value)
    assert "no residual variation" in note_codes(result.notes)


def test_a_table_without_any_variation_has_no_share_explained():
    """0.01 is no binary fraction: its sums of squares are rounding, and no effect size."""
    details = rm.anova(raw(np.full((3, 4), 0.01))).details
    assert math.isnan(details["eta2_partial"])
    assert math.isnan(details["eta2_generalized"])


def test_one_subject_is_refused_in_words():
    with pytest.raises(
        rm.TooFewError, match="needs at least 2 subjects with all 3 occasions, got 1"
    ):
        rm.anova(raw([[1, 2, 4]]))


def test_the_estimand_follows_the_scale():
    table = raw([[1, 2, 4], [2, 3, 9], [4, 5, 8]])
    assert rm.anova(table).estimand == "arithmetic means"
    assert rm.anova(table.log()).estimand == "geometric means"
