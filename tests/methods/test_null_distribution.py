"""The null distribution to look at: it is the law behind the p value."""

from __future__ import annotations

import numpy as np
import pytest

from robustrm.errors import ArgumentError
from robustrm.methods.friedman import friedman
from robustrm.methods.null_distribution import null_distribution
from robustrm.methods.page_trend import page_trend
from robustrm.methods.signed_rank import signed_rank
from robustrm.table import OccasionTable

WEEKS = ["week 0", "week 6", "week 12"]


@pytest.fixture
def table() -> OccasionTable:
    rows = [[91, 72, 60], [40, 31, 31], [120, 125, 80], [66, 50, 59], [33, 21, 20], [75, 60, 75]]
    return OccasionTable.from_array(rows, occasions=WEEKS)


def upper(null) -> float:
    return float(null.weights[null.values >= null.observed - 1e-9].sum())


def test_the_upper_tail_of_friedman_is_its_p(table):
    null, result = null_distribution(table, "friedman"), friedman(table)
    assert null.null == "exact"
    assert null.weights.sum() == pytest.approx(1, abs=1e-12)
    assert null.observed == pytest.approx(result.statistic, rel=1e-12)
    assert upper(null) == pytest.approx(result.p_value, rel=1e-12)


def test_friedman_without_ties_is_the_table_of_1937():
    """Friedman (1937) Table V, k = 3, n = 3: P = 0.028 at 6.0, 0.194 at 4.667, 0.361 at 2.667."""
    null = null_distribution(OccasionTable.from_array([[3, 2, 1]] * 3, occasions=WEEKS), "friedman")
    tails = {round(v, 3): float(null.weights[i:].sum()) for i, v in enumerate(null.values)}
    assert {v: round(tails[v], 3) for v in (6.0, 4.667, 2.667)} == {
        6.0: 0.028, 4.667: 0.194, 2.667: 0.361
    }  # fmt: skip


@pytest.mark.parametrize("zeros", ["pratt", "drop"])
def test_signed_rank_tail_and_range(table, zeros):
    null = null_distribution(table, "signed_rank", first="week 0", second="week 12", zeros=zeros)
    result = signed_rank(table, "week 0", "week 12", zeros=zeros, alternative="greater")
    assert null.observed == result.statistic
    assert upper(null) == pytest.approx(result.p_value, rel=1e-12)
    assert null.values[0] == 0
    assert null.values[-1] == result.details["t_plus"] + result.details["t_minus"]


def test_page_tail(table):
    null = null_distribution(table, "page_trend", order=WEEKS)
    result = page_trend(table, order=WEEKS, alternative="greater")
    assert null.observed == result.statistic
    assert upper(null) == pytest.approx(result.p_value, rel=1e-12)


def test_real_scores_are_drawn_and_labelled(table):
    null = null_distribution(table.log(), "mean_permutation", rng=7)
    again = null_distribution(table.log(), "mean_permutation", rng=7)
    assert null.null == "monte carlo"
    np.testing.assert_array_equal(null.values, again.values)
    assert null.weights.sum() == pytest.approx(1)


def test_arrays_cannot_be_written(table):
    null = null_distribution(table, "friedman")
    with pytest.raises(ValueError, match="read-only"):
        null.values[0] = 1


@pytest.mark.parametrize(
    ("method", "options", "text"),
    [
        ("anova", {}, "`method` must be one of"),
        ("signed_rank", {}, "must give first and second"),
        ("page_trend", {}, "must give order"),
        ("friedman", {"zeros": "drop"}, "`options of friedman`"),
    ],
)
def test_refusals(table, method, options, text):
    with pytest.raises(ArgumentError, match=text):
        null_distribution(table, method, **options)
