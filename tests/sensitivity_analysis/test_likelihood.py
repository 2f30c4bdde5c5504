"""Planned contrasts by the likelihood of all values."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pytest
from scipy import stats

import robustrm as rm
from robustrm.kernels import censored_normal
from robustrm.results import note_codes
from robustrm.sensitivity_analysis.likelihood import LikelihoodContrast, likelihood_contrasts

LABELS = ("week 0", "week 6", "week 12")


def drawn(seed: int, n: int, k: int = 3) -> np.ndarray:
    rng = np.random.default_rng(seed)
    return np.exp(
        0.8 * rng.normal(size=(n, 1)) + 0.5 * rng.normal(size=(n, k)) - 0.2 * np.arange(k)
    )


def table(values: np.ndarray, limit: float | None = None) -> rm.OccasionTable:
    below = np.zeros(values.shape, dtype=bool) if limit is None else values < limit
    return rm.OccasionTable.from_array(
        values if limit is None else np.where(below, limit, values),
        occasions=LABELS[: values.shape[1]],
        below=below,
    )


def codes(contrast: LikelihoodContrast) -> tuple[str, ...]:
    return note_codes(contrast.notes)


@pytest.mark.parametrize("n", [10, 24])
def test_complete_values_give_the_paired_t_on_logs(n: int):
    values = drawn(1, n)
    for j, contrast in enumerate(likelihood_contrasts(table(values), rm.Plan()), start=1):
        gaps = np.log(values[:, j] / values[:, 0])
        want = stats.ttest_1samp(gaps, 0)
        low, high = (np.exp(float(end)) for end in want.confidence_interval(0.95))
        assert contrast.estimate is not None
        assert contrast.estimate.value == pytest.approx(np.exp(gaps.mean()))
        assert (contrast.estimate.low, contrast.estimate.high) == pytest.approx((low, high))
        assert contrast.p_value == pytest.approx(want.pvalue)
        assert (contrast.n_subjects, contrast.df) == (n, n - 1)


def test_the_jackknife_leaves_one_subject_out_at_a_time():
    values = drawn(2, 12)
    values[3, 1], values[7, 2] = np.nan, np.nan
    whole = likelihood_contrasts(table(values, 0.35), rm.Plan())
    left = [
        likelihood_contrasts(table(np.delete(values, i, axis=0), 0.35), rm.Plan())
        for i in range(12)
    ]
    for j, contrast in enumerate(whole):
        assert contrast.estimate is not None
        assert contrast.estimate.low is not None
        assert contrast.estimate.high is not None
        known = [estimate for one in left if (estimate := one[j].estimate) is not None]
        shifts = np.log([estimate.value for estimate in known])
        error = np.sqrt(11 / 12 * ((shifts - shifts.mean()) ** 2).sum())  # Miller (1974)
        half = np.log(contrast.estimate.high / contrast.estimate.low) / 2
        assert half == pytest.approx(stats.t.ppf(0.975, 11) * error, rel=1e-4)


def test_everybody_with_any_value_enters():
    values = drawn(3, 14)
    values[0, 1:] = np.nan
    values[1, :] = np.nan
    values[2, 0] = np.nan
    for contrast in likelihood_contrasts(table(values), rm.Plan()):
        assert contrast.n_subjects == 13


def test_a_gap_after_a_high_value_does_not_bias_it_as_it_does_complete_pairs():
    # missing at random by construction: the second value is missed after a high first one, and
    # depends on the first; the complete pairs then miss the true ratio of 1 by a computable amount
    rng = np.random.default_rng(4)
    first = rng.normal(size=4000)
    second = 0.5 * first + np.sqrt(0.75) * rng.normal(size=4000)
    seen = first < 0.5
    values = np.exp(np.stack([first, np.where(seen, second, np.nan)], axis=1))
    kept = np.log(values[seen, 1] / values[seen, 0]).mean()
    # E[−x/2 | x < .5] = φ(.5)/(2 Φ(.5))
    assert kept == pytest.approx(stats.norm.pdf(0.5) / stats.norm.cdf(0.5) / 2, abs=0.05)
    found = censored_normal.fit(np.log(values), *[np.zeros(values.shape, bool)] * 2)
    assert found.mean[1] - found.mean[0] == pytest.approx(0, abs=0.06)


def test_below_ten_subjects_the_estimate_stands_alone():
    nine, ten = (likelihood_contrasts(table(drawn(5, n)), rm.Plan()) for n in (9, 10))
    for contrast in nine:
        assert contrast.estimate is not None
        assert contrast.estimate.low is None
        assert np.isnan(contrast.p_value)
        assert "few subjects" in codes(contrast)
    assert all("few subjects" not in codes(contrast) for contrast in ten)


def test_limits_that_differ_enter_as_they_are():
    values = drawn(6, 20, 2)
    one = table(values, 0.3)
    two = rm.OccasionTable.from_array(
        np.where(one.below, one.values, values),
        occasions=LABELS[:2],
        below=one.below,
        lower_limit=[0.3, 0.9],  # declared, and reached by nothing that is written as below
    )
    assert likelihood_contrasts(two, rm.Plan())[0].estimate == (
        likelihood_contrasts(one, rm.Plan())[0].estimate
    )


def test_no_ratio_where_more_than_half_of_an_occasion_lies_below():
    values = drawn(7, 16)
    values[:9, 2] = 0.01
    plain, beyond = likelihood_contrasts(table(values, 0.05), rm.Plan())
    assert plain.estimate is not None
    assert beyond.estimate is None
    assert codes(beyond) == ("mostly beyond the limit",)


def test_the_two_occasions_alone_where_all_together_have_no_maximum():
    # three fully measured subjects lie on one plane with three occasions: nothing bounds the fit
    values = drawn(8, 12)
    for i in range(9):
        values[i, i % 3] = np.nan
    values[9:, :] = [[1, 2, 3], [2, 1, 4], [3, 3, 1]]
    for contrast in likelihood_contrasts(table(values), rm.Plan()):
        assert "two occasions alone" in codes(contrast)
        assert contrast.occasions == (contrast.first, contrast.second)
        assert contrast.estimate is not None


@pytest.mark.parametrize("case", ["zero", "one subject", "proportional", "all below"])
def test_what_cannot_be_estimated_says_why(case: str):
    values = drawn(9, 1 if case == "one subject" else 12, 2)
    plan = rm.Plan(scale="raw")
    if case == "proportional":
        values[:, 1] = 2 * values[:, 0]
    if case == "zero":
        values[0, 0] = 0.0
    tested = table(values)
    if case == "all below":
        tested = rm.OccasionTable.from_array(
            np.stack([values[:, 0], np.full(12, 0.3)], axis=1),
            occasions=LABELS[:2],
            below=np.stack([np.zeros(12, bool), np.ones(12, bool)], axis=1),
        )
    (contrast,) = likelihood_contrasts(tested, plan)
    assert contrast.estimate is None
    assert np.isnan(contrast.p_value)
    reasons = {
        "zero": "not positive",
        "one subject": "few measured values",
        "proportional": "no maximum",
        "all below": "mostly beyond the limit",
    }
    assert codes(contrast) == (reasons[case],)
    json.dumps(contrast.to_dict(), allow_nan=False)


def test_the_order_of_rows_and_their_names_play_no_part():
    values = drawn(10, 12)
    values[2, 1] = np.nan
    one = table(values, 0.3)
    order = np.random.default_rng(1).permutation(12)
    other = one.select(subjects=[one.subjects[i] for i in order])
    assert likelihood_contrasts(one, rm.Plan()) == likelihood_contrasts(other, rm.Plan())


def test_level_direction_and_adjustment_are_those_of_the_plan():
    tested = table(drawn(11, 15))
    plain = likelihood_contrasts(tested, rm.Plan())
    both = likelihood_contrasts(tested, rm.Plan(intervals="simultaneous", adjust="bonferroni"))
    less = likelihood_contrasts(tested, rm.Plan(sides=1, direction="less"))
    for one, wide, falling in zip(plain, both, less, strict=True):
        assert wide.estimate is not None
        assert wide.estimate.level == pytest.approx(0.975)
        assert wide.p_adjusted == pytest.approx(min(1, 2 * one.p_value))
        assert falling.p_value == pytest.approx(stats.t.cdf(one.statistic, 14))
    whole = rm.Plan(pair="nemenyi", adjust="single-step")
    assert {c.adjust for c in likelihood_contrasts(tested, whole)} == {"holm"}


@pytest.mark.parametrize(
    ("pair", "scale", "role"),
    [
        ("signed_rank", "log", "supplementary"),
        ("sign_flip", "log", "sensitivity"),
        ("paired_t", "log", "sensitivity"),
        ("paired_t", "raw", "supplementary"),
    ],
)
def test_the_role_follows_the_estimand(pair: str, scale: Any, role: str):
    plan = rm.Plan(pair=pair, scale=scale)
    assert {c.role for c in likelihood_contrasts(table(drawn(12, 12)), plan)} == {role}
