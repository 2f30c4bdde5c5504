"""Shared rearrangements: their p values against the exact ones of the engine.

A Monte Carlo p value is held to the central 1 − 1e-5 of its binomial law around the exact one.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from robustrm.kernels.null.engine import tail
from robustrm.kernels.null.forms import centring
from robustrm.kernels.null.shared import shared_flip_p, shared_permutation_p
from robustrm.kernels.null.tables import permutation_tables, sign_tables
from robustrm.kernels.scores import aligned_scores, mean_scores, rank_scores

DRAWS = 4_999


def assert_drawn(p_values, exact, draws=DRAWS):
    hits = np.asarray(p_values) * (draws + 1) - 1
    low, high = stats.binom.interval(1 - 1e-5, draws, np.asarray(exact))
    assert (low <= np.rint(hits)).all()
    assert (np.rint(hits) <= high).all()


def stacked(n, k, *, seed, decimals=None):
    values = np.random.default_rng(seed).normal(size=(n, k)) + np.linspace(0, 0.8, k)
    values = values if decimals is None else np.round(values, decimals)
    centred = mean_scores(values)
    return np.stack([rank_scores(values), aligned_scores(np.round(centred, 9)), centred])


# n below, at and beside a multiple of the subjects added up beforehand; with ties (decimals 0)
@pytest.mark.parametrize(
    ("n", "k", "decimals"),
    [(2, 3, None), (7, 3, 0), (10, 3, None), (5, 4, 0), (6, 4, 1), (3, 5, 0)],
)
def test_permutation_p_agrees_with_the_exact_one(n, k, decimals):
    scores = stacked(n, k, seed=n * k, decimals=decimals)
    exact = [
        tail(permutation_tables(test), test.sum(axis=0), centring(k), null="exact").p_value
        for test in scores
    ]
    assert_drawn(shared_permutation_p(scores, DRAWS, np.random.default_rng(1)), exact)


@pytest.mark.parametrize("blocks", [[[0, 1], [2], [3]], [[0, 3], [1, 2]], [[0, 1, 3], [2]]])
def test_permutation_p_within_blocks_agrees_with_the_exact_one(blocks):
    scores = stacked(6, 4, seed=3)
    form = centring(4, blocks=blocks)
    exact = [
        tail(permutation_tables(test, blocks=blocks), test.sum(axis=0), form, null="exact").p_value
        for test in scores
    ]
    drawn = shared_permutation_p(scores, DRAWS, np.random.default_rng(2), blocks=blocks)
    assert_drawn(drawn, exact)


@pytest.mark.parametrize(("n", "k"), [(3, 3), (12, 3), (13, 4), (25, 4)])
def test_flip_p_agrees_with_the_exact_one(n, k):
    scores = stacked(n, k, seed=n)
    if n == 25:  # whole scores keep the exact answer affordable
        scores = scores[:1]
    exact = [
        tail(sign_tables(test), test.sum(axis=0), centring(k), null="exact").p_value
        for test in scores
    ]
    assert_drawn(shared_flip_p(scores, DRAWS, np.random.default_rng(3)), exact)


def test_flips_of_one_difference_count_both_tails():
    # Darwin's maize (Fisher 1935, section 21): 1726 of 32768 sign patterns.
    maize = [49, -67, 8, 16, 6, 23, 28, 41, 14, 29, 56, 24, 75, 60, -48]
    scores = np.array(maize, dtype=float)[None, :, None]
    assert_drawn(shared_flip_p(scores, DRAWS, np.random.default_rng(4)), [1726 / 32768])


@pytest.mark.parametrize("function", [shared_permutation_p, shared_flip_p])
def test_neither_the_block_nor_the_other_tests_change_a_p_value(function):
    scores = stacked(11, 4, seed=5)
    whole = function(scores, 999, np.random.default_rng(6))
    for block in (1, 7, 998, 5_000):
        cut = function(scores, 999, np.random.default_rng(6), block=block)
        np.testing.assert_array_equal(cut, whole)
    alone = [function(test[None], 999, np.random.default_rng(6))[0] for test in scores]
    np.testing.assert_array_equal(alone, whole)


@pytest.mark.parametrize("function", [shared_permutation_p, shared_flip_p])
def test_a_generator_goes_on(function):
    scores, rng = stacked(8, 3, seed=7), np.random.default_rng(8)
    assert (function(scores, 999, rng) != function(scores, 999, rng)).any()


@pytest.mark.parametrize("function", [shared_permutation_p, shared_flip_p])
def test_equal_statistics_count_whatever_their_rounding(function):
    # The sums of 0.1, 0.2 and 0.3 are zero to rounding only (T = 1e-32), so p is 1.
    balanced = np.array([[0.1, 0.2, -0.3], [-0.3, 0.1, 0.2], [0.2, -0.3, 0.1]])
    constant = np.zeros((3, 3))
    assert function(np.stack([balanced, constant]), 99, np.random.default_rng(1)).tolist() == [1, 1]


def test_the_smallest_p_is_one_over_draws_plus_one():
    # Phipson & Smyth (2010). Thirty subjects who rank alike: no draw of 99 comes near.
    alike = np.tile([-2.0, 0.0, 2.0], (1, 30, 1))
    assert shared_permutation_p(alike, 99, np.random.default_rng(1)).tolist() == [1 / 100]
    assert shared_flip_p(alike, 99, np.random.default_rng(1)).tolist() == [1 / 100]


def test_shared_p_values_are_level_on_an_orbit():
    # Drawn from its own orbit, a data set has P(p <= a) <= a at a = .05, .1, .2, at 5 SE.
    rng = np.random.default_rng(9)
    values = np.round(rng.normal(size=(5, 3)), 0)
    orders = rng.permuted(np.broadcast_to(values, (2_000, 5, 3)), axis=-1)
    p_values = np.array([shared_permutation_p(rank_scores(y)[None], 99, rng)[0] for y in orders])
    for a in (0.05, 0.1, 0.2):
        assert (p_values <= a).mean() <= a + 5 * np.sqrt(a * (1 - a) / len(p_values))
