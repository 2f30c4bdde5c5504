"""What the tests of trimmed means share: names, the cut, and the notes that go with it."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np
from scipy import special

from robustrm._checks import Alternative, check_share
from robustrm._format import counted
from robustrm.errors import TooFewError
from robustrm.kernels.location import cut, winsorized_variance
from robustrm.kernels.trimmed import left, trimmed_means
from robustrm.methods.beyond import MOSTLY_BEYOND, is_mostly_beyond
from robustrm.methods.paired_t import t_p_value
from robustrm.results import Estimate, Note, TestResult
from robustrm.table import OccasionTable
from robustrm.ties import Floats

FEW = 6
"""With fewer subjects left after the cut a note says so: a common-sense line, not a theorem."""


def share_text(trim: float) -> str:
    """Return the share cut at each end as readers know it: ``"20%"``, ``"12.5%"``."""
    return f"{round(100 * trim, 6):g}%"


def check_left(n: int, trim: float, *, title: str, whom: str) -> int:
    """Return the number of subjects left after the cut, at least 2.

    Raises
    ------
    ArgumentError
        When `trim` is outside [0, 0.5).
    TooFewError
        With fewer than two subjects, or fewer than two left.
    """
    check_share("trim", trim)
    if n < 2:
        raise TooFewError(f"{title} needs at least 2 subjects {whom}, got {n}.")
    h = left(n, trim)
    if h < 2:
        raise TooFewError(
            f"{title} needs at least 2 subjects left after the cut, got {h}: `trim` = {trim:g} "
            f"cuts {cut(n, trim)} at each end of {n} {whom}. Trim less."
        )
    return h


def cut_notes(n: int, trim: float) -> Iterator[Note]:
    """Yield what a reader must know of the cut: nobody cut, or few left."""
    g, h = cut(n, trim), left(n, trim)
    if g == 0 and trim > 0:
        yield Note(
            "nothing trimmed",
            f"{share_text(trim)} of {counted(n, 'subject')} is less than one: nobody is cut.",
            "The trimmed means are the means, and one extreme subject moves them.",
            f"From {math.ceil(1 / trim - 1e-9)} subjects one is cut at each end.",
        )
    if h < FEW:
        yield Note(
            "few left",
            f"{h} of {n} subjects are left after the cut.",
            f"With {h - 1} degrees of freedom for each difference the test has little power, and "
            "leans on its approximation more than on the data.",
        )


def occasion_details(y: Floats, trim: float, size: float) -> dict[str, Any]:
    """Return trimmed means and Winsorized SDs of the occasions, y (n, k) in units of `size`."""
    spread = np.sqrt(winsorized_variance(y.T, trim))
    return {
        "trimmed_means": tuple(mean * size for mean in trimmed_means(y, trim).tolist()),
        "winsorized_sds": tuple(sd * size for sd in spread.tolist()),
    }


# ── two occasions ─────────────────────────────────────────────────────────────────────────────


def shift_result(
    used: OccasionTable,
    value: float,
    error: float,
    *,
    is_defined: bool,
    method: str,
    trim: float,
    alternative: Alternative,
    level: float,
    names: tuple[str, str],
    hypotheses: tuple[str, str],
    details: Mapping[str, Any],
) -> TestResult:
    """Make the result of a t test of a shift on h − 1 degrees of freedom.

    `value` and its standard `error` are on the table's scale; `is_defined` is False where the
    error is zero but for rounding. `names` and `hypotheses` are those of the raw and of the log
    scale.
    """
    n, on_logs = used.n_subjects, used.scale == "log"
    df = left(n, trim) - 1
    t = value / error if is_defined else math.nan
    margin = float(special.stdtrit(df, (1 + level) / 2)) * error
    mostly_beyond = is_mostly_beyond(used)
    estimate = Estimate.of_shift(
        names,
        value=value,
        limits=(value - margin, value + margin) if is_defined else None,
        level=level if is_defined else None,
        kind="t",
        unit=used.unit,
        scale=used.scale,
    )
    return TestResult(
        method=method,
        statistic=t,
        statistic_name="t",
        df=(float(df),),
        p_value=t_p_value(t, df, alternative),
        null="parametric",
        n_subjects=n,
        n_occasions=2,
        hypothesis=hypotheses[on_logs],
        estimand=names[on_logs],
        scale=used.scale,
        alternative=alternative,
        estimate=None if mostly_beyond else estimate,
        subjects=used.ids,
        notes=(
            *(() if is_defined else (_NO_VARIATION,)),
            *cut_notes(n, trim),
            *((MOSTLY_BEYOND,) if mostly_beyond else ()),
        ),
        details={
            **details,
            "standard_error": error,
            "trim": trim,
            "g": cut(n, trim),
            "h": left(n, trim),
        },
    )


_NO_VARIATION = Note(
    "no variation",
    "After the extremes are pulled in, all differences are equal, so t is not defined.",
    "No p value and no interval are given.",
)
