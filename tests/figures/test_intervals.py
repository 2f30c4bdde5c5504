"""The interval plot, read from the artists."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from matplotlib.figure import Figure

from robustrm.figures import comparisons

pytestmark = pytest.mark.figure


def drawn(axes: Any, label: str) -> list[list[tuple[float, float]]]:
    return [
        [(float(x), float(y)) for x, y in line.get_xydata()]
        for line in axes.lines
        if line.get_label() == label
    ]


def texts(axes: Any) -> list[str]:
    return [text.get_text() for text in axes.texts]


def test_each_comparison_has_a_row_from_the_top(make_family, make_comparison):
    family = make_family(
        make_comparison(),
        make_comparison(second="week 12", value=0.5, interval=(0.2, 0.9)),
    )
    axes = comparisons(family)
    labels = [label.get_text() for label in axes.get_yticklabels()]
    assert labels == ["week 6 vs week 0", "week 12 vs week 0"]
    assert drawn(axes, "_estimate") == [[(0.7, 0.0)], [(0.5, 1.0)]]
    assert drawn(axes, "_interval") == [[(0.4, 0.0), (1.1, 0.0)], [(0.2, 1.0), (0.9, 1.0)]]
    assert axes.get_ylim()[0] > axes.get_ylim()[1]


def test_ratios_stand_on_a_log_axis_with_a_line_at_one(make_family, make_comparison):
    axes = comparisons(make_family(make_comparison()))
    assert axes.get_xscale() == "log"
    np.testing.assert_array_equal(axes.lines[0].get_xdata(), [1.0, 1.0])


def test_differences_stand_on_a_linear_axis_with_a_line_at_zero_and_the_unit(
    make_family, make_comparison
):
    pair = make_comparison(scale="raw", value=-2.0, interval=(-5.0, -1.0))
    axes = comparisons(make_family(pair))
    assert axes.get_xscale() == "linear"
    np.testing.assert_array_equal(axes.lines[0].get_xdata(), [0.0, 0.0])
    assert axes.get_xlabel().startswith("shift (µg/L)\n")


def test_the_line_of_no_change_is_in_view(make_family, make_comparison):
    axes = comparisons(make_family(make_comparison(value=0.1, interval=(0.05, 0.2))))
    low, high = axes.get_xlim()
    assert low < 0.05
    assert high > 1.0


@pytest.mark.parametrize(
    ("intervals", "words"),
    [
        ("separate", "separate intervals, 95% each"),
        ("simultaneous", "simultaneous intervals, 95% together"),
    ],
)
def test_the_axis_says_what_the_intervals_hold(make_family, make_comparison, intervals, words):
    axes = comparisons(make_family(make_comparison(), intervals=intervals))
    assert axes.get_xlabel() == f"shift (log axis)\n{words}"


def test_n_and_the_adjusted_p_stand_on_the_right(make_family, make_comparison):
    axes = comparisons(make_family(make_comparison(p=0.0313)))
    assert texts(axes) == ["4", "0.031", "n", "adjusted P\n(Holm)"]
    assert all(text.get_position()[0] > 0 for text in axes.texts)


def test_p_is_never_printed_as_zero(make_family, make_comparison):
    assert "< 0.001" in texts(comparisons(make_family(make_comparison(p=1e-9))))


def test_unadjusted_p_values_are_called_so(make_family, make_comparison):
    axes = comparisons(make_family(make_comparison(), adjust="none"))
    assert texts(axes)[-1] == "P\n(unadjusted)"


def test_a_row_without_an_estimate_says_so(make_family, make_comparison):
    axes = comparisons(make_family(make_comparison(value=None, p=math.nan)))
    assert texts(axes)[:3] == ["not estimable", "4", "–"]
    assert drawn(axes, "_estimate") == []


def test_a_row_without_an_interval_says_so_and_keeps_its_estimate(make_family, make_comparison):
    axes = comparisons(make_family(make_comparison(interval=None)))
    assert texts(axes)[0] == "interval not estimable"
    assert drawn(axes, "_estimate") == [[(0.7, 0.0)]]
    assert drawn(axes, "_interval") == []


def test_an_endless_side_runs_to_the_edge_and_carries_an_arrow(make_family, make_comparison):
    axes = comparisons(make_family(make_comparison(interval=(0.4, math.inf))))
    (((low, _), (high, _)),) = drawn(axes, "_interval")
    assert (low, high) == (0.4, axes.get_xlim()[1])
    (arrow,) = [line for line in axes.lines if line.get_marker() == ">"]
    np.testing.assert_array_equal(arrow.get_xdata(), [axes.get_xlim()[1]])


def test_a_ratio_interval_from_zero_runs_to_the_left_edge(make_family, make_comparison):
    axes = comparisons(make_family(make_comparison(interval=(0.0, 1.2))))
    (((low, _), _),) = drawn(axes, "_interval")
    assert low == axes.get_xlim()[0] > 0


def test_long_labels_keep_both_occasions(make_family, make_comparison):
    pair = make_comparison("baseline visit before the first infusion", "visit after the second one")
    (label,) = comparisons(make_family(pair)).get_yticklabels()
    above, below = label.get_text().split("\n")
    assert above.startswith("visit")
    assert below.startswith("vs baseline")


def test_given_axes_are_used(make_family, make_comparison):
    ax = Figure().add_subplot()
    assert comparisons(make_family(make_comparison()), ax=ax) is ax
