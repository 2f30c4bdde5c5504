"""Figures of the diagnostics, read from the artists: the two blind ones, and what all share."""

from __future__ import annotations

import math
from typing import Any
from xml.etree import ElementTree as ET

import matplotlib as mpl
import numpy as np
import pytest
from matplotlib.figure import Figure
from scipy import stats

from robustrm.advice import diagnose
from robustrm.errors import ArgumentError, DataError
from robustrm.figures import (
    centred_quantiles,
    describe_centred_quantiles,
    describe_difference_symmetry,
    describe_spread_level,
    difference_symmetry,
    figure_bytes,
    spread_level,
)
from robustrm.figures.diagnostic_parts import spread_out
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


def svg(axes: Any) -> bytes:
    return figure_bytes(axes.get_figure(root=True))


def every_axes(table: OccasionTable) -> list[Any]:
    first, *_, last = table.occasions
    return [
        spread_level(table),
        centred_quantiles(table, scale="raw"),
        difference_symmetry(table, first, last, scale="raw"),
    ]


def every_text(table: OccasionTable) -> list[str]:
    first, *_, last = table.occasions
    return [
        describe_spread_level(table),
        describe_centred_quantiles(table, scale="raw"),
        describe_difference_symmetry(table, first, last, scale="raw"),
    ]


# ── spread against level ──────────────────────────────────────────────────────────────────


def test_a_point_is_the_median_and_the_sd_of_a_subject(plain):
    """Against NumPy."""
    rows = np.array(ROWS, dtype=float)
    expected = np.column_stack([np.median(rows, axis=1), rows.std(axis=1, ddof=1)])
    drawn = points(spread_level(plain), "subject")
    np.testing.assert_allclose(drawn[np.argsort(drawn[:, 0])], expected[np.argsort(expected[:, 0])])


def test_the_fitted_line_is_that_of_scipy_and_has_the_slope_of_the_advice(plain):
    """`theilslopes` with method "joint": the intercept is the median of the residuals."""
    rows = np.log(np.column_stack([np.median(ROWS, axis=1), np.std(ROWS, axis=1, ddof=1)]))
    expected = stats.theilslopes(rows[:, 1], rows[:, 0], method="joint")  # type: ignore[call-overload]  # the stubs lack it
    axes = spread_level(plain)
    assert diagnose(plain).blind.slope == pytest.approx(expected.slope)
    x, y = np.log(points(axes, "_slope 0.73: fitted")).T
    np.testing.assert_allclose(y, expected.intercept + expected.slope * x)


@pytest.mark.parametrize(("slope", "scale"), [(0, "raw"), (1, "log")])
def test_reference_lines_go_through_the_middle_with_their_slope(plain, slope, scale):
    axes = spread_level(plain)
    drawn = points(axes, f"_slope {slope}: {scale} scale")
    x, y = np.log(drawn).T
    middle = np.median(np.log(points(axes, "subject")), axis=0)
    np.testing.assert_allclose(y - middle[1], slope * (x - middle[0]), atol=1e-12)


def test_every_line_is_named_at_its_right_end_and_ends_in_view(plain):
    axes = spread_level(plain)
    drawn = [label[1:] for label in labels(axes) if label.startswith("_")]
    assert sorted(texts(axes)) == sorted(drawn)
    bottom, top = axes.get_ylim()
    for name in drawn:
        end = points(axes, f"_{name}")[-1]
        assert end[0] == pytest.approx(axes.get_xlim()[1])
        assert bottom < end[1] < top


def test_names_of_close_lines_do_not_touch():
    """Spread in proportion to the level: the fitted line lies on the line of slope 1."""
    rows = np.outer([1.0, 2.0, 5.0, 11.0, 30.0], [10, 12, 15])
    axes = spread_level(table_of(rows))
    figure: Any = axes.get_figure(root=True)
    figure.draw_without_rendering()
    boxes = [text.get_window_extent() for text in axes.texts]
    assert "slope 1.00: fitted" in texts(axes)
    assert not any(a.overlaps(b) for i, a in enumerate(boxes) for b in boxes[:i])
    assert all(box.x1 <= figure.bbox.x1 for box in boxes)


@pytest.mark.parametrize(
    ("places", "expected"),
    [
        ([0.2, 0.5, 0.9], [0.2, 0.5, 0.9]),
        ([0.5, 0.5], [0.45, 0.55]),
        ([0.5, 0.5, 0.5], [0.4, 0.5, 0.6]),
        # 0.45 and 0.5 become 0.425 and 0.525, which touches 0.6: all three keep their mean
        ([0.6, 0.5, 0.45], [1.55 / 3 + 0.1, 1.55 / 3, 1.55 / 3 - 0.1]),
    ],
)
def test_texts_are_moved_as_little_as_needed(places, expected):
    """By hand: a run of texts that touch keeps its mean."""
    np.testing.assert_allclose(spread_out(places, 0.1), expected)


def test_lines_differ_without_colour(plain):
    axes = spread_level(plain)
    drawn = [found for found in axes.lines if str(found.get_label()).startswith("_")]
    assert len({found.get_linestyle() for found in drawn}) == len(drawn)


def test_subjects_without_a_point_are_counted_in_words():
    rows = [*ROWS, [7, 7, 7], [0.1, 0.1, 0.1], [4, NAN, NAN], [-1, 0, 3]]
    axes = spread_level(table_of(rows))
    assert len(points(axes, "subject")) == 6
    assert axes.get_xlabel().split("\n")[1:] == [
        "n = 6",
        "1 subject with fewer than two values not drawn",
        "2 subjects without spread not drawn",
        "1 subject with a median of zero or less not drawn",
    ]


def test_a_subject_with_a_value_beyond_a_limit_is_open(table: OccasionTable):
    """The second subject of the table has two of three values below 0.5."""
    axes = spread_level(table)
    found = line(axes, "subject with a value beyond a limit")
    assert found.get_markerfacecolor() == "white"
    spread = float(np.std([3, 0.5, 0.5], ddof=1))
    np.testing.assert_allclose(found.get_xydata(), [[0.5, spread]])
    assert len(points(axes, "subject")) == 4


@pytest.mark.parametrize("rows", [[[3, 5]], [[3, 5], [10, 11]], [[5, 10, 12], [9, 10, 15]]])
def test_a_slope_needs_three_subjects(rows):
    axes = spread_level(table_of(rows))
    assert texts(axes) == ["slope 0: raw scale", "slope 1: log scale"]
    assert axes.get_xlabel().endswith(f"n = {len(rows)}, slope not estimable")
    assert "slope not estimable" in describe_spread_level(table_of(rows))


def test_equal_levels_have_no_slope():
    axes = spread_level(table_of([[5, 10, 12], [9, 10, 15], [1, 10, 20]]))
    assert "slope not estimable" in axes.get_xlabel()
    assert len(points(axes, "subject")) == 3


# ── normal quantiles ──────────────────────────────────────────────────────────────────────


def test_points_are_ordered_ratios_at_blom_positions(plain):
    """Positions by statsmodels: (i − a) / (n + 1 − 2a), a = 3/8; ratios by SciPy's gmean."""
    from statsmodels.graphics.gofplots import plotting_pos

    ratios = np.sort((np.array(ROWS) / stats.gmean(ROWS, axis=1)[:, None]).ravel())
    x, y = points(centred_quantiles(plain), "measured").T
    np.testing.assert_allclose(x, stats.norm.ppf(plotting_pos(18, a=0.375)), atol=1e-12)
    np.testing.assert_allclose(y, ratios)


def test_on_the_raw_scale_they_are_differences_from_the_mean(plain):
    rows = np.array(ROWS, dtype=float)
    axes = centred_quantiles(plain, scale="raw")
    expected = np.sort((rows - rows.mean(axis=1, keepdims=True)).ravel())
    np.testing.assert_allclose(points(axes, "measured")[:, 1], expected, atol=1e-12)
    assert axes.get_yscale() == "linear"
    assert axes.get_ylabel() == "ferritin − subject's mean (µg/L)"


@pytest.mark.parametrize("scale", ["log", "raw"])
def test_the_line_goes_through_the_quartiles(plain, scale):
    axes = centred_quantiles(plain, scale=scale)
    drawn = [points(axes, label)[:, 1] for label in ("measured", "_quartiles")]
    values, ends = (np.log(d) if scale == "log" else d for d in drawn)
    x = points(axes, "_quartiles")[:, 0]
    at = np.interp(stats.norm.ppf([0.25, 0.75]), x, ends)
    np.testing.assert_allclose(at, np.quantile(values, [0.25, 0.75]), atol=1e-12)
    assert texts(axes) == ["quartile line"]


@pytest.mark.parametrize("scale", ["log", "raw"])
def test_tail_weight_and_balance_are_those_of_the_advice(table: OccasionTable, scale):
    found = diagnose(table).blind.shape[scale]
    told = centred_quantiles(table, scale=scale).get_xlabel()
    assert f"tail weight {found.tail_weight:.2f} (normal 2.58)" in told
    assert f"tail balance {found.tail_balance:.2f} (symmetric 1)" in told
    assert "n = 5 subjects, 13 values" in told


def test_values_beyond_limits_are_open_and_point_outward():
    rows = np.array([[1.0, 4, 9], [2, 9, 5], [3, 1, 6]])
    axes = centred_quantiles(table_of(rows, below=rows == 1, above=rows == 9))
    below, above = line(axes, "below the limit"), line(axes, "above the limit")
    assert (below.get_marker(), above.get_marker()) == ("v", "^")
    assert {below.get_markerfacecolor(), above.get_markerfacecolor()} == {"white"}
    means = stats.gmean(rows, axis=1)
    np.testing.assert_allclose(below.get_ydata(), np.sort(1 / means[[0, 2]]))
    np.testing.assert_allclose(above.get_ydata(), np.sort(9 / means[[0, 1]]))
    assert len(points(axes, "measured")) == 5


def test_a_subject_with_one_value_tells_nothing():
    axes = centred_quantiles(table_of([*ROWS, [4, NAN, NAN]]))
    assert "n = 6 subjects, 18 values" in axes.get_xlabel()


def test_a_long_marker_does_not_push_out_what_it_is_divided_by():
    table = table_of(ROWS, marker="a marker with a name of far too many words for an axis")
    assert "\n/ subject's geometric mean (log axis)" in centred_quantiles(table).get_ylabel()
    assert "…" in centred_quantiles(table).get_ylabel()
    assert ", median of a subject" in spread_level(table).get_xlabel()


# ── blind, or not ─────────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize("seed", range(4))
def test_rearranged_values_give_the_same_bytes_where_it_is_promised(table, seed):
    rng = np.random.default_rng(seed)
    values, below = table.values.copy(), table.below.copy()
    for i in range(table.n_subjects):
        places = np.flatnonzero(~table.missing[i])
        order = rng.permutation(places)
        values[i, places], below[i, places] = table.values[i, order], table.below[i, order]
    other = OccasionTable.from_array(
        values, below=below, occasions=table.occasions, marker="ferritin", unit="µg/L"
    )
    assert other != table
    for draw in (spread_level, centred_quantiles):
        assert svg(draw(other)) == svg(draw(table))
    assert describe_spread_level(other) == describe_spread_level(table)
    assert describe_centred_quantiles(other) == describe_centred_quantiles(table)
    pair = ("week 0", "week 6")
    assert svg(difference_symmetry(other, *pair)) != svg(difference_symmetry(table, *pair))


def test_the_texts_say_who_is_blind_and_who_is_not(plain):
    spread, quantiles, symmetry = every_text(plain)
    assert "blind to the occasions" in spread
    assert "blind to the occasions" in quantiles
    assert "shown, not used to choose" in symmetry
    for function in (spread_level, centred_quantiles):
        assert "Blind to the occasions" in str(function.__doc__)
    assert "shown, not used to choose" in str(difference_symmetry.__doc__)


# ── in words ──────────────────────────────────────────────────────────────────────────────


def test_the_spread_in_words(table: OccasionTable):
    """Two subjects have two values: 20 and 10, 1 and 1.5."""
    slope = diagnose(table).blind.slope
    assert describe_spread_level(table) == (
        "Spread of ferritin (µg/L) within subjects against their median, one point a subject, "
        f"blind to the occasions: n = 5, slope {slope:.2f} (1: in proportion to the level, 0: not "
        "at all). 1 subject with a value beyond a limit: open symbol."
    )


def test_the_quantiles_in_words(plain):
    found = diagnose(plain).blind.shape["raw"]
    assert describe_centred_quantiles(plain, scale="raw") == (
        "Normal quantile plot of the values of ferritin less their subject's mean, pooled, blind "
        f"to the occasions: n = 6 subjects, 18 values, tail weight {found.tail_weight:.2f} "
        f"(normal 2.58), tail balance {found.tail_balance:.2f} (symmetric 1)."
    )


# ── all three ─────────────────────────────────────────────────────────────────────────────

DEGENERATE = {
    "one subject": [[3.0, 5.0, 4.0]],
    "two subjects": [[3.0, 5.0, 4.0], [10.0, 11.0, 17.0]],
    "constant": [[0.1, 0.1, 0.1]] * 3 + [[0.7, 0.7, 0.7]],
    "negative": [[-3.0, 1.0, -2.0], [-1.0, -4.0, 2.0], [-5.0, -6.0, -7.0]],
    "empty": [[NAN, NAN, NAN]],
    "one value each": [[1.0, NAN, NAN], [NAN, 2.0, NAN]],
    "wide": [[1e-6, 1e6, 3.0], [2.0, 1e9, 5.0], [1e-9, 7.0, 8.0]],
}


@pytest.mark.parametrize("rows", DEGENERATE.values(), ids=DEGENERATE)
def test_degenerate_tables_can_be_drawn_and_told(rows):
    for axes, text in zip(every_axes(table_of(rows)), every_text(table_of(rows)), strict=True):
        assert svg(axes).startswith(b"<?xml")
        assert "n = " in axes.get_xlabel()
        assert "n = " in text
        assert "nan" not in text


def test_equal_values_have_no_shape_even_where_floats_round():
    """The mean of 0.1, 0.1, 0.1 is above 0.1 in floats."""
    axes = centred_quantiles(table_of(DEGENERATE["constant"]), scale="raw")
    assert set(points(axes, "measured")[:, 1].tolist()) == {0.0}
    assert "tail weight not defined\ntail balance not defined" in axes.get_xlabel()
    assert math.isnan(diagnose(table_of(DEGENERATE["constant"])).blind.shape["raw"].tail_weight)


@pytest.mark.parametrize("value", [0.0, -2.0])
def test_what_has_no_logarithm_is_refused_by_the_table(value):
    table = table_of([[3.0, value], [4.0, 5.0]])
    calls = (
        lambda: centred_quantiles(table),
        lambda: difference_symmetry(table, "week 0", "week 6"),
    )
    for call in calls:
        with pytest.raises(DataError, match=r"'S1' has .* at 'week 6', which has no logarithm"):
            call()


def test_a_table_of_logarithms_is_refused(plain):
    for call in (
        spread_level,
        centred_quantiles,
        lambda t: difference_symmetry(t, "week 0", "week 6"),
    ):
        with pytest.raises(ArgumentError, match=r"`table` must be .* raw scale, got 'log'"):
            call(plain.log())


def test_another_scale_or_occasion_is_refused(plain):
    with pytest.raises(ArgumentError, match="`scale` must be one of 'log', 'raw', got 'root'"):
        centred_quantiles(plain, scale="root")  # type: ignore[arg-type]
    with pytest.raises(ArgumentError, match="`scale` must be"):
        difference_symmetry(plain, "week 0", "week 6", scale="root")  # type: ignore[arg-type]
    with pytest.raises(ArgumentError, match="`second` must name one of"):
        difference_symmetry(plain, "week 0", "week 7")


def test_given_axes_are_used(plain):
    for draw in (
        spread_level,
        centred_quantiles,
        lambda t, ax: difference_symmetry(t, "week 0", "week 6", ax=ax),
    ):
        ax = Figure().add_subplot()
        assert draw(plain, ax=ax) is ax


def test_no_figure_has_a_title_and_none_names_a_subject(table: OccasionTable):
    for axes, text in zip(every_axes(table), every_text(table), strict=True):
        assert axes.get_title() == ""
        shown = svg(axes).decode() + text
        assert [name for name in table.subjects if name in shown] == []


def test_text_stays_text_and_markup_is_drawn_as_written():
    odd = ["cost $5 or $10", "a_b^{2}", "late & <b>"]
    table = OccasionTable.from_array(ROWS, occasions=odd, marker="x_{1}$^2$", unit="$/mL")
    for axes in every_axes(table):
        words = " ".join(ET.fromstring(svg(axes)).itertext())
        assert "$/mL" in words
        assert "n = 6" in words
    symmetry = " ".join(ET.fromstring(svg(every_axes(table)[2])).itertext())
    assert "x_{1}$^2$, late & <b> − cost $5 or $10" in symmetry


def test_nothing_global_changes(plain):
    before = dict(mpl.rcParams)
    every_axes(plain)
    assert dict(mpl.rcParams) == before
