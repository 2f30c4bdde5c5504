"""Habits that advice is measured against: choosing by a test of normality, or by the smallest p.

Both look at the answer, or at something that hangs together with it, before the test is chosen.
They are simulated to show what that does, and offered nowhere.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

PRETEST = "normality pretest, then F or Friedman"
SMALLEST = "smallest p of five"
# What somebody who tries several tests would try.
TRIED = ("anova, raw", "anova, log", "friedman", "aligned_ranks", "trimmed_anova")
PRETEST_ALPHA = 0.05


def pretest_p(values: Floats, f_p: Floats, friedman_p: Floats) -> Floats:
    """Return the p of F where the residuals pass Shapiro-Wilk, else Friedman's; values (B, n, k).

    The residuals are those of the within-subject model; the test takes them as independent, as the
    habit does. Shapiro & Wilk (1965) Biometrika 52:591-611, by SciPy.
    """
    from scipy import stats

    centred = values - values.mean(axis=-1, keepdims=True)
    residuals = (centred - centred.mean(axis=-2, keepdims=True)).reshape(len(values), -1)
    normality = np.array([stats.shapiro(row).pvalue for row in residuals])
    return np.where(normality > PRETEST_ALPHA, f_p, friedman_p)


def smallest_p(found: Mapping[str, Floats]) -> Floats:
    """Return the smallest p of the tests that were tried, as if it were one test."""
    return np.asarray(np.min([found[test] for test in TRIED if test in found], axis=0))
