"""Within-subject analysis of variance: the parametric result, shown beside."""

from __future__ import annotations

import math
import sys
from typing import Any

import numpy as np

from robustrm._format import fixed, number, p_phrase
from robustrm.errors import TooFewError
from robustrm.kernels import anova as kernel
from robustrm.results import Note, TestResult
from robustrm.table import OccasionTable
from robustrm.ties import Floats, power_of_two


def anova(table: OccasionTable, *, substitute: str = "half") -> TestResult:
    """Compare occasion means by within-subject analysis of variance.

    The reported p value carries the Greenhouse-Geisser correction whatever Mauchly's test
    says: a pretest decides nothing here.

    Parameters
    ----------
    table : OccasionTable
        The rows complete on all occasions are used, on the table's scale.
    substitute : {"half", "root2", "limit"}, default "half"
        What enters for a value below the limit.

    Returns
    -------
    TestResult
        ``df`` are the corrected degrees of freedom. ``details`` holds ``f_df`` (uncorrected),
        ``p_uncorrected``, ``epsilon_gg``, ``epsilon_hf``, ``epsilon_lower``, ``p_gg``,
        ``p_hf``, ``p_lower``, ``mauchly_w``, ``mauchly_chi2``, ``mauchly_df``, ``mauchly_p``,
        ``ss_occasion``, ``ss_subject``, ``ss_error``, ``eta2_partial``, ``eta2_generalized``.

    Raises
    ------
    TooFewError
        With fewer than two complete subjects.

    See Also
    --------
    friedman : The same question by ranks within subjects.

    Notes
    -----
    F has k − 1 and (n − 1)(k − 1) degrees of freedom, multiplied by epsilon. The model asks
    for normal residuals with equal variances of all differences; on the raw scale of a skewed
    marker the test mostly loses power, and its estimand is the arithmetic mean. Mauchly's W
    is not defined when n − 1 < k − 1 and says little in small samples. Generalized eta squared
    counts the variation between subjects in its denominator (one group, one within factor:
    Olejnik & Algina 2003), partial eta squared does not.

    References
    ----------
    .. [1] Greenhouse, S. W. and Geisser, S. (1959). On methods in the analysis of profile
       data. Psychometrika 24, 95-112.
    .. [2] Huynh, H. and Feldt, L. S. (1976). Estimation of the Box correction for degrees of
       freedom from sample data. Journal of Educational Statistics 1, 69-82.
    .. [3] Mauchly, J. W. (1940). Significance test for sphericity of a normal n-variate
       distribution. Annals of Mathematical Statistics 11, 204-209.
    .. [4] Olejnik, S. and Algina, J. (2003). Generalized eta and omega squared statistics.
       Psychological Methods 8, 434-447.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[9.1, 7.2, 6.0], [4.0, 3.1, 2.5], [12.0, 12.5, 8.0], [6.6, 5.0, 5.9]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ... )
    >>> result = anova(table)
    >>> round(result.statistic, 3), round(result.details["epsilon_gg"], 3)
    (3.815, 0.583)
    """
    used = table.comparable().substitute(substitute)
    n, k = used.values.shape
    if n < 2:
        raise TooFewError(
            f"The analysis of variance needs at least 2 subjects with all {k} occasions, got {n}."
        )
    details, notes = _table(used.values)
    f, epsilon = details["f"], details["epsilon_gg"]
    sphericity = _sphericity_note(details)
    return TestResult(
        method="anova",
        statistic=f,
        statistic_name="F",
        df=(epsilon * (k - 1), epsilon * (n - 1) * (k - 1)),
        p_value=details["p_gg"],
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
        notes=(*notes, *sphericity),
        details={name: value for name, value in details.items() if name != "f"},
    )


def _table(y: Floats) -> tuple[dict[str, Any], list[Note]]:
    n, k = y.shape
    size = power_of_two(y)  # F, epsilon and W do not depend on it
    y = y / size
    squares = kernel.sums_of_squares(y)
    occasion, subject, error = (
        float(part) for part in (squares.occasion, squares.subject, squares.error)
    )
    covariance = kernel.contrast_covariance(y)
    notes = []
    f = float(squares.f_ratio(n, k))
    rounding = n * k * (4 * np.finfo(float).eps * float(np.max(np.abs(y)))) ** 2
    if error <= rounding:
        f = math.nan
        notes.append(
            Note(
                "no residual variation",
                "All subjects change by the same amounts, so F is not defined.",
                "No p value is given.",
            )
        )
    box = float(kernel.epsilon_greenhouse_geisser(covariance)) if math.isfinite(f) else math.nan
    epsilons = {
        "gg": box,
        "hf": float(kernel.epsilon_huynh_feldt(np.asarray(box), k, n - 1)),
        "lower": 1 / (k - 1),
    }
    w, chi2, p, df = kernel.mauchly(covariance, n - 1)
    return {
        "f": f,
        "f_df": (k - 1, (n - 1) * (k - 1)),
        "p_uncorrected": _tail(f, 1.0, n, k),
        **{f"epsilon_{name}": value for name, value in epsilons.items()},
        **{f"p_{name}": _tail(f, value, n, k) for name, value in epsilons.items()},
        "mauchly_w": float(w),
        "mauchly_chi2": float(chi2),
        "mauchly_df": df,
        "mauchly_p": float(p),
        "ss_occasion": occasion * size * size,
        "ss_subject": subject * size * size,
        "ss_error": error * size * size,
        "eta2_partial": _share(occasion, occasion + error, rounding),
        "eta2_generalized": _share(occasion, occasion + subject + error, rounding),
    }, notes


def _tail(f: float, epsilon: float, n: int, k: int) -> float:
    if math.isnan(f) or math.isnan(epsilon):
        return math.nan
    tail = float(kernel.f_tail(np.asarray(f), epsilon * (k - 1), epsilon * (n - 1) * (k - 1)))
    return max(tail, sys.float_info.min)  # an underflow is not an impossibility


def _share(part: float, whole: float, rounding: float) -> float:
    return part / whole if whole > rounding else math.nan


def _sphericity_note(details: dict[str, Any]) -> list[Note]:
    k = details["f_df"][0] + 1
    if k == 2 or math.isnan(details["f"]):
        return []
    mauchly = (
        f"Mauchly's W = {fixed(details['mauchly_w'], 3)}, {p_phrase(details['mauchly_p'])}"
        if math.isfinite(details["mauchly_w"])
        else "Mauchly's W is not defined with so few subjects"
    )
    return [
        Note(
            "sphericity",
            f"Greenhouse-Geisser epsilon {number(details['epsilon_gg'])} "
            f"({p_phrase(details['p_gg'])}); Huynh-Feldt {number(details['epsilon_hf'])} "
            f"({p_phrase(details['p_hf'])}); lower bound {number(details['epsilon_lower'])} "
            f"({p_phrase(details['p_lower'])}); uncorrected {p_phrase(details['p_uncorrected'])}; "
            f"{mauchly}.",
            "The Greenhouse-Geisser row is the one reported, whatever Mauchly's test says.",
        )
    ]
