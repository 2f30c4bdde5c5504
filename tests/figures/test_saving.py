"""Files: the same bytes every time, and labels that cannot break them."""

from __future__ import annotations

import io
import subprocess
import sys
from typing import Any
from xml.etree import ElementTree as ET

import matplotlib as mpl
import pytest
from matplotlib import image

from robustrm.errors import ArgumentError
from robustrm.figures import comparisons, figure_bytes, paired_figure, trajectories
from robustrm.table import OccasionTable

pytestmark = pytest.mark.figure


def figure_of(axes: Any) -> Any:
    return axes.get_figure(root=True)


def words(svg: bytes) -> str:
    return " ".join(ET.fromstring(svg).itertext())


@pytest.mark.parametrize("kind", ["svg", "png"])
def test_two_saves_of_a_figure_are_identical(table, make_comparison, kind):
    figure = paired_figure(table, make_comparison())
    assert figure_bytes(figure, kind) == figure_bytes(figure, kind)


@pytest.mark.parametrize("kind", ["svg", "png"])
def test_a_figure_made_again_is_identical(table, make_comparison, kind):
    one, other = (paired_figure(table, make_comparison()) for _ in range(2))
    figure_bytes(other, "png" if kind == "svg" else "svg")  # what was saved before plays no part
    assert figure_bytes(one, kind) == figure_bytes(other, kind)


def test_global_settings_play_no_part(table):
    plain = figure_bytes(figure_of(trajectories(table)))
    with mpl.rc_context(
        {"font.size": 20, "svg.fonttype": "path", "lines.linewidth": 9, "axes.grid": True}
    ):
        assert figure_bytes(figure_of(trajectories(table))) == plain


def test_an_svg_holds_its_text_and_no_date(table):
    svg = figure_bytes(figure_of(trajectories(table)))
    root = ET.fromstring(svg)
    assert root.tag.endswith("svg")
    assert "ferritin (µg/L, log axis)" in words(svg)
    assert "n = 5" in words(svg)
    assert b"<dc:date>" not in svg
    assert b"Matplotlib" not in svg
    assert b"'DejaVu Sans', 'Verdana', sans-serif" in svg


def test_a_png_has_300_dots_an_inch(table):
    figure = figure_of(trajectories(table))
    height, width = image.imread(io.BytesIO(figure_bytes(figure, "png"))).shape[:2]
    assert (width, height) == tuple(round(300 * side) for side in figure.get_size_inches())


def test_the_layout_engine_is_given_back(table):
    figure = figure_of(trajectories(table))
    engine = figure.get_layout_engine()
    figure_bytes(figure)
    assert figure.get_layout_engine() is engine


def test_another_kind_is_refused(table):
    with pytest.raises(ArgumentError, match=r"`kind` must be one of 'svg', 'png', got 'pdf'"):
        figure_bytes(figure_of(trajectories(table)), "pdf")


def test_labels_with_markup_are_drawn_as_written(make_comparison, make_family):
    odd = ["cost $5 or $10", "a_b^{2} \\frac", "<b>late</b>\n&\x00 end"]
    table = OccasionTable.from_array(
        [[3.0, 2.0, 4.0], [5.0, 1.0, 2.0]],
        occasions=odd,
        marker="x_{1}$^2$ <script>",
        unit="$/mL",
        subjects=["$a$", "b"],
    )
    pair = make_comparison(odd[0], odd[1], subjects=("$a$", "b"))
    shown = words(figure_bytes(figure_of(trajectories(table, ids=True))))
    for text in ("$5 or $10", "a_b^{2} \\frac", "<b>late</b>", "x_{1}$^2$ <script>", "$/mL", "$a$"):
        assert text in shown
    assert "a_b^{2} \\frac" in words(figure_bytes(paired_figure(table, pair)))
    assert "$5 or $10" in words(figure_bytes(figure_of(comparisons(make_family(pair)))))


def test_no_identifier_is_in_a_file(table, make_comparison):
    for figure in (figure_of(trajectories(table)), paired_figure(table, make_comparison())):
        svg = figure_bytes(figure)
        assert [name for name in table.subjects if name in svg.decode()] == []


def test_pyplot_is_never_loaded():
    program = "import sys, robustrm.figures; print('matplotlib.pyplot' in sys.modules)"
    done = subprocess.run(
        [sys.executable, "-c", program], capture_output=True, text=True, check=True
    )
    assert done.stdout.strip() == "False"
