"""Symmetry of differences, read from the artists."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest

from robustrm.advice.describe import mirrored_differences
from robustrm.figures import describe_difference_symmetry, difference_symmetry
from robustrm.table import OccasionTable

pytestmark = pytest.mark.figure
NAN = math.nan
OCCASIONS = ["week 0", "week 6", "week 12"]
ROWS = [[91, 72, 60], [40, 31, 25], [120, 125, 80], [66, 50, 59], [33, 21, 20], [75, 60, 44]]


def table_of(rows: Any, **options: Any) -> OccasionTable:
    return OccasionTable.from_array(rows, occasions=OCCASIONS[: np.shape(rows)[1]], **options)


@pytest.fixture
def plain() -> OccasionTable:
    return table_of(ROWS, marker="ferritin", unit="µg/L")


def line(axes: Any, label: str) -> Any:
    (found,) = [line for line in axes.lines if line.get_label() == label]
    return found


def labels(axes: Any) -> list[str]:
    return [line.get_label() for line in axes.lines]


def points(axes: Any, label: str) -> np.ndarray:
    return np.asarray(line(axes, label).get_xydata())


def texts(axes: Any) -> list[str]:
    return [text.get_text() for text in axes.texts]


def test_points_are_distances_of_the_ordered_ratios_by_hand():
    """Ratios 1/2, 1, 2, 8 have the median √2: distances √2 and 2√2 below, √2 and 4√2 above."""
    table = table_of([[2, 1], [3, 3], [2, 4], [1, 8]])
    axes = difference_symmetry(table, "week 0", "week 6")
    root = math.sqrt(2)
    expected = [[2 * root, 4 * root], [root, root]]
    np.testing.assert_allclose(points(axes, "pair of differences"), expected)
    assert axes.get_xlabel().endswith("value, week 6 / week 0\nn = 4, median ratio 1.41")


def test_raw_differences_by_hand():
    """Differences −1, 0, 2, 7, 10: median 2; distances 3 and 2 below, 8 and 5 above."""
    table = table_of([[2, 1], [3, 3], [2, 4], [1, 8], [5, 15]], unit="mm")
    axes = difference_symmetry(table, "week 0", "week 6", scale="raw")
    assert points(axes, "pair of differences").tolist() == [[3, 8], [2, 5]]
    assert axes.get_xlabel().startswith("distance below the median (mm)")
    assert axes.get_ylabel() == "distance above the median (mm)"
    assert axes.get_xlabel().endswith("n = 5, median difference 2.00")


@pytest.mark.parametrize("scale", ["log", "raw"])
def test_exchanging_the_occasions_exchanges_the_axes(plain, scale):
    one = difference_symmetry(plain, "week 0", "week 12", scale=scale)
    other = difference_symmetry(plain, "week 12", "week 0", scale=scale)
    drawn = points(one, "pair of differences")
    np.testing.assert_allclose(points(other, "pair of differences")[:, ::-1], drawn)


@pytest.mark.parametrize("scale", ["log", "raw"])
def test_both_axes_have_one_scale_and_the_line_is_the_identity(plain, scale):
    axes = difference_symmetry(plain, "week 0", "week 6", scale=scale)
    assert axes.get_xlim() == axes.get_ylim()
    assert axes.get_xscale() == axes.get_yscale() == ("log" if scale == "log" else "linear")
    assert axes.get_box_aspect() == 1
    x, y = points(axes, "_symmetric").T
    np.testing.assert_array_equal(x, y)
    assert (x[0], x[-1]) == pytest.approx(axes.get_xlim())
    assert texts(axes) == ["symmetric"]


def test_half_the_limit_enters_and_its_pair_is_open(table: OccasionTable):
    """Ratios 1/2, 0.25/3, 3/2, 1 of the four with both have the median √(1/2), by hand."""
    axes = difference_symmetry(table, "week 0", "week 6")
    opened = line(axes, "with a value beyond a limit")
    assert opened.get_markerfacecolor() == "white"
    np.testing.assert_allclose(
        opened.get_xydata(), [[math.sqrt(0.5) * 12, 1.5 / math.sqrt(0.5)]], rtol=1e-12
    )
    assert "n = 4, median ratio 0.707" in axes.get_xlabel()
    whole = difference_symmetry(table, "week 0", "week 6", substitute="limit")
    assert points(whole, "with a value beyond a limit")[0, 0] == pytest.approx(math.sqrt(0.5) * 6)


def test_limits_of_other_occasions_play_no_part():
    rows = [[8.0, 4.0, 5.0], [3.0, 1.0, 5.0], [2.0, 6.0, 7.0]]
    limits = [[0.5, 0.5, 5.0]] * 3
    below = np.array(rows) == 5.0
    table = table_of(rows, below=below, lower_limit=limits)
    axes = difference_symmetry(table, "week 0", "week 6")
    assert labels(axes) == ["pair of differences", "_symmetric"]


def test_both_values_below_the_limit_are_no_change():
    rows = np.array([[1.0, 1.0], [4.0, 2.0], [2.0, 6.0]])
    table = table_of(rows, below=rows == 1)
    found = mirrored_differences(table, "week 0", "week 6", scale="raw")
    assert (found.n, found.median) == (3, 0.0)


def test_nobody_with_both_occasions_can_be_drawn():
    table = table_of([[1.0, NAN], [NAN, 2.0]])
    axes = difference_symmetry(table, "week 0", "week 6")
    assert axes.get_xlabel().endswith("n = 0")
    assert labels(axes) == ["_symmetric"]
    assert "n = 0." in describe_difference_symmetry(table, "week 0", "week 6")


def test_the_symmetry_in_words():
    """Differences −1, 0, 2, 7, 10 as above: the upper ones lie further away."""
    table = table_of([[2, 1], [3, 3], [2, 4], [1, 8], [5, 15]])
    assert describe_difference_symmetry(table, "week 0", "week 6", scale="raw") == (
        "Symmetry of the differences of value, week 6 − week 0, shown, not used to choose: n = 5, "
        "median difference 2.00. Of 2 pairs of an upper and a lower one, the upper lies further "
        "from the median in 2, the lower in 0."
    )
