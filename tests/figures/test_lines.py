"""Trajectories, read from the artists."""

from __future__ import annotations

import dataclasses
from typing import Any

import matplotlib as mpl
import numpy as np
import pytest
from matplotlib.figure import Figure

from robustrm.errors import ArgumentError
from robustrm.figures import style, trajectories
from robustrm.methods.summary import summarize
from robustrm.table import OccasionTable

pytestmark = pytest.mark.figure
NAN = np.nan


def lines(axes: Any, label: str) -> list[Any]:
    return [line for line in axes.lines if line.get_label() == label]


def line(axes: Any, label: str) -> Any:
    (found,) = lines(axes, label)
    return found


def points(found: Any) -> list[tuple[float, float]]:
    return [(float(x), float(y)) for x, y in found.get_xydata()]


def tick_labels(axes: Any) -> list[str]:
    return [label.get_text() for label in axes.get_xticklabels()]


def texts(axes: Any) -> list[str]:
    return [text.get_text() for text in axes.texts]


def test_every_subject_has_a_line_that_breaks_at_a_gap(table: OccasionTable):
    drawn = [found.get_ydata() for found in lines(trajectories(table), "_subject")]
    np.testing.assert_array_equal(drawn, table.values)
    assert np.isnan(drawn[2][1])


def test_a_gap_has_no_point(table: OccasionTable):
    axes = trajectories(table)
    drawn = points(line(axes, "measured")) + points(line(axes, "below the limit"))
    assert len(drawn) == int((~table.missing).sum())
    assert not np.isnan(drawn).any()


def test_values_below_the_limit_are_open_and_at_the_limit(table: OccasionTable):
    axes = trajectories(table)
    below = line(axes, "below the limit")
    assert points(below) == [(1.0, 0.5), (2.0, 0.5)]
    assert below.get_markerfacecolor() == "white"
    assert line(axes, "measured").get_markerfacecolor() != "white"
    assert below.get_marker() != line(axes, "measured").get_marker()


def test_values_above_the_limit_are_open_and_point_up():
    table = OccasionTable.from_array(
        [[5.0, 9.0], [9.0, 2.0]], above=[[0, 1], [1, 0]], occasions=["a", "b"]
    )
    above = line(trajectories(table), "above the limit")
    assert sorted(points(above)) == [(0.0, 9.0), (1.0, 9.0)]
    assert (above.get_marker(), above.get_markerfacecolor()) == ("^", "white")


def test_a_common_limit_is_a_labelled_line_over_a_band_to_the_edge(table: OccasionTable):
    axes = trajectories(table)
    limit = line(axes, "lower limit 0.5 µg/L")
    assert list(limit.get_ydata()) == [0.5, 0.5]
    band: Any = axes.patches[0]
    low, high = sorted([band.get_y(), band.get_y() + band.get_height()])
    assert (low, high) == (pytest.approx(axes.get_ylim()[0]), 0.5)


def test_limits_that_differ_stand_at_their_own_occasion():
    table = OccasionTable.from_array(
        [[0.2, 3.0], [4.0, 0.6]],
        below=[[1, 0], [0, 1]],
        lower_limit=[0.2, 0.6],
        occasions=["a", "b"],
    )
    axes = trajectories(table)
    limits: Any = axes.collections[0]
    assert limits.get_label() == "lower limit 0.2 to 0.6"
    heights = [(segment[:, 0].mean(), segment[0, 1]) for segment in limits.get_segments()]
    assert heights == [(0.0, 0.2), (1.0, 0.6)]
    assert not axes.patches


def test_a_limit_far_from_all_values_does_not_press_them_together():
    values = [[50.0, 80.0], [60.0, 90.0]]
    table = OccasionTable.from_array(values, lower_limit=0.01, occasions=["a", "b"])
    axes = trajectories(table)
    assert axes.get_ylim()[0] > 40
    assert not axes.patches


def test_the_axis_is_logarithmic_when_all_values_are_positive(
    table: OccasionTable, signed: OccasionTable
):
    assert trajectories(table).get_yscale() == "log"
    assert "log axis" in trajectories(table).get_ylabel()
    assert trajectories(signed).get_yscale() == "linear"
    assert "log axis" not in trajectories(signed).get_ylabel()


def test_a_zero_asks_for_a_linear_axis():
    table = OccasionTable.from_array([[0.0, 2.0], [1.0, 3.0]], occasions=["a", "b"])
    assert trajectories(table).get_yscale() == "linear"


def test_a_linear_axis_can_be_asked_for(table: OccasionTable):
    assert trajectories(table, log=False).get_yscale() == "linear"


def test_a_log_axis_of_negative_values_is_refused(signed: OccasionTable):
    with pytest.raises(ArgumentError, match=r"`log` must be false .* got −1\.00"):
        trajectories(signed, log=True)


def test_a_table_of_logarithms_is_drawn_in_the_unit_of_the_marker(table: OccasionTable):
    raw, logs = trajectories(table), trajectories(table.log())
    for one, other in zip(lines(raw, "_subject"), lines(logs, "_subject"), strict=True):
        np.testing.assert_allclose(one.get_ydata(), other.get_ydata())
    assert lines(logs, "lower limit 0.5 µg/L")


def test_n_and_the_count_below_stand_under_each_occasion(table: OccasionTable):
    expected = ["week 0\nn = 5", "week 6\nn = 4\n1 below", "week 12\nn = 4\n1 below"]
    assert tick_labels(trajectories(table)) == expected


def test_medians_come_from_the_summary_alone(table: OccasionTable):
    summary = summarize(table)
    axes = trajectories(table, summary=summary)
    median = line(axes, "median")
    assert points(median) == [(j, s.median) for j, s in enumerate(summary)]
    assert median.get_marker() != line(axes, "measured").get_marker()
    assert not lines(trajectories(table), "median")


def test_a_median_below_the_limit_is_not_drawn(table: OccasionTable):
    summary = summarize(table)
    unmeasured = dataclasses.replace(summary[1], median=None)
    axes = trajectories(table, summary=[summary[0], unmeasured, summary[2]])
    assert [x for x, _ in points(line(axes, "median"))] == [0.0, 2.0]


def test_no_identifier_is_drawn_unless_asked_for(table: OccasionTable):
    assert texts(trajectories(table)) == []
    assert texts(trajectories(table, ids=True)) == list(table.subjects)


def test_given_axes_are_used(table: OccasionTable):
    ax = Figure().add_subplot()
    assert trajectories(table, ax=ax) is ax


def test_an_empty_occasion_keeps_its_place():
    table = OccasionTable.from_array([[1.0, NAN], [2.0, NAN]], occasions=["a", "b"])
    assert tick_labels(trajectories(table)) == ["a\nn = 2", "b\nn = 0"]


def test_a_table_without_any_value_can_be_drawn():
    table = OccasionTable.from_array([[NAN, NAN]], occasions=["a", "b"])
    assert tick_labels(trajectories(table)) == ["a\nn = 0", "b\nn = 0"]


def test_labels_leave_the_global_settings_alone(table: OccasionTable):
    before = dict(mpl.rcParams)
    trajectories(table)
    assert dict(mpl.rcParams) == before
    assert before["svg.hashsalt"] != style.HOUSE["svg.hashsalt"]
