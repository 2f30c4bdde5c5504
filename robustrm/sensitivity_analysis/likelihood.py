"""The planned contrasts by the likelihood of all values: measured, beyond a limit, or missing."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from scipy import special

from robustrm._format import counted, listing
from robustrm.kernels import censored_normal
from robustrm.kernels.censored_normal import CensoredNormal
from robustrm.methods.adjusting import adjusted
from robustrm.methods.beyond import MOSTLY_BEYOND
from robustrm.methods.follow_up import declared_pairs
from robustrm.methods.paired_t import NAMES, t_p_value
from robustrm.methods.registry import P_ADJUSTMENTS
from robustrm.plan import Plan
from robustrm.results import Estimate, Note, Role, Scale, plain
from robustrm.table import OccasionTable
from robustrm.ties import Floats

INTERVAL_FROM = 10
"""Fewest subjects for an interval and P: the simulated level holds from here."""
LEAST_MEASURED = 3
"""Fewest measured values of an occasion in the model: two must be left without any subject."""
ESTIMAND = NAMES[1]


@dataclass(frozen=True, slots=True)
class LikelihoodContrast:
    """Two occasions compared by the likelihood of all values.

    Parameters
    ----------
    first, second : str
        Occasions; the ratio is second / first.
    estimate : Estimate or None
        Ratio of geometric means with its jackknife-t interval, without limits below 10
        subjects; None where it cannot be estimated, with a note.
    p_value : float
        Of the jackknife t in the plan's direction; NaN where there is no interval.
    n_subjects : int
        All subjects with any value on the occasions of the model.
    notes : tuple of Note
        What a reader must know.
    p_adjusted : float
        Adjusted over the planned family; NaN where there is no P.
    adjust : str
        The adjustment: the plan's, or Holm's where the plan's belongs to its test.
    role : {"sensitivity", "supplementary"}
        Sensitivity where the planned comparison has the same estimand.
    occasions : tuple of str
        The occasions of the model.
    statistic : float
        Jackknife t, on `df` degrees of freedom.
    df : float
        One less than the subjects.
    """

    first: str
    second: str
    estimate: Estimate | None
    p_value: float
    n_subjects: int
    notes: tuple[Note, ...]
    p_adjusted: float = math.nan
    adjust: str = "none"
    role: Role = "supplementary"
    occasions: tuple[str, ...] = ()
    statistic: float = math.nan
    df: float = math.nan
    estimand: str = ESTIMAND
    scale: Scale = "log"

    @property
    def label(self) -> str:
        """The pair in words, later occasion first."""
        return f"{self.second} vs {self.first}"

    def to_dict(self) -> dict[str, Any]:
        """Return plain values."""
        result: dict[str, Any] = plain(self)
        return result


def likelihood_contrasts(table: OccasionTable, plan: Plan) -> tuple[LikelihoodContrast, ...]:
    """Estimate the planned contrasts from all values, under a normal model of the logarithms.

    Parameters
    ----------
    table : OccasionTable
        The data on the raw scale. Every subject with any value enters; a value beyond a limit
        enters as that, each with its own limit, and no substitute is used.
    plan : Plan
        Contrasts, level, intervals, direction and adjustment.

    Returns
    -------
    tuple of LikelihoodContrast
        One a planned contrast, in their order.

    Raises
    ------
    ArgumentError
        When the plan names an occasion that the table does not have.

    Notes
    -----
    The logs of a subject's values are taken as one draw from a normal distribution with free
    means and a free covariance. The means are fitted by maximum likelihood; a value below a
    limit adds the probability of lying there, a missing one nothing. That is valid when gaps are
    missing at random: whether a visit was missed may depend on what was measured of the subject,
    not on the value that was missed.

    The interval is that of a t on n − 1 degrees of freedom with the jackknife standard error over
    subjects, so the covariance of the model need not be right for it. Without gaps and limits it
    is the interval of the paired t test on logs. Below 10 subjects the estimate stands alone.

    With few subjects measured on all occasions the likelihood can grow without bound. Then the
    two occasions of a contrast are fitted alone; a note says so.

    The estimand is the ratio of geometric means. It is that of the pseudo-median only where log
    ratios are symmetric, so the role beside a signed-rank test is supplementary.

    References
    ----------
    .. [1] Dempster, A. P., Laird, N. M. and Rubin, D. B. (1977). Maximum likelihood from
       incomplete data via the EM algorithm. Journal of the Royal Statistical Society B 39, 1-38.
    .. [2] Miller, R. G. (1974). The jackknife: a review. Biometrika 61, 1-15.
    .. [3] Rubin, D. B. (1976). Inference and missing data. Biometrika 63, 581-592.

    Examples
    --------
    >>> before = [5.1, 8.3, 2.2, 9.6, 4.4, 6.7, 3.8, 7.5, 5.9, 4.9]
    >>> after = [3.9, 6.0, 1.0, 8.1, 3.7, 4.1, 2.6, 5.2, float("nan"), 1.0]
    >>> table = OccasionTable.from_array(
    ...     list(zip(before, after)),
    ...     occasions=["before", "after"],
    ...     below=[(False, value == 1.0) for value in after],
    ... )
    >>> (contrast,) = likelihood_contrasts(table, Plan())
    >>> contrast.n_subjects, round(contrast.estimate.value, 2)
    (10, 0.56)
    """
    pairs = declared_pairs(table, plan.contrasts, "contrasts")
    used = _with_values(table).by_content()
    if (used.values <= 0).any():
        return tuple(_none(used, pair, plan, _NOT_POSITIVE) for pair in pairs)
    logs = used.log()
    whole = _model(logs, _usable(logs))
    level = plan.level if plan.intervals == "separate" else 1 - (1 - plan.level) / len(pairs)
    contrasts = [_contrast(logs, whole, pair, plan, level) for pair in pairs]
    adjust = plan.adjust if plan.adjust in P_ADJUSTMENTS else "holm"
    p_adjusted = adjusted([contrast.p_value for contrast in contrasts], adjust)
    return tuple(
        replace(contrast, p_adjusted=p, adjust=adjust)
        for contrast, p in zip(contrasts, p_adjusted, strict=True)
    )


@dataclass(frozen=True, slots=True)
class _Model:
    """A fit on some occasions, with the means left when each subject leaves."""

    occasions: tuple[str, ...]
    n: int
    fitted: CensoredNormal
    without: Floats

    @property
    def has_fit(self) -> bool:
        return bool(self.fitted.converged)

    @property
    def is_complete(self) -> bool:
        return self.has_fit and bool(np.isfinite(self.without).all())

    def shift(self, first: str, second: str) -> tuple[float, float]:
        """Return the mean log ratio and its jackknife standard error."""
        i, j = self.occasions.index(first), self.occasions.index(second)
        left = self.without[:, j] - self.without[:, i]
        error = math.sqrt((self.n - 1) * float(np.mean((left - left.mean()) ** 2)))
        return float(self.fitted.mean[j] - self.fitted.mean[i]), error


def _model(logs: OccasionTable, occasions: Sequence[str]) -> _Model:
    if len(occasions) < 2:
        empty = np.full(2, np.nan)
        fitted = CensoredNormal(empty, np.full((2, 2), np.nan), empty[0], np.zeros((), np.bool_))
        return _Model((), 0, fitted, np.full((1, 2), np.nan))
    part = _with_values(logs.select(occasions=occasions)).by_content()
    cells = (part.values, part.below, part.above)
    fitted = censored_normal.fit(*cells)
    without = np.full(part.values.shape, np.nan)
    if fitted.converged and part.n_subjects >= INTERVAL_FROM:
        without = censored_normal.leave_one_out(*cells, fitted).mean
    return _Model(part.occasions, part.n_subjects, fitted, without)


def _with_values(table: OccasionTable) -> OccasionTable:
    kept = np.flatnonzero(~table.missing.all(axis=1)).tolist()
    return table.select(subjects=[table.subjects[i] for i in kept]) if kept else table


def _usable(logs: OccasionTable) -> tuple[str, ...]:
    measured = (~logs.missing & ~logs.censored).sum(axis=0)
    return tuple(
        occasion
        for occasion, count in zip(logs.occasions, measured, strict=True)
        if count >= LEAST_MEASURED
    )


def _contrast(
    logs: OccasionTable, whole: _Model, pair: tuple[str, str], plan: Plan, level: float
) -> LikelihoodContrast:
    if _mostly_beyond(logs, pair):
        return _none(logs, pair, plan, MOSTLY_BEYOND)
    if not set(pair) <= set(_usable(logs)):
        return _none(logs, pair, plan, _FEW_MEASURED)
    model, notes = whole, [_AT_RANDOM]
    wants_interval = whole.n >= INTERVAL_FROM
    if not (whole.is_complete if wants_interval else whole.has_fit) and len(whole.occasions) > 2:
        alone = _model(logs, pair)
        if alone.has_fit and (alone.is_complete or not whole.has_fit):
            model = alone
            notes.append(_alone(pair))
    if not model.has_fit:
        return _none(logs, pair, plan, _NO_MAXIMUM)
    return _estimated(model, pair, plan, level, notes)


def _estimated(
    model: _Model, pair: tuple[str, str], plan: Plan, level: float, notes: list[Note]
) -> LikelihoodContrast:
    n = model.n
    value, error = model.shift(*pair)
    has_interval = math.isfinite(error) and error > 0
    margin = float(special.stdtrit(n - 1, (1 + level) / 2)) * error
    t = value / error if has_interval else math.nan
    if n < INTERVAL_FROM:
        notes.append(_few(n))
    elif not has_interval:
        notes.append(_NO_JACKKNIFE)
    return LikelihoodContrast(
        *pair,
        Estimate.of_shift(
            NAMES,
            value=value,
            limits=(value - margin, value + margin) if has_interval else None,
            level=level if has_interval else None,
            kind="jackknife t",
            unit=None,
            scale="log",
        ),
        t_p_value(t, n - 1, plan.alternative),
        n,
        tuple(notes),
        role=_role(plan),
        occasions=model.occasions,
        statistic=t,
        df=float(n - 1),
    )


def _role(plan: Plan) -> Role:
    same = plan.used_scale == "log" and plan.pair in ("sign_flip", "paired_t")
    return "sensitivity" if same else "supplementary"


def _mostly_beyond(logs: OccasionTable, pair: tuple[str, str]) -> bool:
    """Whether more than half of the values of an occasion lie beyond their own limits."""
    columns = [logs.column("contrasts", label) for label in pair]
    beyond = logs.censored[:, columns].sum(axis=0)
    return bool((2 * beyond > (~logs.missing[:, columns]).sum(axis=0)).any())


def _none(
    table: OccasionTable, pair: tuple[str, str], plan: Plan, note: Note
) -> LikelihoodContrast:
    return LikelihoodContrast(
        *pair, None, math.nan, table.n_subjects, (note,), role=_role(plan), occasions=()
    )


_AT_RANDOM = Note(
    "normal model",
    "The logs of all values enter one normal model with free means and covariance.",
    "Gaps are taken as missing at random: they may depend on what was measured of the subject, "
    "not on the value that was missed.",
    "Ask for the reasons of the gaps.",
)
_NOT_POSITIVE = Note(
    "not positive",
    "A value or a limit is zero or negative, so there are no logarithms.",
    "The ratio of geometric means is not estimated.",
    "Ask whether a zero lies below a limit or is a true zero.",
)
_FEW_MEASURED = Note(
    "few measured values",
    f"An occasion has fewer than {LEAST_MEASURED} measured values.",
    "The ratio is not estimated.",
    "The counts of falls and rises stand instead.",
)
_NO_MAXIMUM = Note(
    "no maximum",
    "The likelihood has no maximum with so few subjects measured on both occasions, or with "
    "ratios that do not vary.",
    "The ratio is not estimated.",
    "Read the comparisons by ranks.",
)
_NO_JACKKNIFE = Note(
    "no interval",
    "The likelihood has no maximum when one of the subjects is left out.",
    "The estimate stands without interval and P.",
)


def _few(n: int) -> Note:
    return Note(
        "few subjects",
        f"The model has {counted(n, 'subject')}.",
        f"Below {INTERVAL_FROM} the level of its interval is not known, so the estimate stands "
        "without interval and P.",
        "Read it as a description.",
    )


def _alone(pair: tuple[str, str]) -> Note:
    return Note(
        "two occasions alone",
        "The likelihood of all occasions together has no maximum, with all subjects or without "
        f"one of them, so {listing(pair)} were fitted alone.",
        "A gap may then depend on the other of these two values only.",
    )
