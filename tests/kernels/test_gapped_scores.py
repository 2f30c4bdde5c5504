"""Scores with missing visits: those without gaps in proportion, and by hand with one."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from robustrm.kernels import gapped_scores, scores
from robustrm.kernels.location import cut

NAN = np.nan
FULL = np.random.default_rng(1).normal(size=(7, 4))
TABLE = np.array([[1.0, 4.0, NAN], [2.0, 2.0, 5.0], [NAN, 8.0, 2.0]])


@pytest.mark.parametrize(
    ("gapped", "whole"),
    [
        (gapped_scores.mean_scores(FULL), scores.mean_scores(FULL)),
        (gapped_scores.normal_scores(FULL), scores.normal_scores(FULL)),
        (
            gapped_scores.aligned_scores(gapped_scores.centred(FULL)) * 8,
            scores.aligned_scores(scores.mean_scores(FULL)),
        ),
        (
            gapped_scores.winsorized_scores(gapped_scores.centred(FULL), 0.1) * 4,
            scores.winsorized_scores(scores.mean_scores(FULL), 0.1),
        ),
    ],
    ids=["means", "normal scores", "aligned ranks", "Winsorized"],
)
def test_without_gaps_they_are_the_usual_scores(gapped, whole):
    np.testing.assert_allclose(gapped, whole, atol=1e-12)


def test_means_are_those_of_the_cells_that_are_there():
    expected = [[-1.5, 1.5, 0.0], [-1.0, -1.0, 2.0], [0.0, 3.0, -3.0]]  # by hand
    np.testing.assert_array_equal(gapped_scores.mean_scores(TABLE), expected)


def test_aligned_ranks_leave_the_missing_cells_out():
    # by hand: -3, -1.5, -1, -1, 1.5, 2, 3 have the ranks 1, 2, 3.5, 3.5, 5, 6, 7
    ranks = np.array([[2, 5, NAN], [3.5, 3.5, 6], [NAN, 7, 1]])
    expected = np.nan_to_num(ranks - np.nanmean(ranks, axis=1, keepdims=True))
    found = gapped_scores.aligned_scores(gapped_scores.centred(TABLE))
    np.testing.assert_allclose(found, expected)


def test_normal_scores_go_by_the_number_of_cells_of_the_row():
    found = gapped_scores.normal_scores(TABLE)
    low, high = stats.norm.ppf(1 / 3), stats.norm.ppf(2 / 3)
    np.testing.assert_allclose(found[0], [low, high, 0], atol=1e-12)


def test_the_clip_points_pull_in_a_share_of_the_cells_that_are_there():
    c = gapped_scores.centred(TABLE)
    assert cut(7, 0.2) == 1
    assert gapped_scores.clip_points(c, 0.2) == (-1.5, 2.0)
    found = gapped_scores.winsorized_scores(c, 0.2)
    np.testing.assert_allclose(found[2], [0.0, 1.75, -1.75])
    np.testing.assert_allclose(found.sum(axis=1), 0, atol=1e-12)
