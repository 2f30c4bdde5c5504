"""Batched adjustment against statsmodels, family by family."""

from __future__ import annotations

import numpy as np
import pytest
from statsmodels.stats.multitest import multipletests

from robustrm.kernels.step_adjustment import step_adjusted

THEIRS = {
    "bonferroni": "bonferroni",
    "holm": "holm",
    "hochberg": "simes-hochberg",
    "hommel": "hommel",
    "bh": "fdr_bh",
}


@pytest.mark.reference
@pytest.mark.parametrize("method", THEIRS)
@pytest.mark.parametrize("m", [1, 2, 3, 6])
def test_each_family_is_adjusted_as_statsmodels_does(method: str, m: int):
    rng = np.random.default_rng(3)
    p = rng.random((40, 2, m)) ** 3
    p[:10] = np.round(p[:10], 1)  # ties, zeros and ones
    found = step_adjusted(p, method).reshape(-1, m)
    expected = [multipletests(row, method=THEIRS[method])[1] for row in p.reshape(-1, m)]
    np.testing.assert_allclose(found, expected, atol=1e-12)


def test_none_leaves_them_as_they_are():
    p = np.array([0.2, 0.01])
    assert step_adjusted(p, "none") is p
