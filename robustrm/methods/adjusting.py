"""Adjusting p values over a declared family, by a kept library."""

from __future__ import annotations

import math
from collections.abc import Sequence

from robustrm._checks import check_choice
from robustrm.methods.registry import P_ADJUSTMENTS

# our names on the left, those of statsmodels on the right
_NAMES = {
    "bonferroni": "bonferroni",
    "holm": "holm",
    "hochberg": "simes-hochberg",
    "hommel": "hommel",
    "bh": "fdr_bh",
}
TITLES = {
    "none": "unadjusted",
    "bonferroni": "Bonferroni",
    "holm": "Holm",
    "hochberg": "Hochberg",
    "hommel": "Hommel",
    "bh": "Benjamini-Hochberg",
    "closed": "closed permutation testing",
    "single-step": "single-step adjustment",
}


def adjusted(p_values: Sequence[float], method: str) -> list[float]:
    """Return p values adjusted over their family, in the same order.

    Parameters
    ----------
    p_values : sequence of float
        NaN for a comparison that could not be tested: it stays in the family and counts.
    method : {"none", "bonferroni", "holm", "hochberg", "hommel", "bh"}
        ``"bh"`` controls the false discovery rate, the others the familywise error.

    Returns
    -------
    list of float
        NaN where the p value was NaN.

    Examples
    --------
    >>> [round(p, 3) for p in adjusted([0.01, 0.04, math.nan], "holm")]
    [0.03, 0.08, nan]
    """
    check_choice("adjust", method, P_ADJUSTMENTS)
    if method == "none" or not p_values:
        return list(p_values)
    from statsmodels.stats.multitest import multipletests

    # a test that could not run is as unfavourable as one with p = 1, never left out of m
    filled = [1.0 if math.isnan(p) else p for p in p_values]
    result = multipletests(filled, method=_NAMES[method])[1].tolist()
    return [
        math.nan if math.isnan(p) else min(1.0, max(p, q))
        for p, q in zip(p_values, result, strict=True)
    ]
