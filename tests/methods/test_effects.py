"""Effect sizes by hand, against SciPy, and by what must hold of every one."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from scipy import stats

import robustrm as rm
from robustrm.methods.effects import (
    NOT_GIVEN,
    Effect,
    directions,
    effect_sizes,
    geometric_mean_ratio,
    kendall_w,
    median_difference,
    percent_change,
    probability_of_fall,
    rank_biserial,
    relative_effects,
    robust_standardized_difference,
    standardized_mean_difference,
)
from robustrm.methods.effects.effect import within
from robustrm.results import Estimate, note_codes
from tests.methods.tables import (
    LABELS,
    PAIR,
    differences,
    measured,
    pair_of,
    present,
    raw,
    tables,
    untied,
)

TEN = (-30, 3, 0, -1, -2, -3, -4, -5, -7, -9)
SIZED = (
    median_difference,
    geometric_mean_ratio,
    percent_change,
    robust_standardized_difference,
    standardized_mean_difference,
)


def limits(effect: Effect) -> tuple[float, float]:
    return present(effect.estimate.low), present(effect.estimate.high)


def codes(effect: Effect) -> tuple[str, ...]:
    return note_codes(effect.estimate.notes)


# ── directions ────────────────────────────────────────────────────────────────────────────────


def test_directions_are_counted_and_unknown_is_not_unchanged():
    table = raw(
        [[0.3, 0.3], [0.3, 0.9], [1.1, 1.1], [2.0, 1.2], [4.0, 1.9]],
        below=[[True, True], [True, False], *[[False] * 2] * 3],
        lower_limit=0.3,
    )
    found = directions(table, *PAIR)
    assert (found.fell, found.unchanged, found.rose, found.unknown) == (2, 1, 1, 1)
    assert found.n == 5


@pytest.mark.reference
@pytest.mark.parametrize("d", [[-1, -2, -3, 4, 5, -6], [-1] * 7, [3] * 9])
def test_without_ties_the_interval_is_clopper_pearson_of_scipy_binomtest(d):
    estimate = probability_of_fall(pair_of(d), *PAIR, level=0.9).estimate
    fell = sum(x < 0 for x in d)
    expected = stats.binomtest(fell, len(d)).proportion_ci(0.9, method="exact")
    assert estimate.value == fell / len(d)
    assert (estimate.low, estimate.high) == pytest.approx((expected.low, expected.high), rel=1e-10)


@pytest.mark.reference
def test_with_ties_the_interval_counts_them_either_way():
    d = [-1, -2, -3, 4, 0, 0]
    effect = probability_of_fall(pair_of(d), *PAIR, level=0.95)
    low = stats.binomtest(3, 6).proportion_ci(method="exact").low
    high = stats.binomtest(5, 6).proportion_ci(method="exact").high
    assert effect.estimate.value == 4 / 6
    assert limits(effect) == pytest.approx((low, high), rel=1e-10)
    assert effect.remark == "3 fell, 2 did not change, 1 rose"


# ── rank-biserial ─────────────────────────────────────────────────────────────────────────────


def test_the_rank_biserial_correlation_by_hand():
    # ranks 1 (rise), 2, 3, 4 (falls): (1 − 9)/10
    assert rank_biserial(pair_of([1, -2, -3, -4]), *PAIR).estimate.value == -0.8


def test_zeros_count_in_the_denominator_or_are_dropped():
    """|d| = 0, 1, 2, 3: Pratt's ranks of the falls 2 + 3, of the rise 4; dropped 1 + 2 and 3."""
    table = pair_of([0, -1, -2, 3])
    pratt, drop = (rank_biserial(table, *PAIR, zeros=zeros) for zeros in ("pratt", "drop"))
    assert pratt.estimate.value == pytest.approx((4 - 5) / 10)
    assert drop.estimate.value == 0
    assert "zero differences count in the denominator" in pratt.remark
    assert "counts 1 zero or unknown either way" in pratt.remark
    assert drop.remark == "zero differences dropped"


@pytest.mark.property
@given(differences(12, least_n=1), st.sampled_from(["pratt", "drop"]))
def test_it_is_that_of_the_signed_rank_test_within_its_bounds(d, zeros):
    table = pair_of(d)
    effect = rank_biserial(table, *PAIR, zeros=zeros)
    test = rm.signed_rank(table, *PAIR, zeros=zeros)
    if zeros == "drop" and not any(d):
        assert not effect.is_given
        return
    assert effect.estimate.value == pytest.approx(test.details["rank_biserial"], abs=1e-12)
    low, high = limits(effect)
    assert -1 <= low <= effect.estimate.value <= high <= 1


@pytest.mark.reference
@pytest.mark.property
@given(untied(4, 11), st.sampled_from([0.8, 0.9, 0.95]))
def test_without_zeros_the_interval_excludes_0_exactly_when_p_is_small(d, level):
    p = stats.wilcoxon(d, method="exact").pvalue
    low, high = limits(rank_biserial(pair_of(d), *PAIR, level=level))
    if abs(p - (1 - level)) > 1e-9:
        assert (low > 0 or high < 0) == (p < 1 - level)


def test_all_falls_leave_a_finite_interval():
    # (1 − π)⁷ = .025: π = 1 − .025^(1/7) = .40962
    effect = rank_biserial(pair_of([-1, -2, -3, -4, -5, -6, -7]), *PAIR)
    assert limits(effect) == pytest.approx((-1, 2 * 0.40962 - 1), abs=1e-4)


def test_unknown_differences_count_either_way():
    below = [[True, True], *[[False, False]] * 5]
    table = raw([[1, 1], [9, 8], [9, 6], [9, 5], [9, 4], [9, 3]], below=below, lower_limit=1)
    with_unknown = rank_biserial(table, *PAIR)
    # Pratt: ranks 2 to 6 of the falls over 21
    assert with_unknown.estimate.value == pytest.approx(-20 / 21)
    # as a rise it has rank 1: T⁺ <= 1 whatever it does, (1 − π)⁵ = .025 at π = .52182
    assert limits(with_unknown) == pytest.approx((-1, 2 * 0.52182 - 1), abs=1e-4)
    assert "depend on what entered below the limit" in with_unknown.remark


def test_nothing_but_zeros():
    table = pair_of([0, 0, 0])
    pratt = rank_biserial(table, *PAIR)
    assert (pratt.estimate.value, *limits(pratt)) == (0, -1, 1)
    drop = rank_biserial(table, *PAIR, zeros="drop")
    assert codes(drop) == ("no variation",)


# ── all occasions ─────────────────────────────────────────────────────────────────────────────


def test_kendalls_w_is_that_of_friedman_with_its_bias_beside():
    table = raw([[9, 7, 6], [4, 3, 5], [12, 8, 5], [7, 5, 4]])
    effect = kendall_w(table, rng=1)
    assert effect.estimate.value == pytest.approx(rm.friedman(table).details["kendall_w"])
    # W = 7/16: (4 · 7/16 − 1)/3 = 1/4
    assert effect.remark == "without any change it averages 1/n = 0.250; less this bias 0.250"
    assert codes(effect) == ("rough interval",)


def test_when_all_rank_alike_the_lower_limit_is_an_exact_bound():
    effect = kendall_w(raw([[1, 2, 3]] * 13))
    assert (effect.estimate.value, effect.estimate.kind) == (1, "exact bound")
    # (2 · .025^(1/13) − 1)², worked in tests/kernels/test_effect_sizes.py
    assert limits(effect) == pytest.approx((0.25593, 1), abs=5e-6)
    assert codes(effect) == ("same order",)


def test_one_subject_says_nothing_about_agreement():
    assert limits(kendall_w(raw([[3, 2, 1]]))) == (0, 1)


def test_w_without_a_number_or_without_an_interval():
    assert codes(kendall_w(raw([[1, 1, 1]] * 4))) == ("all tied",)
    mostly = kendall_w(raw([[1, 2, 3], *[[1, 1, 1]] * 3]), rng=1)
    assert mostly.is_given
    assert codes(mostly) == ("no interval",)
    with pytest.raises(rm.TooFewError, match="Kendall's W needs at least 1 subject"):
        kendall_w(raw([[1, np.nan, 3]]))


@pytest.mark.property
@given(tables(n=st.integers(1, 8)), st.floats(0.5, 0.99))
@settings(max_examples=60, suppress_health_check=[HealthCheck.too_slow])
def test_w_and_its_limits_stay_between_0_and_1(rows, level):
    effect = kendall_w(raw(rows), level=level, draws=199, rng=1)
    if effect.is_given and effect.estimate.low is not None:
        low, high = limits(effect)
        assert 0 <= low <= effect.estimate.value <= high <= 1


def test_relative_effects_are_those_of_the_rank_model():
    table = raw([[91, 72, 60], [40, 31, 25], [120, 125, 80], [66, 50, 59], [33, 21, 20]])
    found = relative_effects(table)
    # by hand: mean ranks 9.6, 7.8 and 6.6 of 15
    values = [effect.estimate.value for effect in found]
    assert values == pytest.approx([9.1 / 15, 7.3 / 15, 6.1 / 15])
    assert [effect.label for effect in found] == list(LABELS[:3])
    assert {effect.estimate.neutral for effect in found} == {0.5}
    for effect in found:
        low, high = limits(effect)
        assert 0 < low < effect.estimate.value < high < 1


def test_a_relative_effect_at_its_end_has_no_interval():
    first, *_ = relative_effects(raw([[1, 8, 9], [2, 7, 12], [3, 9, 8]]))
    assert first.estimate.low is None
    assert codes(first) == ("no interval",)


# ── what holds of every one ───────────────────────────────────────────────────────────────────


@pytest.mark.property
@given(measured(n=st.integers(1, 14)))
@settings(max_examples=50, suppress_health_check=[HealthCheck.too_slow])
def test_every_interval_holds_its_estimate_and_every_gap_its_reason(rows):
    table = raw(rows)
    family = rm.follow_up(table.log(), adjust="none")
    for effect in effect_sizes(table.log(), family, raw=table, draws=199, rng=1):
        estimate = effect.estimate
        if estimate.low is None or not effect.is_given:
            assert estimate.notes
            assert estimate.level is None
            continue
        low, high = limits(effect)
        assert low <= estimate.value <= high
        assert estimate.level == 0.95
        assert estimate.kind != NOT_GIVEN


@pytest.mark.parametrize("effect", SIZED)
def test_with_most_of_an_occasion_beyond_a_limit_no_size_is_given(effect):
    below = [[False, True]] * 6 + [[False, False]] * 4
    rows = [[9 + i, 1] for i in range(6)] + [[9, 8], [7, 5], [6, 3], [5, 4]]
    table = raw(rows, below=below, lower_limit=1)
    found = effect(table, *PAIR)
    assert not found.is_given
    assert codes(found) == ("mostly beyond the limit",)
    assert probability_of_fall(table, *PAIR).estimate.value == 1


@pytest.mark.parametrize("effect", [probability_of_fall, rank_biserial, *SIZED])
def test_without_a_subject_it_is_refused(effect):
    with pytest.raises(rm.TooFewError, match="1 subject"):
        effect(raw([[1, np.nan], [np.nan, 2]]), *PAIR)


@pytest.mark.parametrize("effect", [rank_biserial, *SIZED])
def test_the_substitute_enters_where_a_size_is_needed(effect):
    below = [[False, True], *[[False, False]] * 11]
    rows = [[4, 1], *[[8 + i, 5 + i % 3] for i in range(11)]]
    table = raw(rows, below=below, lower_limit=1)
    half, limit = (effect(table.log(), *PAIR, substitute=rule) for rule in ("half", "limit"))
    if effect in (geometric_mean_ratio, percent_change):
        assert half.estimate.value < limit.estimate.value
    assert half.n_subjects == limit.n_subjects == 12
    assert table.entered is None


@pytest.mark.parametrize("effect", [probability_of_fall, rank_biserial, *SIZED])
def test_a_level_in_percent_is_refused(effect):
    with pytest.raises(rm.ArgumentError, match=r"Did you mean 0\.95"):
        effect(pair_of(TEN), *PAIR, level=95)


def test_the_interval_that_misses_is_widened_and_says_so():
    missed = Estimate("x", 3.0, 1.0, 2.0, 0.95, "percentile bootstrap")
    held = within(missed)
    assert (held.low, held.high) == (1.0, 3.0)
    assert note_codes(held.notes) == ("widened interval",)
    assert within(dataclasses.replace(missed, value=1.5)).notes == ()


# ── together ──────────────────────────────────────────────────────────────────────────────────

ROWS = [[91, 72, 60], [40, 31, 25], [120, 125, 80], [66, 50, 59], [33, 21, 20], [75, 60, 44],
        [51, 52, 40], [84, 70, 71], [28, 30, 22], [63, 61, 48]]  # fmt: skip


def test_every_planned_contrast_has_its_effects_and_all_occasions_theirs():
    table = raw(ROWS)
    found = effect_sizes(table.log(), rm.follow_up(table.log()), raw=table, rng=1)
    names = [effect.estimate.name for effect in found]
    twice = [
        "probability of a fall", "matched-pairs rank-biserial correlation", "median ratio",
        "ratio of geometric means", "percent change", "robust standardized difference",
        "Cohen's d_z", "Cohen's d_z", "Cohen's d_av", "Cohen's d_av",
    ]  # fmt: skip
    assert names == [
        *(name for name in twice for _ in range(2)),
        *["relative effect"] * 3,
        "Kendall's W",
    ]
    assert [e.scale for e in found if e.group == "parametric"] == ["raw"] * 2 + ["log"] * 2 + (
        ["raw"] * 2 + ["log"] * 2
    )
    assert found[0].label == f"{LABELS[1]} vs {LABELS[0]}"
    assert all(effect.is_given for effect in found)


def test_on_the_raw_scale_there_are_no_ratios_and_a_zero_leaves_out_the_logs():
    table = raw([[0, *row[1:]] if i == 0 else row for i, row in enumerate(ROWS)])
    found = effect_sizes(table, rm.follow_up(table), raw=table, rng=1)
    assert {effect.scale for effect in found} == {None, "raw"}
    location = {effect.estimate.name for effect in found if effect.group == "location"}
    assert location == {"median difference"}


def test_the_zero_rule_is_that_of_the_planned_test():
    table = raw([[9, 9], [8, 5], [7, 6], [6, 9]])
    family = rm.follow_up(table, options={"zeros": "drop"})
    _, rank, *_ = effect_sizes(table, family)
    assert rank.remark == "zero differences dropped"


def test_another_contrast_changes_no_other_number():
    table = raw(ROWS).log()
    one = effect_sizes(table, rm.follow_up(table, family=[(LABELS[0], LABELS[2])]), rng=5)
    two = effect_sizes(table, rm.follow_up(table), rng=5)
    assert {e.label for e in two} > {e.label for e in one}
    assert [e for e in one if e not in two] == []
    other = effect_sizes(table, rm.follow_up(table), rng=6)
    drawn = {a.estimate.name for a, b in zip(two, other, strict=True) if a != b}
    # of few resampled values of W the same two may be the limits
    assert drawn - {"Kendall's W"} == {"robust standardized difference"}


def test_the_order_of_the_subjects_plays_no_part():
    one, other = (raw(rows).log() for rows in (ROWS, ROWS[::-1]))
    assert effect_sizes(one, rm.follow_up(one), rng=5) == (
        effect_sizes(other, rm.follow_up(other), rng=5)
    )


def test_a_contrast_without_subjects_is_told_elsewhere_and_too_few_here():
    table = raw([[1, 2, np.nan], [3, 1, np.nan], [5, 2, np.nan], [np.nan, np.nan, 4]])
    found = effect_sizes(table, rm.follow_up(table))
    assert {effect.label for effect in found} == {f"{LABELS[1]} vs {LABELS[0]}", "all occasions"}
    relative, w = found[-2:]
    assert (relative.is_given, w.is_given) == (False, False)
    assert codes(relative) == codes(w) == ("too few subjects",)
