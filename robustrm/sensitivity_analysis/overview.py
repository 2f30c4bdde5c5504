"""On one screen: every planned comparison, and under which changes it reads the same."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from robustrm._format import counted
from robustrm.analysis import Analysis, Row
from robustrm.results import Comparison
from robustrm.sensitivity_analysis.beside import Beside
from robustrm.sensitivity_analysis.frames import records
from robustrm.sensitivity_analysis.influence import Influence
from robustrm.sensitivity_analysis.leave_one_out import LeaveOneOut
from robustrm.sensitivity_analysis.missing import Missing

if TYPE_CHECKING:
    import pandas as pd

HOLDS, CHANGES = "the same", "otherwise"
_OF_DIRECTION = ("sign_test", "rank_pair")  # their estimates are probabilities
_NAMED = 4  # more identifiers than this are counted, not listed


@dataclass(frozen=True, eq=False)
class Overview:
    """Every planned comparison against every kind of change.

    Parameters
    ----------
    frame : DataFrame
        One row a planned comparison: ``label``, ``without_one``, ``limits``, ``missing``,
        ``parametric_log``, ``parametric_raw``, each in words that begin with "the same" or
        "otherwise", or say why there is nothing to compare.
    """

    frame: pd.DataFrame

    def to_dict(self) -> dict[str, Any]:
        """Return plain values."""
        return {"frame": records(self.frame)}


def overview(
    analysis: Analysis, beside: Beside, leave_one_out: LeaveOneOut, missing: Missing
) -> Overview:
    """Return what each part says of each planned comparison, in a word or two.

    A comparison reads as its direction and as the side of the level on which its P lies, before
    and after adjustment. Nothing is counted over the columns.
    """
    import pandas as pd

    rows = [row for row in analysis.rows() if row.role == "primary"]
    influences = {i.row.label: i for i in leave_one_out.influences if i.row.role == "primary"}
    return Overview(
        pd.DataFrame(
            [
                {
                    "label": row.label,
                    "without_one": _without_one(influences.get(row.label)),
                    "limits": _limits(analysis, comparison),
                    "missing": _missing(missing.frame, row, analysis.plan.alpha),
                    "parametric_log": _parametric(beside.frame, row, "log"),
                    "parametric_raw": _parametric(beside.frame, row, "raw"),
                }
                for row, comparison in zip(rows, analysis.primary, strict=True)
            ]
        )
    )


def _without_one(influence: Influence | None) -> str:
    if influence is None:
        return "not repeated"
    who = [without.subject for without in influence.changing]
    if not who:
        return HOLDS
    named = " or ".join(who) if len(who) <= _NAMED else f"any of {counted(len(who), 'subject')}"
    return f"{CHANGES} without {named}"


def _limits(analysis: Analysis, comparison: Comparison) -> str:
    pair = [analysis.table.occasions.index(o) for o in (comparison.first, comparison.second)]
    over = comparison.result.details.get("over_substitutes")
    if over is not None:
        return HOLDS if over["reading"] == "unchanged" else CHANGES
    beyond = analysis.table.censored[:, pair].any()
    return "not repeated by this test" if beyond else "no value beyond a limit"


def _missing(frame: pd.DataFrame, row: Row, alpha: float) -> str:
    if not len(frame):
        return "no visit missed"
    made = frame[(frame["label"] == row.label) & frame["p"].notna() & frame["estimate"].notna()]
    readings = {_reading(line, alpha) for line in made.to_dict("records")}
    if not readings:
        return "not repeated"
    return HOLDS if len(readings) == 1 else CHANGES


def _reading(line: dict[Any, Any], alpha: float) -> tuple[bool, bool, bool]:
    neutral = 0.5 if line["method"] in _OF_DIRECTION else 1.0 if line["scale"] == "log" else 0.0
    adjusted = line["p"] if math.isnan(line["p_adjusted"]) else line["p_adjusted"]
    return line["estimate"] > neutral, line["p"] <= alpha, adjusted <= alpha


def _parametric(frame: pd.DataFrame, row: Row, scale: str) -> str:
    made: Sequence[dict[Any, Any]] = frame[
        (frame["label"] == row.label) & (frame["method"] == "paired_t") & (frame["scale"] == scale)
    ].to_dict("records")
    alike = made[0]["reads_like_planned"] if made else None
    if not isinstance(alike, (bool, np.bool_)):  # a row without P
        return "not computed"
    return HOLDS if alike else CHANGES
