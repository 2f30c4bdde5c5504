"""The set of figures of a report, with titles and alternative texts."""

from __future__ import annotations

import math
import re

import pytest

from robustrm.analysis import analyze
from robustrm.figures import (
    describe_changes,
    describe_comparisons,
    describe_trajectories,
    pictures,
)
from robustrm.methods.summary import summarize
from robustrm.plan import Plan
from robustrm.table import OccasionTable

pytestmark = pytest.mark.figure


@pytest.fixture
def drawn(table: OccasionTable):
    return pictures(analyze(table, Plan(seed=1)))


def test_the_set_is_trajectories_each_comparison_and_all_together(drawn):
    names = [picture.name for picture in drawn]
    assert names == [
        "trajectories", "change-1", "change-2", "comparisons", "methods-1", "methods-2",
        "null-distribution",
    ]  # fmt: skip
    assert len({picture.title for picture in drawn}) == len(drawn)


def test_names_are_safe_for_files(drawn):
    assert all(re.fullmatch("[a-z0-9-]+", picture.name) for picture in drawn)


def test_every_alternative_text_states_n_and_names_nobody(drawn, table):
    for picture in drawn:
        assert re.search(r"n = \d|\d subjects?", picture.alt)
        assert "\n" not in picture.alt
        for subject in table.subjects:
            assert subject not in picture.alt + picture.title


def test_axes_follow_the_scale_of_the_analysis(table):
    scales = {}
    for kind in ("concentration", "score"):
        first, *_ = pictures(analyze(table, Plan(seed=1, marker_kind=kind)))
        scales[kind] = first.figure.axes[0].get_yscale()
    assert scales == {"concentration": "log", "score": "linear"}


def test_a_picture_can_be_saved(drawn):
    assert drawn[0].to_bytes().startswith(b"<?xml")
    assert drawn[0].to_bytes("png").startswith(b"\x89PNG")


def test_a_comparison_without_subjects_has_no_panel_of_its_own():
    table = OccasionTable.from_array(
        [[2.0, 3.0, math.nan], [4.0, 3.0, math.nan]], occasions=["a", "b", "c"]
    )
    names = [picture.name for picture in pictures(analyze(table, Plan(seed=1)))]
    assert names == ["trajectories", "change-1", "comparisons", "methods-1"]


def test_the_trajectories_in_words(table):
    words = describe_trajectories(table, summarize(table))
    assert "5 subjects" in words
    assert "week 0: median 6.00, n = 5" in words
    assert "n = 4, 1 below a limit" in words
    assert "2 missing values left a gap" in words


def test_the_changes_in_words(table, make_comparison):
    assert describe_changes(table, make_comparison()) == (
        "Changes of ferritin from week 0 to week 6 in 4 subjects: 2 fell, 1 rose and 1 did not "
        "change. Estimate: shift 0.700 (93.8% interval 0.400 to 1.10). 1 change only bounded: "
        "open symbols."
    )


def test_unknown_changes_in_words(table, make_comparison):
    pair = make_comparison("week 6", "week 12", subjects=("Ann", "Ben", "Eve"), value=None)
    words = describe_changes(table, pair)
    assert "in 3 subjects: 2 fell and 1 unknown, both values beyond the limit." in words
    assert "Estimate: not estimable." in words


def test_the_comparisons_in_words(make_family, make_comparison):
    family = make_family(
        make_comparison(p=1e-7),
        make_comparison(second="week 12", interval=None, p=math.nan),
        intervals="simultaneous",
    )
    assert describe_comparisons(family) == (
        "Estimates of 2 comparisons with simultaneous intervals (95% together) and P values "
        "(Holm). week 6 vs week 0: n = 4, shift 0.700 (93.8% interval 0.400 to 1.10), P < 0.001; "
        "week 12 vs week 0: n = 4, shift 0.700, interval not estimable, not tested."
    )
