"""All parts of a sensitivity analysis in one call."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from robustrm.analysis import Analysis, Progress, analyze
from robustrm.plan import Plan
from robustrm.results import Note
from robustrm.sensitivity_analysis.beside import Beside, beside
from robustrm.sensitivity_analysis.grid import Grid, specification_grid
from robustrm.sensitivity_analysis.leave_one_out import LeaveOneOut, leave_one_out
from robustrm.sensitivity_analysis.limits import Limits, limit_sensitivity
from robustrm.sensitivity_analysis.missing import Missing, missing_sensitivity
from robustrm.sensitivity_analysis.overview import Overview, overview
from robustrm.sensitivity_analysis.questions import Questions, questions
from robustrm.table import OccasionTable

if TYPE_CHECKING:
    import pandas as pd

PARTS = ("beside", "grid", "leave_one_out", "limits", "missing", "questions")
"""The parts, in the order in which a reader meets them."""


@dataclass(frozen=True, eq=False)
class Parts:
    """The parts with all that each holds; :class:`Sensitivity` gives their tables."""

    overview: Overview
    beside: Beside
    grid: Grid
    leave_one_out: LeaveOneOut
    limits: Limits
    missing: Missing
    questions: Questions


@dataclass(frozen=True, eq=False)
class Sensitivity:
    """Whether a conclusion holds under other reasonable assumptions.

    Parameters
    ----------
    analysis : Analysis
        The planned analysis.
    parts : Parts
        Each part with its tables, sentences and notes.
    """

    analysis: Analysis
    parts: Parts

    @property
    def overview(self) -> pd.DataFrame:
        """Every planned comparison, and under which changes it reads the same."""
        return self.parts.overview.frame

    @property
    def beside(self) -> pd.DataFrame:
        """Every method and comparison beside the planned one."""
        return self.parts.beside.frame

    @property
    def grid(self) -> pd.DataFrame:
        """Every declared specification."""
        return self.parts.grid.frame

    @property
    def grid_p(self) -> float:
        """The joint p value of the whole grid."""
        return self.parts.grid.grid_p

    @property
    def leave_one_out(self) -> pd.DataFrame:
        """Every analysis without each subject."""
        return self.parts.leave_one_out.frame

    @property
    def limits(self) -> pd.DataFrame:
        """Ranges over what values beyond a limit may have been."""
        return self.parts.limits.frame

    @property
    def missing(self) -> pd.DataFrame:
        """Rows under other assumptions about missing visits."""
        return self.parts.missing.frame

    @property
    def sentences(self) -> dict[str, tuple[str, ...]]:
        """What each part found, in words."""
        return {name: getattr(self.parts, name).sentences for name in PARTS}

    @property
    def notes(self) -> tuple[Note, ...]:
        """What a reader must know of any part, said once."""
        every = (note for name in PARTS for note in getattr(self.parts, name).notes)
        return tuple(dict.fromkeys(every))

    def to_dict(self) -> dict[str, Any]:
        """Return plain values of every part; the analysis itself is not repeated."""
        return {
            "overview": self.parts.overview.to_dict(),
            **{name: getattr(self.parts, name).to_dict() for name in PARTS},
        }

    def __str__(self) -> str:
        blocks = (
            "\n".join([TITLES[name], *(f"- {text}" for text in texts)])
            for name, texts in self.sentences.items()
            if texts
        )
        return "\n\n".join(blocks)


TITLES = {
    "beside": "Beside the parametric result",
    "grid": "All declared specifications together",
    "leave_one_out": "Without one person",
    "limits": "Values beyond a limit",
    "missing": "Missing visits",
    "questions": "Asked of every study",
}


def sensitivity(
    table: OccasionTable,
    plan: Plan | None = None,
    *,
    rng: np.random.Generator | int | None = None,
    progress: Progress | None = None,
) -> Sensitivity:
    """Ask whether the conclusion of an analysis holds, without a vote and without picking the best.

    Parameters
    ----------
    table : OccasionTable
        The data, on the raw scale.
    plan : Plan, optional
        What was fixed beforehand; that of :func:`robustrm.advise` if not given.
    rng : Generator or int, optional
        Root of the random streams, as for :func:`robustrm.analyze`.
    progress : callable, optional
        Called with (parts done, parts).

    Returns
    -------
    Sensitivity
        ``beside``, ``grid``, ``leave_one_out``, ``limits`` and ``missing`` are tables, ``grid_p``
        is the joint p value of the grid, ``sentences`` say what holds and what does not.

    Raises
    ------
    DataError, ArgumentError, TooFewError
        As :func:`robustrm.analyze`.

    Notes
    -----
    The planned row stays the primary one whatever is found here. A row about another estimand can
    differ from it and both be true; the table says in what rows differ. The share of
    specifications below the level is shown and has no p value of its own; the grid has one joint
    p value.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[91, 72], [40, 31], [120, 95], [66, 50], [33, 21], [75, 60], [52, 41], [48, 30]],
    ...     occasions=["before", "after"],
    ... )
    >>> found = sensitivity(table, rng=1)
    >>> found.leave_one_out["left_out"].nunique()
    8
    """
    done: list[str] = []
    total = len(PARTS) + 1

    def finished(name: str) -> None:
        done.append(name)
        if progress is not None:
            progress(len(done), total)

    analysis = analyze(table, plan, rng=rng)
    finished("analysis")
    used, root = analysis.plan, int(analysis.record["seed"])
    makers: dict[str, Callable[[], Any]] = {
        "beside": lambda: beside(analysis),
        "grid": lambda: specification_grid(table, used, root=root),
        "leave_one_out": lambda: leave_one_out(table, used, root=root),
        "limits": lambda: limit_sensitivity(table, used, root=root),
        "missing": lambda: missing_sensitivity(table, used, root=root),
        "questions": lambda: questions(table, used, root=root),
    }
    found = {}
    for name in PARTS:
        found[name] = makers[name]()
        finished(name)
    screen = overview(analysis, found["beside"], found["leave_one_out"], found["missing"])
    return Sensitivity(analysis, Parts(overview=screen, **found))
