"""Mid-ranks against an independent library, and what missing cells and tolerances do."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from scipy import stats

from robustrm.kernels.ranks import midranks


@pytest.mark.property
@given(
    hnp.arrays(
        np.float64,
        hnp.array_shapes(min_dims=1, max_dims=3, max_side=6),
        elements=st.sampled_from([-np.inf, -2.5, 0.0, 0.1, 3.0, np.nan]),
    )
)
def test_midranks_equal_those_of_scipy_over_the_observed_cells(values):
    expected = stats.rankdata(values, axis=-1, nan_policy="omit")
    np.testing.assert_array_equal(midranks(values), np.where(np.isnan(values), np.nan, expected))


def test_midranks_of_an_empty_row_are_empty():
    assert midranks(np.empty((2, 0))).shape == (2, 0)


def test_values_within_the_tolerance_are_tied_and_ties_chain():
    row = [0.0, 1e-12, 2e-12, 1.0]
    np.testing.assert_array_equal(midranks(row), [1, 2, 3, 4])
    np.testing.assert_array_equal(midranks(row, tolerance=1.5e-12), [2, 2, 2, 4])


def test_the_input_is_left_alone():
    values = np.array([3.0, 1.0, 2.0])
    midranks(values)
    np.testing.assert_array_equal(values, [3.0, 1.0, 2.0])
