"""Ratios of all subjects between the limits of usual variation, read from the artists."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest

import robustrm as rm
from robustrm.figures import describe_individual_changes, figure_bytes, individual_changes

pytestmark = pytest.mark.figure
LOW, HIGH = rm.reference_change(0.42, 0.05)


def changes_of(values: Any, **options: Any) -> rm.ReferenceChanges:
    cells = np.asarray(values, dtype=float)
    table = rm.OccasionTable.from_array(
        cells,
        occasions=["week 0", "week 6", "week 12"][: cells.shape[1]],
        subjects=[f"Person-{i}" for i in range(cells.shape[0])],
        below=cells == 0.5,
        lower_limit=0.5,
        marker="ferritin",
    )
    given = {"cv_within": 0.42, "cv_assay": 0.05, "source": "invented", **options}
    return rm.reference_changes(table, **given)


@pytest.fixture
def changes() -> rm.ReferenceChanges:
    """Ratios 2, 8, 1/4 measured; at most 1/2 and 1/8; at least 1.2 and 4; one not known."""
    return changes_of(
        [
            [2.0, 4.0],
            [1.0, 8.0],
            [4.0, 1.0],
            [1.0, 0.5],
            [4.0, 0.5],
            [0.5, 0.6],
            [0.5, 2.0],
            [0.5, 0.5],
            [1.0, math.nan],
        ]
    )


def drawn(axes: Any) -> dict[str, list[float]]:
    return {line.get_label(): np.round(line.get_ydata(), 9).tolist() for line in point_lines(axes)}


def point_lines(axes: Any) -> list[Any]:
    return [line for line in axes.lines if not line.get_label().startswith("_")]


def test_every_ratio_is_drawn_with_what_is_known_of_it(changes):
    axes = individual_changes(changes, "week 0", "week 6")
    assert drawn(axes) == {
        "within the limits": [2.0],
        "outside": [0.25, 8.0],
        "at most this": [0.5],
        "at least this": [1.2],
        "outside, at most this": [0.125],
        "outside, at least this": [4.0],
    }
    assert axes.get_yscale() == "log"


def test_subjects_stand_from_the_smallest_to_the_largest_ratio(changes):
    axes = individual_changes(changes, "week 0", "week 6")
    points = np.concatenate([line.get_xydata() for line in point_lines(axes)])
    assert np.all(np.diff(points[np.argsort(points[:, 0]), 1]) > 0)
    assert len(set(points[:, 0])) == 7


def test_the_limits_are_lines_with_their_values_and_counts(changes):
    axes = individual_changes(changes, "week 0", "week 6")
    limits = [line for line in axes.lines if line.get_label() == "_limit"]
    lines = [float(np.asarray(line.get_ydata())[0]) for line in limits]
    assert lines == pytest.approx([HIGH, LOW])
    assert [text.get_text() for text in axes.texts] == [
        "2 above\n3.08",
        "0.324\n2 below",
        "1 within",
    ]
    bottom, top = axes.get_ylim()
    assert bottom < 0.125
    assert top > 8


def test_who_is_not_drawn_is_counted_below(changes):
    axes = individual_changes(changes, "week 0", "week 6")
    assert axes.get_xticklabels()[0].get_text() == (
        "subjects, n = 8\n3 not known, a value beyond a limit of detection"
    )
    assert axes.get_ylabel() == "ferritin\nweek 6 / week 0 (log axis)"


def test_no_identifier_is_in_the_picture_or_its_words(changes):
    axes = individual_changes(changes, "week 0", "week 6")
    figure = axes.get_figure(root=True)
    assert figure is not None
    assert b"Person" not in figure_bytes(figure, "svg")
    assert "Person" not in describe_individual_changes(changes, "week 0", "week 6")


def test_the_picture_in_words(changes):
    assert describe_individual_changes(changes, "week 0", "week 6") == (
        "Ratios of ferritin, week 6 / week 0, of 8 subjects on a log axis, with the limits of "
        "usual variation of one person, 0.324 and 3.08 (95%): 2 below the lower limit, 1 within "
        "the limits, 2 above the upper limit and 3 not known, a value beyond a limit of detection."
    )


def test_each_contrast_has_its_own_picture():
    found = changes_of([[1.0, 2.0, 4.0], [1.0, 1.0, 1.0]])
    assert drawn(individual_changes(found, "week 0", "week 6")) == {"within the limits": [1.0, 2.0]}
    later = drawn(individual_changes(found, "week 0", "week 12"))
    assert later == {"within the limits": [1.0], "outside": [4.0]}


def test_a_contrast_that_was_not_planned_is_refused():
    found = changes_of([[1.0, 2.0, 4.0]])
    with pytest.raises(rm.ArgumentError, match="must name one of 'week 6 / week 0'"):
        individual_changes(found, "week 6", "week 12")


def test_nobody_can_be_drawn():
    found = changes_of([[1.0, math.nan], [0.5, 0.5]])
    axes = individual_changes(found, "week 0", "week 6")
    assert drawn(axes) == {}
    assert axes.get_xticklabels()[0].get_text().startswith("subjects, n = 1\n1 not known")
    assert "0.324 and 3.08 (95%): 1 not known" in describe_individual_changes(
        found, "week 0", "week 6"
    )


def test_axes_that_are_given_are_drawn_on(changes):
    from matplotlib.figure import Figure

    axes = Figure().add_subplot()
    assert individual_changes(changes, "week 0", "week 6", ax=axes) is axes
