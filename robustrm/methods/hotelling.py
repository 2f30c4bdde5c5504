"""Hotelling's T²: the parametric test that does not ask for sphericity."""

from __future__ import annotations

import math
import sys

import numpy as np

from robustrm.errors import TooFewError
from robustrm.kernels import hotelling as kernel
from robustrm.kernels.anova import f_tail
from robustrm.results import Note, TestResult
from robustrm.table import OccasionTable
from robustrm.ties import power_of_two


def hotelling(table: OccasionTable, *, substitute: str = "half") -> TestResult:
    """Compare occasion means by Hotelling's T² test of their contrasts.

    Parameters
    ----------
    table : OccasionTable
        The rows complete on all occasions are used, on the table's scale.
    substitute : {"half", "root2", "limit"}, default "half"
        What enters for a value below the limit.

    Returns
    -------
    TestResult
        Statistic F on k − 1 and n − k + 1 degrees of freedom. ``details`` holds
        ``t_squared``.

    Raises
    ------
    TooFewError
        With fewer complete subjects than occasions.

    See Also
    --------
    anova : One covariance structure assumed and corrected for; more power with few subjects.
    row_flip : Any covariance too, without the normal model.

    Notes
    -----
    T² = n m'S⁻¹m, with m and S the mean and covariance of k − 1 contrasts of the occasions;
    any full set of contrasts gives the same value. F = (n − k + 1)/((n − 1)(k − 1)) · T². With
    two occasions F is the square of the paired t.

    The model asks for normal contrasts, with any covariance. That covariance is estimated, so
    with n barely above k the test has hardly any power: with n = k a single denominator degree
    of freedom is left. Outliers act on it as on means. When the contrasts' covariance is
    singular (some contrast is the same for all subjects), T² is not defined.

    References
    ----------
    .. [1] Hotelling, H. (1931). The generalization of Student's ratio. Annals of Mathematical
       Statistics 2, 360-378.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[9.1, 7.2, 6.0], [4.0, 3.1, 2.5], [12.0, 12.5, 8.0], [6.6, 5.0, 5.9]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ... )
    >>> result = hotelling(table)
    >>> round(result.statistic, 3), result.df, round(result.p_value, 3)
    (9.46, (2.0, 2.0), 0.096)
    """
    used = table.comparable().substitute(substitute)
    n, k = used.values.shape
    if n < k:
        raise TooFewError(
            f"Hotelling's T² test needs at least {k} subjects with all {k} occasions, as many as "
            f"occasions, got {n}."
        )
    # T² does not depend on the unit
    t2 = float(kernel.t_squared(used.values / power_of_two(used.values)))
    f = float(kernel.to_f(np.asarray(t2), n, k))
    df = (float(k - 1), float(n - k + 1))
    defined = math.isfinite(f)
    # an underflow is not an impossibility
    p = max(float(f_tail(np.asarray(f), *df)), sys.float_info.min) if defined else math.nan
    return TestResult(
        method="hotelling",
        statistic=f,
        statistic_name="F",
        df=df,
        p_value=p,
        null="parametric",
        n_subjects=n,
        n_occasions=k,
        hypothesis=(
            "The occasions have equal means of the "
            f"{'logarithms' if used.scale == 'log' else 'values'}."
        ),
        estimand="geometric means" if used.scale == "log" else "arithmetic means",
        scale=used.scale,
        subjects=used.ids,
        notes=() if defined else (_SINGULAR,),
        details={"t_squared": t2},
    )


_SINGULAR = Note(
    "zero variance",
    "Some contrast of the occasions is the same for all subjects, so its variance is zero and "
    "T² is not defined.",
    "No p value is given.",
)
