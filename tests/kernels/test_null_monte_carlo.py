"""Monte Carlo draws: their law, their independence of the block size, their stages and memory."""

from __future__ import annotations

import math
import tracemalloc
from typing import Any

import numpy as np
import pytest
from scipy import stats

from robustrm.kernels.null.engine import draws, law, tail
from robustrm.kernels.null.forms import centring, linear
from robustrm.kernels.null.monte_carlo import Hits
from robustrm.kernels.null.tables import (
    permutation_table,
    permutation_tables,
    score_table,
    sign_tables,
)


def rank_tables(n, k):
    return permutation_tables(np.tile(np.arange(1.0, k + 1), (n, 1)))


def assert_same_law(drawn, null):
    """Chi-square goodness of fit at 1e-4, cells with an expectation below 5 joined."""
    counts = np.array([(np.abs(drawn - value) < null.slack).sum() for value in null.values])
    assert counts.sum() == len(drawn)
    expected = null.probabilities * len(drawn)
    small = expected < 5
    counts = np.r_[counts[~small], counts[small].sum()]
    expected = np.r_[expected[~small], expected[small].sum()]
    kept = expected > 0
    assert stats.chisquare(counts[kept], expected[kept]).pvalue > 1e-4


@pytest.mark.parametrize(
    ("tables", "form"),
    [
        (rank_tables(5, 3), centring(3)),
        (rank_tables(30, 3), centring(3)),
        (rank_tables(4, 5), centring(5)),
        (sign_tables(np.arange(1.0, 13)), linear(1)),
        ([score_table([[0.0], [1.0], [5.0]], [1, 2, 7])] * 9, linear(1)),
        # Eight occasions are shuffled, not listed.
        (rank_tables(2, 8), linear(np.arange(8.0))),
        # One shuffled row with a missing cell, one with a fixed cell, beside a listed one.
        (
            [
                permutation_table(np.r_[np.nan, 1.0:9.0], observed=np.arange(9) > 0),
                permutation_table(np.arange(9.0), blocks=[[0], [1, 2, 3, 4, 5, 6, 7, 8]]),
                permutation_table(np.arange(9.0), blocks=[[0, 1, 2, 3], [4, 5, 6, 7, 8]]),
            ],
            linear([3, 0, 1, 1, 2, 0, 0, 5, 1]),
        ),
    ],
)
def test_draws_follow_the_exact_law(tables, form):
    null = law(tables, form)
    assert_same_law(draws(tables, form, 40_000, rng=20_240), null)


def test_shuffled_rows_stay_within_their_groups():
    row = np.array([5.0, 1, 2, 3, 4, 6, 7, 8, 9])
    table = permutation_table(row, blocks=[[0, 2], [1, 3, 4, 5, 6, 7, 8]])
    block = linear([1, 0, 1, 0, 0, 0, 0, 0, 0])
    large = permutation_table(np.arange(9.0))
    form = linear(np.ones(9))
    assert set(draws([table], block, 200, rng=1)) == {7.0}
    assert set(draws([large, table], form, 200, rng=1)) == {36.0 + 45.0}


@pytest.mark.parametrize("tables", [rank_tables(30, 3), rank_tables(7, 8)])
def test_the_block_size_changes_no_draw(tables):
    form = centring(len(tables[0].scores))
    whole = draws(tables, form, 5_000, rng=3)
    for block in (1, 7, 999, 10_000):
        np.testing.assert_array_equal(draws(tables, form, 5_000, rng=3, block=block), whole)


def test_stages_continue_one_stream():
    scores = np.random.default_rng(5).normal(size=(20, 4))
    tables, observed = permutation_tables(scores), scores.sum(axis=0)

    def drawn(**options: Any):
        return tail(tables, observed, centring(4), null="monte carlo", rng=8, **options)

    p_value = drawn(draws=99_999).p_value
    staged = drawn(stages=(999, 99_999), thresholds=(p_value,))
    assert (staged.draws, staged.p_value) == (99_999, p_value)
    assert drawn(stages=(999, 99_999), thresholds=(1e-9,)).draws == 999


def test_monte_carlo_interval_covers_the_exact_p():
    scores = np.random.default_rng(6).normal(size=(9, 3))
    tables, observed = permutation_tables(scores), scores.sum(axis=0)
    exact = tail(tables, observed, centring(3))
    drawn = tail(tables, observed, centring(3), null="monte carlo", draws=20_000, rng=1)
    assert (exact.null, drawn.null, drawn.how) == ("exact", "monte carlo", "monte carlo")
    assert drawn.p_interval is not None
    assert drawn.p_interval[0] <= exact.p_value <= drawn.p_interval[1]
    assert drawn.log_p == pytest.approx(math.log(drawn.p_value))
    assert drawn.arrangements == exact.arrangements == 6**9


@pytest.mark.parametrize("side", ["greater", "less", "two-sided"])
def test_linear_monte_carlo_counts_the_named_tail(side):
    rows = np.array([[1.0, 2.0, 4.0]] * 5)
    tables, form = permutation_tables(rows), linear([1.0, 2.0, 9.0], side=side)
    observed = np.array([14.0, 8.0, 13.0])
    exact = tail(tables, observed, form)
    drawn = tail(tables, observed, form, null="monte carlo", draws=30_000, rng=2)
    assert drawn.p_interval is not None
    assert drawn.p_interval[0] <= exact.p_value <= drawn.p_interval[1]


def test_hits_use_the_add_one_estimate_and_double_the_smaller_tail():
    # Phipson & Smyth (2010): (b + 1) / (B + 1); by hand.
    assert Hits(0, 999, 999, 1).p_value == 1 / 1000
    assert Hits(40, 970, 999, 2).p_value == 2 * 41 / 1000
    assert Hits(600, 500, 999, 2).p_value == 1.0
    # Clopper-Pearson with no hit in 999: 1 - 0.005^(1/999).
    low, high = Hits(0, 999, 999, 1).interval(0.99)
    assert low == 0.0
    assert high == pytest.approx(1 - 0.005 ** (1 / 999))


def test_progress_is_told_after_every_block():
    seen = []
    tail(
        rank_tables(5, 3),
        [5.0, 10.0, 15.0],
        centring(3),
        null="monte carlo",
        draws=100,
        block=40,
        rng=1,
        progress=lambda done, total: seen.append((done, total)),
    )
    assert seen == [(40, 100), (80, 100), (100, 100)]


def test_thirty_three_subjects_and_eight_occasions_are_drawn():
    tables = rank_tables(33, 8)
    result = tail(tables, np.arange(1.0, 9) * 4 + 130.5, centring(8), draws=2_000, rng=1)
    assert (result.null, result.draws) == ("monte carlo", 2_000)
    assert result.arrangements == math.factorial(8) ** 33
    # chi-square approximation on 7 df (Friedman 1937): the statistic is 12 T / (n k (k + 1)).
    statistic = 12 * 16 * 42 / (33 * 8 * 9)
    assert result.p_value == pytest.approx(stats.chi2.sf(statistic, 7), abs=0.04)


@pytest.mark.slow
def test_a_million_draws_stay_below_200_megabytes():
    scores = np.random.default_rng(7).normal(size=(30, 5))
    tables = permutation_tables(scores)
    tracemalloc.start()
    try:
        tail(tables, scores.sum(axis=0), centring(5), null="monte carlo", draws=1_000_000, rng=1)
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert peak < 200e6
