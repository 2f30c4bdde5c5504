"""Changes between two occasions, read from the artists."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from matplotlib.figure import Figure

from robustrm.errors import ArgumentError
from robustrm.figures import paired_changes, paired_figure
from robustrm.figures.changes import changes_of
from robustrm.table import OccasionTable

pytestmark = pytest.mark.figure


def drawn(axes: Any, label: str) -> list[tuple[float, float]]:
    return [
        (float(x), float(y))
        for line in axes.lines
        if line.get_label() == label
        for x, y in line.get_xydata()
    ]


def heights(axes: Any, label: str) -> list[float]:
    return [y for _, y in drawn(axes, label)]


def tick_labels(axes: Any) -> list[str]:
    return [label.get_text() for label in axes.get_xticklabels()]


def test_ratios_are_drawn_from_smallest_to_largest(table, make_comparison):
    # Ann 4/8, Ben below 0.5 of 3, Dan 1.5/1, Eve 6/6
    axes = paired_changes(table, make_comparison())
    assert heights(axes, "measured") == pytest.approx([0.5, 1.0, 1.5])
    assert heights(axes, "change at most this") == pytest.approx([0.5 / 3])
    places = [x for label in ("change at most this", "measured") for x, _ in drawn(axes, label)]
    assert places == sorted(set(places))
    assert axes.get_yscale() == "log"


def test_differences_are_drawn_on_a_linear_axis_with_a_line_at_zero(table, make_comparison):
    axes = paired_changes(table, make_comparison(scale="raw", value=-1.0, interval=(-3.0, 0.5)))
    assert heights(axes, "measured") == [-4.0, 0.0, 0.5]
    assert axes.get_yscale() == "linear"
    np.testing.assert_array_equal(axes.lines[0].get_ydata(), [0.0, 0.0])
    assert axes.get_ylabel() == "ferritin\nweek 6 − week 0 (µg/L)"


def test_ratios_have_a_line_at_one_and_say_what_is_divided(table, make_comparison):
    axes = paired_changes(table, make_comparison())
    np.testing.assert_array_equal(axes.lines[0].get_ydata(), [1.0, 1.0])
    assert axes.get_ylabel() == "ferritin\nweek 6 / week 0 (log axis)"


def test_a_bound_is_an_open_triangle_in_its_direction(table, make_comparison):
    falls = paired_changes(table, make_comparison())
    (mark,) = [line for line in falls.lines if line.get_label() == "change at most this"]
    assert (mark.get_marker(), mark.get_markerfacecolor()) == ("v", "white")
    rises = paired_changes(table, make_comparison("week 6", "week 0"))
    (mark,) = [line for line in rises.lines if line.get_label() == "change at least this"]
    assert (mark.get_marker(), mark.get_markerfacecolor()) == ("^", "white")


def test_bounds_above_an_upper_limit_point_the_other_way(make_comparison):
    table = OccasionTable.from_array(
        [[2.0, 9.0], [9.0, 3.0]], above=[[0, 1], [1, 0]], occasions=["week 0", "week 6"]
    )
    axes = paired_changes(table, make_comparison(subjects=("S1", "S2")))
    assert heights(axes, "change at least this") == pytest.approx([4.5])
    assert heights(axes, "change at most this") == pytest.approx([1 / 3])


def test_two_values_below_the_limit_are_counted_not_drawn(table, make_comparison):
    # Ben is below the limit at weeks 6 and 12
    pair = make_comparison("week 6", "week 12", subjects=("Ann", "Ben", "Eve"))
    changes = changes_of(table, pair)
    assert (changes.n, changes.n_unknown) == (3, 1)
    np.testing.assert_allclose(changes.values, [0.5, 0.5])
    axes = paired_changes(table, pair)
    assert tick_labels(axes)[0] == "subjects\nn = 3\n1 unknown, both\nbeyond a limit"


def test_n_counts_the_subjects_of_the_comparison(table, make_comparison):
    axes = paired_changes(table, make_comparison(subjects=("Ann", "Eve")))
    assert tick_labels(axes)[0] == "subjects\nn = 2"
    assert heights(axes, "measured") == pytest.approx([0.5, 1.0])


def test_the_estimate_stands_beside_with_its_interval_and_attained_level(table, make_comparison):
    axes = paired_changes(table, make_comparison())
    assert heights(axes, "_estimate") == [0.7]
    assert heights(axes, "_interval") == [0.4, 1.1]
    assert tick_labels(axes)[1] == "shift\n0.700\n93.8% interval\n0.400 to 1.10"
    subjects = [x for x, _ in drawn(axes, "measured")]
    assert drawn(axes, "_estimate")[0][0] > max(subjects)


def test_without_an_interval_none_is_drawn(table, make_comparison):
    axes = paired_changes(table, make_comparison(interval=None))
    assert heights(axes, "_interval") == []
    assert tick_labels(axes)[1] == "shift\n0.700\ninterval\nnot estimable"


def test_without_an_estimate_none_is_drawn(table, make_comparison):
    axes = paired_changes(table, make_comparison(value=None))
    assert heights(axes, "_estimate") == []
    assert tick_labels(axes)[1] == "not estimable"


def test_an_endless_interval_runs_to_the_edge(table, make_comparison):
    axes = paired_changes(table, make_comparison(interval=(0.4, math.inf)))
    assert heights(axes, "_interval") == [0.4, axes.get_ylim()[1]]


def test_a_ratio_interval_from_zero_runs_to_the_lower_edge(table, make_comparison):
    axes = paired_changes(table, make_comparison(interval=(0.0, 1.1)))
    assert heights(axes, "_interval") == [axes.get_ylim()[0], 1.1]


def test_no_bar_is_drawn(table, make_comparison):
    assert list(paired_changes(table, make_comparison()).patches) == []


def test_differences_cannot_be_had_from_logarithms(table, make_comparison):
    with pytest.raises(ArgumentError, match=r"`table` must be on the raw scale"):
        paired_changes(table.log(), make_comparison(scale="raw"))


def test_a_raw_table_and_its_logarithms_give_the_same_ratios(table, make_comparison):
    one, other = changes_of(table, make_comparison()), changes_of(table.log(), make_comparison())
    np.testing.assert_array_equal(one.values, other.values)


def test_a_comparison_of_another_table_is_refused(table, make_comparison):
    with pytest.raises(ArgumentError, match="`subjects` must name one of"):
        paired_changes(table, make_comparison(subjects=("Ann", "Zoe")))


def test_both_panels_show_the_same_subjects(table, make_comparison):
    figure = paired_figure(table, make_comparison())
    left, right = figure.axes
    assert len(heights(left, "_subject")) == 2 * 4
    assert tick_labels(left) == ["week 0\nn = 4", "week 6\nn = 4\n1 below"]
    assert tick_labels(right)[0] == "subjects\nn = 4"
    assert left.get_yscale() == right.get_yscale() == "log"


def test_the_panels_share_one_legend(table, make_comparison):
    figure = paired_figure(table, make_comparison())
    assert [axes.get_legend() for axes in figure.axes] == [None, None]
    (legend,) = figure.legends
    labels = [text.get_text() for text in legend.get_texts()]
    assert labels == sorted(set(labels), key=labels.index)
    assert {"measured", "below the limit", "change at most this"} <= set(labels)


def test_dots_alone_need_no_legend(signed, make_comparison):
    pair = make_comparison("before", "after", scale="raw", subjects=signed.subjects)
    assert paired_figure(signed, pair).legends == []


def test_given_axes_are_used(table, make_comparison):
    ax = Figure().add_subplot()
    assert paired_changes(table, make_comparison(), ax=ax) is ax
