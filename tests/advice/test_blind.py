"""Advice is blind: rearranging a subject's values over its occasions changes no character of it."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import integrate, stats

import robustrm as rm
from robustrm.advice import advise, diagnose
from robustrm.advice.blind import blind_figures
from robustrm.advice.view import blind_view
from robustrm.kernels import shape

OCCASIONS = ["week 0", "week 2", "week 6", "week 12", "week 24"]


@st.composite
def tables(draw: st.DrawFn) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Draw values with ties, flags below a limit of 1 and gaps; every subject keeps a value."""
    n, k = draw(st.integers(1, 9)), draw(st.integers(2, 5))
    cells = st.sampled_from([1.0, 1.0, 1.2, 2.0, 2.0, 3.5, 7.0, 11.0, 40.0, 0.0, -2.0])
    values = np.array(draw(st.lists(cells, min_size=n * k, max_size=n * k))).reshape(n, k)
    below = values == 1.0
    gaps = np.array(draw(st.lists(st.booleans(), min_size=n * k, max_size=n * k))).reshape(n, k)
    gaps[np.arange(n), draw(st.lists(st.integers(0, k - 1), min_size=n, max_size=n))] = False
    positive = draw(st.booleans())
    return np.abs(values) + 0.5 if positive else values, below & ~positive, gaps


def table_of(values: np.ndarray, below: np.ndarray, gaps: np.ndarray) -> rm.OccasionTable:
    shown = np.where(gaps, np.nan, values)
    flags = below & ~gaps
    return rm.OccasionTable.from_array(
        shown,
        occasions=OCCASIONS[: values.shape[1]],
        below=flags,
        lower_limit=1.0 if flags.any() else None,
        resolution=0.1,
    )


def rearranged(rng: np.random.Generator, cells: list[np.ndarray], gaps: np.ndarray) -> list:
    """Permute value and flag together among the observed cells of every subject."""
    moved = [array.copy() for array in cells]
    for i, gap in enumerate(gaps):
        places = np.flatnonzero(~gap)
        order = rng.permutation(places)
        for array, source in zip(moved, cells, strict=True):
            array[i, places] = source[i, order]
    return moved


@given(
    found=tables(), seed=st.integers(0, 2**32 - 1), kind=st.sampled_from(["concentration", "score"])
)
def test_rearranging_values_changes_no_character_of_the_advice(found, seed, kind):
    values, below, gaps = found
    plan = rm.Plan(marker_kind=kind)
    before = advise(table_of(values, below, gaps), plan=plan)
    moved_values, moved_below = rearranged(np.random.default_rng(seed), [values, below], gaps)
    after = advise(table_of(moved_values, moved_below, gaps), plan=plan)
    assert str(after) == str(before)
    assert json.dumps(after.to_dict()) == json.dumps(before.to_dict())
    assert after.plan.digest == before.plan.digest


@given(found=tables(), seed=st.integers(0, 2**32 - 1))
def test_the_order_of_the_subjects_changes_no_bit_of_the_figures(found, seed):
    values, below, gaps = found
    order = np.random.default_rng(seed).permutation(len(values))
    one = blind_figures(blind_view(table_of(values, below, gaps)))
    other = blind_figures(blind_view(table_of(values[order], below[order], gaps[order])))
    assert one.to_dict() == other.to_dict()


def test_the_view_holds_nothing_that_tells_the_occasions():
    rows = [[5.0, 1.0, 3.0], [2.0, math.nan, 9.0]]
    view = blind_view(rm.OccasionTable.from_array(rows, occasions=OCCASIONS[:3]))
    assert view.values[0].tolist() == [1.0, 3.0, 5.0]
    assert view.values[1, :2].tolist() == [2.0, 9.0]
    assert view.missing.tolist() == [[False] * 3, [False, True, False]]


def test_the_descriptive_part_does_depend_on_the_occasions():
    """Otherwise the test above would prove nothing: a rearrangement can be seen."""
    rows = np.array([[1.0, 4.0, 9.0], [2.0, 6.0, 7.0], [3.0, 5.0, 11.0]])
    one = diagnose(rm.OccasionTable.from_array(rows, occasions=OCCASIONS[:3]))
    other = diagnose(rm.OccasionTable.from_array(rows[:, ::-1], occasions=OCCASIONS[:3]))
    assert one.described != other.described
    assert one.blind == other.blind


# ── the figures ───────────────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize("law", [stats.norm, stats.uniform, stats.laplace, stats.expon])
def test_hoggs_ratios_of_many_quantiles_are_those_of_the_law(law):
    """Against the ratios of the law by numerical integration of its quantile function (SciPy)."""

    def average(low: float, high: float) -> float:
        return integrate.quad(law.ppf, low, high, limit=200)[0] / (high - low)

    upper, lower, middle = average(0.95, 1), average(0, 0.05), average(0.25, 0.75)
    q = (upper - lower) / (average(0.5, 1) - average(0, 0.5))
    q3 = (upper - middle) / (middle - lower)
    sample = law.ppf((np.arange(200_000) + 0.5) / 200_000)
    assert float(shape.tail_weight(sample)) == pytest.approx(q, rel=1e-3)
    assert float(shape.tail_balance(sample)) == pytest.approx(q3, rel=1e-3)


def test_fractional_parts_of_a_sample_count_by_the_fraction():
    """n = 10: the outer twentieth is half a value, so U(.05) is the largest; by hand."""
    y = np.arange(1.0, 11.0)
    assert float(shape.upper_average(y, 0.05)) == 10.0
    assert float(shape.upper_average(y, 0.25)) == pytest.approx((10 + 9 + 0.5 * 8) / 2.5)


@pytest.mark.parametrize("n", [10, 11, 24, 25])
@pytest.mark.parametrize("digits", [0, 1, 6])
def test_the_medcouple_is_that_of_statsmodels(n, digits):
    """Rounding makes values that equal the median."""
    from statsmodels.stats.stattools import medcouple

    for seed in range(8):
        y = np.random.default_rng(seed).lognormal(0.5, 0.8, n).round(digits)
        assert shape.medcouple(y) == pytest.approx(float(medcouple(y)), abs=1e-12)


@pytest.mark.parametrize("power", [0.0, 0.5, 1.0, 1.3])
def test_the_slope_finds_the_power_that_made_the_spread(power):
    level = np.array([1.0, 2.0, 5.0, 9.0, 20.0, 41.0])
    assert shape.spread_level_slope(level, 0.3 * level**power) == pytest.approx(power, abs=1e-12)


def test_the_slope_needs_three_subjects_with_spread():
    assert math.isnan(shape.spread_level_slope(np.array([1.0, 2.0]), np.array([1.0, 2.0])))
    assert math.isnan(shape.spread_level_slope(np.ones(4), np.array([1.0, 2.0, 3.0, 4.0])))


def test_shares_by_hand():
    """Eight values of which two lie below; of three pairs of measured values one is equal."""
    rows = [[0.5, 2.0, 2.0], [0.5, 3.0, 4.0], [1.5, 6.0, math.nan]]
    table = rm.OccasionTable.from_array(
        rows, occasions=OCCASIONS[:3], below=np.array(rows) == 0.5, lower_limit=0.5
    )
    found = blind_figures(blind_view(table))
    assert found.share_below == pytest.approx(2 / 8)
    assert found.share_missing == pytest.approx(1 / 9)
    assert found.share_tied == pytest.approx(1 / 3)
    assert (found.n_subjects, found.n_complete, found.n_occasions) == (3, 2, 3)
