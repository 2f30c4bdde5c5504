"""What a method answers: estimates, test results, follow-ups and the notes that go with them.

All classes are frozen. ``str()`` gives a small aligned table, ``to_frame()`` a tidy unrounded
one, ``to_dict()`` plain values that any JSON writer takes. Only :class:`FollowUps` is iterable:
a result is not a tuple whose order must be remembered.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import TYPE_CHECKING, Any, ClassVar, Literal

import numpy as np

from robustrm._format import aligned, df_text, level_text, number, p_cell, span

if TYPE_CHECKING:
    import pandas as pd

Null = Literal[
    "exact",
    "monte carlo",
    "asymptotic",
    "parametric",
    "bootstrap",
    "saddlepoint",
    "importance sampling",
]
Scale = Literal["raw", "log"]
Role = Literal["primary", "supporting", "sensitivity", "supplementary"]

_EXACT_IN_JSON = 2**53


def plain(value: Any) -> Any:
    """Return `value` as JSON-safe plain Python: no NaN, no NumPy, no integer above 2**53."""
    if isinstance(value, (np.generic, np.ndarray)):
        value = value.tolist()
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, int) and not isinstance(value, bool):
        return value if abs(value) <= _EXACT_IN_JSON else str(value)
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [plain(item) for item in value]
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {f.name: plain(getattr(value, f.name)) for f in dataclasses.fields(value)}
    return value


class _Record:
    """Shared conversions of the result classes."""

    def to_dict(self) -> dict[str, Any]:
        """Return plain values that any JSON writer takes."""
        result: dict[str, Any] = plain(self)
        return result


@dataclass(frozen=True, slots=True)
class Note(_Record):
    """Something a reader must know about a result.

    Parameters
    ----------
    code : str
        Short stable name, such as ``"zeros"``.
    fact : str
        What was found, as a sentence with its numbers.
    consequence : str
        What it does to the answer.
    action : str
        What to do about it.
    """

    code: str
    fact: str
    consequence: str = ""
    action: str = ""

    def __str__(self) -> str:
        return " ".join(part for part in (self.fact, self.consequence, self.action) if part)


@dataclass(frozen=True, slots=True)
class Estimate(_Record):
    """A number with its interval.

    Parameters
    ----------
    name : str
        What is estimated, in words.
    value : float
        Point estimate.
    low, high : float or None
        Limits of the interval; None where no interval of this level exists.
    level : float or None
        Level that the interval attains (exact intervals attain at least the level asked for).
    kind : str
        How the interval was made, such as ``"exact"`` or ``"t"``.
    unit : str or None
        Unit of the value; None for a ratio or a probability.
    scale : {"raw", "log"}
        Scale of the analysis. On ``"log"`` the value and limits are back-transformed ratios.
    no_change : float or None
        The value that says "no change", such as a half of a probability of a fall. None: 0 on
        the raw scale, 1 on the log scale.
    notes : tuple of Note
        What a reader must know of the interval.
    """

    name: str
    value: float
    low: float | None
    high: float | None
    level: float | None
    kind: str
    unit: str | None = None
    scale: Scale = "raw"
    no_change: float | None = None
    notes: tuple[Note, ...] = ()

    @property
    def neutral(self) -> float:
        """The value that says "no change"."""
        if self.no_change is not None:
            return self.no_change
        return 1.0 if self.scale == "log" else 0.0

    @classmethod
    def of_shift(
        cls,
        names: tuple[str, str],
        *,
        value: float,
        limits: tuple[float, float] | None,
        level: float | None,
        kind: str,
        unit: str | None,
        scale: Scale,
    ) -> Estimate:
        """Make the estimate of a shift, back-transformed to a ratio on the log scale.

        Only the centre and the limits are back-transformed, never a standard deviation.
        `names` are the names of the difference and of the ratio.
        """
        low, high = limits if limits is not None else (None, None)
        if scale == "raw":
            return cls(names[0], value, low, high, level, kind, unit, scale)
        low, high = (None if bound is None else _exp(bound) for bound in (low, high))
        return cls(names[1], _exp(value), low, high, level, kind, None, scale)

    def __str__(self) -> str:
        unit = f" {self.unit}" if self.unit else ""
        head = f"{self.name} {number(self.value)}{unit}"
        if self.level is None or self.low is None:
            return f"{head} (interval not estimable)"
        return f"{head} ({level_text(self.level)} interval {span(self.low, self.high)})"

    def to_frame(self) -> pd.DataFrame:
        """Return one unrounded row."""
        import pandas as pd

        row = {f.name: getattr(self, f.name) for f in dataclasses.fields(self)}
        row["notes"] = " ".join(map(str, self.notes))
        return pd.DataFrame([row])


def _exp(value: float) -> float:
    return math.exp(value) if value < 709 else math.inf


@dataclass(frozen=True)
class TestResult(_Record):
    """The answer of one test.

    Parameters
    ----------
    method : str
        Name of the method, as in ``robustrm methods``.
    statistic : float
        Observed statistic; NaN where it is not defined, with a note that says why.
    statistic_name : str
        Symbol or name of the statistic.
    df : tuple of float
        Degrees of freedom of the reference distribution behind `p_value`; empty if none.
    p_value : float
        In (0, 1]; NaN only where nothing could be computed, with a note.
    null : str
        How the null distribution was found: ``"exact"``, ``"monte carlo"``, ``"asymptotic"``,
        ``"parametric"``, ``"bootstrap"``, ``"saddlepoint"`` or ``"importance sampling"``.
    n_subjects, n_occasions : int
        What entered the test.
    hypothesis : str
        The null hypothesis, as a sentence.
    estimand : str
        What the estimate, or the statistic, is about.
    scale : {"raw", "log"}
        Scale on which the values were compared.
    alternative : {"two-sided", "greater", "less"} or None
        Direction; None for an omnibus test.
    p_interval : tuple of float, optional
        99% interval of a p value by Monte Carlo or importance sampling.
    arrangements : int, optional
        Exact and Monte Carlo: number of equally likely arrangements, the product over subjects.
    draws : int, optional
        Monte Carlo, importance sampling and bootstrap: number of draws.
    estimate : Estimate, optional
        Estimate with its interval, where one exists.
    subjects : tuple of str
        Identifiers of the subjects that entered, in natural order.
    notes : tuple of Note
        What a reader must know.
    details : mapping
        Extra numbers by name.
    """

    __test__: ClassVar[bool] = False  # the name starts with Test; test collectors pass it by

    method: str
    statistic: float
    statistic_name: str
    df: tuple[float, ...]
    p_value: float
    null: Null
    n_subjects: int
    n_occasions: int
    hypothesis: str
    estimand: str
    scale: Scale
    alternative: str | None = None
    p_interval: tuple[float, float] | None = None
    arrangements: int | None = None
    draws: int | None = None
    estimate: Estimate | None = None
    subjects: tuple[str, ...] = ()
    notes: tuple[Note, ...] = ()
    details: Mapping[str, Any] = field(default_factory=dict)

    def __post_init__(self) -> None:
        object.__setattr__(self, "details", MappingProxyType(dict(self.details)))

    def __reduce__(self) -> tuple[Any, ...]:
        values = [getattr(self, f.name) for f in dataclasses.fields(self)]
        values[-1] = dict(self.details)  # a read-only view cannot be sent to another process
        return type(self), tuple(values)

    def __str__(self) -> str:
        rows = [
            [
                self.method,
                f"{self.n_subjects} × {self.n_occasions}",
                f"{self.statistic_name} = {number(self.statistic, 4)}",
                ", ".join(df_text(df) for df in self.df) or "–",
                p_cell(self.p_value),
                self.null,
            ]
        ]
        lines = [aligned(["test", "n × k", "statistic", "df", "P", "null"], rows)]
        if self.estimate is not None:
            lines.append(str(self.estimate))
        lines.append(f"Null hypothesis: {self.hypothesis}")
        lines.extend(f"Note: {note}" for note in self.notes)
        return "\n".join(lines)

    def to_frame(self) -> pd.DataFrame:
        """Return one unrounded row: the test and, with the prefix ``estimate_``, its estimate."""
        import pandas as pd

        return pd.DataFrame([self.row()])

    def row(self) -> dict[str, Any]:
        """Return the flat fields of the result, unrounded, for a row of a larger table."""
        estimate = self.estimate
        return {
            "method": self.method,
            "statistic_name": self.statistic_name,
            "statistic": self.statistic,
            "df": ", ".join(f"{df:g}" for df in self.df),
            "p_value": self.p_value,
            "null": self.null,
            "n_subjects": self.n_subjects,
            "n_occasions": self.n_occasions,
            "estimand": self.estimand,
            "scale": self.scale,
            "estimate_name": estimate.name if estimate else None,
            "estimate": estimate.value if estimate else math.nan,
            "low": _or_nan(estimate.low if estimate else None),
            "high": _or_nan(estimate.high if estimate else None),
            "level": _or_nan(estimate.level if estimate else None),
            "unit": estimate.unit if estimate else None,
        }


def _or_nan(value: float | None) -> float:
    return math.nan if value is None else value


@dataclass(frozen=True)
class Comparison(_Record):
    """Two occasions compared: ``second`` against ``first``.

    Parameters
    ----------
    first, second : str
        Occasion labels. Differences are second − first, ratios second / first.
    result : TestResult
        The test of this pair alone, with its unadjusted p value.
    p_adjusted : float
        The p value adjusted over the family; NaN where the pair could not be tested.
    """

    first: str
    second: str
    result: TestResult
    p_adjusted: float

    @property
    def p_value(self) -> float:
        """Unadjusted p value of this pair."""
        return self.result.p_value

    @property
    def estimate(self) -> Estimate | None:
        """Estimate with its interval."""
        return self.result.estimate

    @property
    def label(self) -> str:
        """The pair in words, later occasion first: ``"week 12 vs week 0"``."""
        return f"{self.second} vs {self.first}"

    def to_dict(self) -> dict[str, Any]:
        """Return plain values, the unadjusted p and the estimate at the top."""
        return {
            "first": self.first,
            "second": self.second,
            "p_value": plain(self.p_value),
            "p_adjusted": plain(self.p_adjusted),
            "estimate": plain(self.estimate),
            "result": self.result.to_dict(),
        }


@dataclass(frozen=True)
class FollowUps(_Record):
    """A declared family of comparisons, adjusted together.

    Iterating gives the :class:`Comparison` objects in their declared order.

    Parameters
    ----------
    comparisons : tuple of Comparison
        All members of the family, also those that could not be tested.
    method : str
        Test used for every pair.
    family : str
        How the family was declared.
    adjust : str
        Adjustment of the p values over the family.
    intervals : {"separate", "simultaneous"}
        Whether each interval holds its level alone or all of them together.
    level : float
        Level asked for (of each interval, or of all together).
    smallest_p, smallest_p_adjusted : float
        The smallest p values that any outcome of this family could give.
    notes : tuple of Note
        What a reader must know of the family as a whole.
    """

    comparisons: tuple[Comparison, ...]
    method: str
    family: str
    adjust: str
    intervals: str
    level: float
    smallest_p: float
    smallest_p_adjusted: float
    notes: tuple[Note, ...] = ()

    def __iter__(self) -> Iterator[Comparison]:
        return iter(self.comparisons)

    def __len__(self) -> int:
        return len(self.comparisons)

    def __getitem__(self, pair: tuple[str, str]) -> Comparison:
        for comparison in self.comparisons:
            if (comparison.first, comparison.second) == tuple(pair):
                return comparison
        known = ", ".join(repr((c.first, c.second)) for c in self.comparisons)
        raise KeyError(f"no comparison {tuple(pair)!r}; the family has {known}")

    def __str__(self) -> str:
        headings = ["comparison", "n", "estimate", "interval", "P", f"P ({self.adjust})"]
        rows = [_comparison_cells(comparison) for comparison in self.comparisons]
        lines = [aligned(headings, rows)]
        lines.extend(_deciding_partition(c) for c in self if "partition" in c.result.details)
        lines.extend(f"Note: {note}" for note in self.notes)
        return "\n".join(lines)

    def to_frame(self) -> pd.DataFrame:
        """Return one unrounded row a comparison."""
        import pandas as pd

        rows = []
        for comparison in self.comparisons:
            row = comparison.result.row()
            row["p_adjusted"] = comparison.p_adjusted
            rows.append({"first": comparison.first, "second": comparison.second, **row})
        return pd.DataFrame(rows)

    def to_dict(self) -> dict[str, Any]:
        """Return plain values."""
        result: dict[str, Any] = {
            f.name: plain(getattr(self, f.name))
            for f in dataclasses.fields(self)
            if f.name != "comparisons"
        }
        result["comparisons"] = [comparison.to_dict() for comparison in self.comparisons]
        return result


def _comparison_cells(comparison: Comparison) -> list[str]:
    estimate = comparison.estimate
    return [
        comparison.label,
        str(comparison.result.n_subjects),
        number(estimate.value) if estimate else "–",
        span(estimate.low, estimate.high) if estimate else "–",
        p_cell(comparison.p_value),
        p_cell(comparison.p_adjusted),
    ]


def _deciding_partition(comparison: Comparison) -> str:
    details = comparison.result.details
    return (
        f"{comparison.label}: decided by {details['partition']} ({details['partition_null']}); "
        f"Holm {p_cell(details['p_holm'])}"
    )


def note_codes(notes: Sequence[Note]) -> tuple[str, ...]:
    """Return the codes of `notes`, in order."""
    return tuple(note.code for note in notes)
