"""The picture of a null distribution."""

from __future__ import annotations

import numpy as np
import pytest

from robustrm.figures import null_law
from robustrm.methods.null_distribution import NullDistribution, null_distribution
from robustrm.table import OccasionTable

pytestmark = pytest.mark.figure


@pytest.fixture
def agreeing() -> OccasionTable:
    rows = [[9, 7, 6], [4, 3, 2], [12, 8, 5], [7, 5, 4]]
    return OccasionTable.from_array(rows, occasions=["week 0", "week 6", "week 12"])


def filled(axes) -> float:
    """Return the height of the columns at or above the observed value."""
    return sum(bar.get_height() for bar in axes.containers[1])


def test_columns_are_the_law_and_the_filled_part_is_the_tail(agreeing):
    null = null_distribution(agreeing, "friedman")
    axes = null_law(null)
    heights = sorted(bar.get_height() for group in axes.containers for bar in group)
    np.testing.assert_allclose(heights, sorted(null.weights), rtol=1e-12)
    # Friedman (1937), k = 3, n = 4: P = 0.0046 at 8.0
    assert filled(axes) == pytest.approx(6 / 6**4)


def test_classes_keep_the_tail_of_many_values():
    rng = np.random.default_rng(4)
    values = np.sort(rng.gamma(2.0, size=5000))
    null = NullDistribution(
        "mean_permutation", "F", values, np.full(5000, 1 / 5000), float(values[4800]), "monte carlo"
    )
    axes = null_law(null)
    assert filled(axes) == pytest.approx((values >= null.observed).mean())
    assert sum(b.get_height() for g in axes.containers for b in g) == pytest.approx(1)


def test_the_observed_value_is_marked_and_in_view(agreeing):
    axes = null_law(null_distribution(agreeing, "friedman"))
    marked = [line for line in axes.lines if line.get_linestyle() == "--"]
    assert [set(np.asarray(line.get_xdata()).tolist()) for line in marked] == [{8.0}]
    low, high = axes.get_xlim()
    assert low < 8.0 < high


def test_the_axis_says_how_the_law_was_found(agreeing):
    exact = null_law(null_distribution(agreeing, "friedman"))
    drawn = null_law(null_distribution(agreeing.log(), "mean_permutation", rng=1))
    assert exact.get_ylabel() == "probability (exact)"
    assert "9,999 arrangements" in drawn.get_ylabel()


def test_one_value_can_be_drawn():
    tied = OccasionTable.from_array([[1, 1, 1], [2, 2, 2]], occasions=["a", "b", "c"])
    assert null_law(null_distribution(tied, "friedman")).get_xlabel()
