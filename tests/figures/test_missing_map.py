"""The map of missing values, read from the artists."""

from __future__ import annotations

import math
from typing import Any, TypeGuard

import numpy as np
import pytest
from matplotlib.colors import to_rgb
from matplotlib.figure import Figure
from matplotlib.text import Text

from robustrm.figures import describe_missing_map, missing_map, style
from robustrm.table import OccasionTable

pytestmark = pytest.mark.figure
NAN = math.nan
OCCASIONS = ["week 0", "week 6", "week 12"]


def made(rows: Any, **options: Any) -> OccasionTable:
    return OccasionTable.from_array(rows, occasions=OCCASIONS, **options)


@pytest.fixture
def gaps() -> OccasionTable:
    """Two complete, two without week 12, one without week 6; one below and one above a limit."""
    rows = [[5.0, 4.0, NAN], [9.0, 1.0, 3.0], [8.0, NAN, 20.0], [7.0, 6.0, 5.0], [2.0, 2.0, NAN]]
    values = np.array(rows)
    return made(values, below=values == 1, above=values == 20, subjects=list("VWXYZ"))


def points(axes: Any, label: str) -> set[tuple[int, int]]:
    (line,) = [line for line in axes.lines if line.get_label() == label]
    return {(int(x), int(y)) for x, y in line.get_xydata()}


def is_text(artist: object) -> TypeGuard[Text]:
    return isinstance(artist, Text)


def cells(axes: Any, color: str) -> int:
    return sum(to_rgb(patch.get_facecolor()) == to_rgb(color) for patch in axes.patches)


def test_every_cell_is_in_one_state(gaps):
    axes = missing_map(gaps)
    assert len(axes.patches) == gaps.values.size
    assert cells(axes, style.SUBJECT) == 10
    assert cells(axes, style.BAND) == 2
    assert cells(axes, "white") == 3


def test_subjects_are_sorted_by_what_they_lack(gaps):
    """Complete ones on top, then those without week 12, then the one without week 6."""
    axes = missing_map(gaps)
    assert points(axes, "_missing") == {(2, 2), (2, 3), (1, 4)}
    assert points(axes, "_above") == {(2, 4)}
    ((column, row),) = points(axes, "_below")
    assert column == 1
    assert row in (0, 1)
    lines = [line for line in axes.lines if line.get_label() == "_pattern"]
    assert [np.asarray(line.get_ydata())[0] for line in lines] == [1.5, 3.5]
    assert [text.get_text() for text in axes.texts] == ["2", "2", "1", "n"]


def test_n_stands_at_every_occasion(gaps):
    labels = [label.get_text() for label in missing_map(gaps).get_xticklabels()]
    assert labels == ["week 0\nn = 5", "week 6\nn = 4", "week 12\nn = 3"]


def test_nobody_is_named(gaps):
    axes = missing_map(gaps)
    drawn = [found.get_text() for found in filter(is_text, axes.figure.findobj())]
    assert not {"V", "W", "X", "Y", "Z"} & set(drawn)
    assert axes.get_yticks().tolist() == []


def test_states_differ_in_grey_and_by_a_symbol(gaps):
    axes = missing_map(gaps)
    grey = [np.dot(to_rgb(c), (0.299, 0.587, 0.114)) for c in (style.SUBJECT, style.BAND)]
    assert abs(grey[0] - grey[1]) > 0.4
    markers = {line.get_label(): line.get_marker() for line in axes.lines}
    assert [markers[f"_{name}"] for name in ("below", "above", "missing")] == ["v", "^", "x"]
    legend = axes.get_legend()
    assert legend is not None
    assert [text.get_text() for text in legend.get_texts()] == [
        "measured", "below the limit", "above the limit", "missing",
    ]  # fmt: skip


def test_the_order_of_the_rows_plays_no_part(gaps):
    turned = gaps.select(subjects=gaps.subjects[::-1])
    one, other = missing_map(gaps), missing_map(turned)
    for label in ("_missing", "_below", "_above"):
        assert points(one, label) == points(other, label)


def test_it_draws_on_given_axes(gaps):
    axes = style.new_figure((4, 4)).add_subplot()
    assert missing_map(gaps, ax=axes) is axes


@pytest.mark.parametrize("n", [1, 40, 120])
def test_any_number_of_subjects_fits(n: int):
    values = np.arange(1.0, 3 * n + 1).reshape(n, 3)
    values[::3, 2] = NAN
    figure = missing_map(made(values)).get_figure(root=True)
    assert isinstance(figure, Figure)
    assert 2 < figure.get_size_inches()[1] < 9.5


def test_the_map_in_words(gaps):
    assert describe_missing_map(gaps) == (
        "Map of value: 5 subjects by 3 occasions, 3 of 15 values missing. week 0: n = 5; week 6: "
        "n = 4, 1 below a limit and 1 missing; week 12: n = 3, 1 above a limit and 2 missing. "
        "Number of subjects by pattern: complete (2); no value at week 12 (2); no value at week 6 "
        "(1)."
    )
