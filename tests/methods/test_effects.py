"""Effect sizes by hand and against SciPy."""

from __future__ import annotations

import pytest
from scipy import stats

import robustrm as rm
from robustrm.methods.effects import directions, effect_sizes, probability_of_fall
from tests.methods.tables import LABELS, PAIR, pair_of, raw


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
    assert (effect.estimate.low, effect.estimate.high) == pytest.approx((low, high), rel=1e-10)
    assert effect.remark == "3 fell, 2 did not change, 1 rose"


def test_every_planned_contrast_has_its_effects_and_the_overall_test_kendalls_w():
    table = raw([[9, 7, 6], [4, 3, 5], [12, 8, 5], [7, 5, 4]])
    primary, omnibus = rm.follow_up(table), rm.friedman(table)
    found = effect_sizes(table, primary, omnibus)
    names = [effect.estimate.name for effect in found]
    assert names == [
        *["probability of a fall", "matched-pairs rank-biserial correlation"] * 2,
        "Kendall's W",
    ]
    assert found[1].estimate.value == -1
    assert found[-1].estimate.value == omnibus.details["kendall_w"]
    assert "averages 1/n = 0.250" in found[-1].remark
    assert found[0].label == f"{LABELS[1]} vs {LABELS[0]}"
