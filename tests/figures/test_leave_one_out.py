"""The leave-one-out figure, read from the artists."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from matplotlib.colors import to_hex
from matplotlib.figure import Figure

import robustrm as rm
from robustrm.figures import describe_leave_one_out, leave_one_out, style
from robustrm.sensitivity_analysis.influence import Influence
from robustrm.sensitivity_analysis.leave_one_out import leave_one_out as repeated
from tests.sensitivity_analysis import constructed

pytestmark = pytest.mark.figure

PLAN = rm.Plan(companions=())


def influence(table: rm.OccasionTable, method: str, scale: str = "log") -> Influence:
    found = repeated(table, PLAN, root=1).influences
    (one,) = [i for i in found if i.row.result.method == method and i.row.result.scale == scale][:1]
    return one


@pytest.fixture(scope="module")
def outlier() -> Influence:
    return influence(constructed.one_outlier(), "paired_t")


def symbols(axes: Any) -> list[Any]:
    return [line for line in axes.lines if line.get_marker() in ("o", "s")]


def test_the_rows_are_sorted_by_estimate(outlier):
    drawn = symbols(leave_one_out(outlier))
    values = [float(line.get_xdata()[0]) for line in drawn]
    known = [w.row.result.estimate for w in outlier.repeats if w.row is not None]
    assert values == sorted(estimate.value for estimate in known if estimate is not None)
    assert [int(line.get_ydata()[0]) for line in drawn] == list(range(14))


def test_every_row_has_its_interval(outlier):
    axes = leave_one_out(outlier)
    drawn = [line for line in axes.lines if line.get_label() == "_interval"]
    lines = [np.asarray(line.get_xdata()).tolist() for line in drawn]
    known = [w.row.result.estimate for w in outlier.repeats if w.row is not None]
    expected = sorted((e.value, e.low, e.high) for e in known if e is not None)
    np.testing.assert_allclose(lines, [ends[1:] for ends in expected])


def test_who_moves_most_is_filled_and_who_changes_the_reading_is_square(outlier):
    drawn = symbols(leave_one_out(outlier))
    filled = [line for line in drawn if to_hex(line.get_markerfacecolor()) != "#ffffff"]
    square = [line for line in drawn if line.get_marker() == "s"]
    assert filled == square == drawn[:1]  # without P7, who rises, the ratio is smallest
    assert to_hex(filled[0].get_markerfacecolor()).upper() == style.ACCENT


def test_all_subjects_are_a_line_and_a_band(outlier):
    axes = leave_one_out(outlier)
    whole = outlier.row.result.estimate
    assert whole is not None
    (line,) = [line for line in axes.lines if line.get_label() == "all subjects"]
    assert set(np.asarray(line.get_xdata()).tolist()) == {whole.value}
    (band,) = axes.patches
    low, high = band.get_extents().x0, band.get_extents().x1
    ends = axes.transData.inverted().transform([(low, 0), (high, 0)])[:, 0]
    assert tuple(ends) == pytest.approx((whole.low, whole.high))
    assert axes.get_xscale() == "log"


def test_no_identifier_is_shown_or_told(outlier):
    axes = leave_one_out(outlier)
    legend = axes.get_legend()
    assert legend is not None
    shown = [text.get_text() for text in (*axes.texts, *legend.get_texts())]
    shown += [axes.get_xlabel(), axes.get_ylabel(), describe_leave_one_out(outlier)]
    assert not [text for text in shown if "P7" in text]
    assert "n = 14" in axes.get_xlabel()


def test_the_words_say_what_is_drawn(outlier):
    told = describe_leave_one_out(outlier)
    assert "14 rows sorted by estimate: ratio of geometric means 0.735 to " in told
    assert "of all 14 subjects 0.958" in told
    assert "One subject moves the estimate most, to 0.735." in told
    assert "1 subject left out changes the reading." in told


def test_nobody_changes_what_holds():
    steady = influence(constructed.all_fall(), "signed_rank")
    assert "Nobody left out changes the reading." in describe_leave_one_out(steady)
    assert {line.get_marker() for line in symbols(leave_one_out(steady))} == {"o"}


def test_without_an_interval_the_estimates_stand_alone():
    few = influence(constructed.all_fall(5), "signed_rank")
    axes = leave_one_out(few)
    assert len(symbols(axes)) == 5
    assert not [line for line in axes.lines if line.get_label() == "_interval"]
    assert not axes.patches


def test_an_overall_test_has_nothing_to_draw():
    overall = influence(constructed.all_fall(), "friedman")
    assert [text.get_text() for text in leave_one_out(overall).texts] == ["not estimable"]
    assert "no estimate to draw" in describe_leave_one_out(overall)


def test_given_axes_are_used(outlier):
    ax = Figure().add_subplot()
    assert leave_one_out(outlier, ax=ax) is ax
