"""The specification plot, read from the artists."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from robustrm.figures import describe_specification, figure_bytes, specification
from robustrm.plan import GridChoices
from robustrm.sensitivity_analysis.grid import Grid

pytestmark = pytest.mark.figure

NAN = float("nan")
CHOICES = GridChoices(
    test=("aligned_ranks", "trimmed_anova"), substitute=("half",), missing=("complete",)
)


def row(p: float, **fields: object) -> dict[str, object]:
    usual: dict[str, object] = {
        "replicates": "as read", "scale": "log", "test": "aligned_ranks", "trim": "none",
        "substitute": "half", "missing": "complete", "outliers": "kept", "planned": False,
        "n": 12, "estimate": 0.8, "estimate_scale": "log",
    }  # fmt: skip
    return {**usual, "p": p, **fields}


ROWS = [
    row(0.2, planned=True),
    row(0.01, test="trimmed_anova", trim="20%", estimate=0.5),
    row(0.04, scale="raw", estimate=-3.0, estimate_scale="raw", outliers="kept, winsorized"),
    row(0.03, scale="log, raw", estimate=NAN, outliers="winsorized"),
]


def grid(rows: list[dict[str, object]] | None = None, **fields: object) -> Grid:
    usual: dict[str, object] = {
        "frame": pd.DataFrame(rows or ROWS), "contrast": ("week 0", "week 12"), "grid_p": 0.025,
        "grid_p_interval": (0.01, 0.05), "median_p": 0.035, "share_below": 0.75, "alpha": 0.05,
        "draws": 1999, "declared": 9, "choices": CHOICES, "unit": "µg/L",
    }  # fmt: skip
    return Grid(**{**usual, **fields})  # type: ignore[arg-type]  # fields of a grid


def drawn(axes, label: str) -> list[list[float]]:
    (line,) = [line for line in axes.lines if line.get_label() == label]
    return [[float(x), float(y)] for x, y in line.get_xydata()]


def test_p_values_stand_in_their_order_on_a_log_axis_with_the_level():
    axes = specification(grid()).axes[0]
    assert drawn(axes, "_p") == [[0, 0.01], [1, 0.03], [2, 0.04], [3, 0.2]]
    assert axes.get_yscale() == "log"
    assert np.asarray(axes.lines[0].get_ydata())[0] == 0.05
    assert drawn(axes, "_planned") == [[3, 0.2]]


def test_ratios_and_differences_have_an_axis_each_at_the_places_of_their_specifications():
    ratios, differences = specification(grid()).axes[1:3]
    assert drawn(ratios, "_ratio") == [[0, 0.5], [3, 0.8]]
    assert drawn(differences, "_difference") == [[2, -3.0]]
    assert (ratios.get_yscale(), differences.get_yscale()) == ("log", "linear")
    assert np.asarray(ratios.lines[0].get_ydata())[0] == 1.0
    assert np.asarray(differences.lines[0].get_ydata())[0] == 0.0
    assert "µg/L" in differences.get_ylabel()
    assert ratios.get_title(loc="left") == "week 12 vs week 0"


def test_without_estimates_on_a_scale_there_is_no_panel_for_it():
    assert len(specification(grid(ROWS[:2])).axes) == 3
    nowhere = [{**ROWS[0], "estimate": NAN}]
    assert len(specification(grid(nowhere)).axes) == 2


def test_dots_show_what_is_taken_filled_and_what_makes_no_difference_open():
    axes = specification(grid()).axes[-1]
    kept = [line for line in axes.lines if line.get_label() == "_outliers: kept"]
    assert [np.asarray(line.get_xdata()).tolist() for line in kept] == [[0, 3], [2]]
    assert [line.get_markerfacecolor() for line in kept] == ["#000000", "white"]


def test_a_choice_that_tells_no_specification_apart_has_no_row():
    axes = specification(grid()).axes[-1]
    labels = [label.get_text() for label in axes.get_yticklabels()]
    assert labels == [
        "log", "raw", "aligned ranks", "trimmed means (F)", "none", "20%", "kept", "pulled in",
    ]  # fmt: skip


def test_the_rows_that_differ_in_their_subjects_say_n():
    both = [row(0.1), row(0.2, missing="available", n=14)]
    figure = specification(grid(both, choices=GridChoices()))
    labels = [label.get_text() for label in figure.axes[-1].get_yticklabels()]
    assert labels == ["complete (n = 12)", "two or more visits (n = 14)"]
    assert "12 to 14 subjects" in figure.axes[-1].get_xlabel()


def test_the_headline_tells_the_joint_p_and_the_median():
    title = specification(grid()).axes[0].get_title(loc="left")
    assert title.startswith("all together: P = 0.025; median P = 0.035")
    assert "diamond: the planned test" in title
    plain = [{**each, "planned": False} for each in ROWS]
    assert "diamond" not in specification(grid(plain)).axes[0].get_title(loc="left")


def test_p_is_never_printed_as_zero():
    title = specification(grid(grid_p=1e-5)).axes[0].get_title(loc="left")
    assert "P < 0.001" in title


def test_the_words_tell_range_n_and_both_scales():
    words = describe_specification(grid())
    assert "4 specifications in the order of their P values, P = 0.010 to 0.200" in words
    assert "Ratio of week 12 to week 0: 0.500 to 0.800 (2 specifications)" in words
    assert "Difference week 12 minus week 0: −3.00 to −3.00 µg/L (1 specification)" in words
    assert "Of 12 subjects." in words


def test_many_specifications_have_dots_that_leave_room():
    many = [row(p) for p in np.linspace(0.001, 0.9, 150)]
    (line,) = [x for x in specification(grid(many)).axes[0].lines if x.get_label() == "_p"]
    assert line.get_markersize() < 2


def test_the_same_figure_gives_the_same_bytes_and_its_labels_are_inside():
    assert figure_bytes(specification(grid())) == figure_bytes(specification(grid()))
    figure = specification(grid())
    figure.draw_without_rendering()
    boxes = [box for axes in figure.axes if (box := axes.get_tightbbox()) is not None]
    assert len(boxes) == 4
    assert min(box.x0 for box in boxes) >= 0
