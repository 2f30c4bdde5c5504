"""Adjusting p values over a declared family, by a kept library and Holm's own formula."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from robustrm._checks import check_choice
from robustrm.methods.registry import P_ADJUSTMENTS

# our names on the left, those of statsmodels on the right
_NAMES = {
    "bonferroni": "bonferroni",
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
    # a test that could not run is as unfavourable as one with p = 1, never left out of m
    filled = [1.0 if math.isnan(p) else p for p in p_values]
    result = _holm(filled) if method == "holm" else _by_library(filled, method)
    return [
        math.nan if math.isnan(p) else min(1.0, max(p, q))
        for p, q in zip(p_values, result, strict=True)
    ]


def _by_library(p_values: list[float], method: str) -> list[float]:
    from statsmodels.stats.multitest import multipletests

    result: list[float] = multipletests(p_values, method=_NAMES[method])[1].tolist()
    return result


def _holm(p_values: list[float]) -> list[float]:
    """Return p values adjusted after Holm (1979): the largest so far of (m − i + 1) p_(i).

    Written here because the library collects garbage in every call by this method, which takes
    longer than all else where a family is made again for every subject left out.
    """
    p = np.array(p_values)
    order = np.argsort(p, kind="stable")
    steps = np.maximum.accumulate(p[order] * np.arange(p.size, 0, -1))
    result = np.empty_like(p)
    result[order] = np.minimum(steps, 1.0)
    return [float(value) for value in result]
