"""An analysis as one plain, versioned dict: everything a report shows, and nothing rounded.

All renderings read this dict and nothing else (figures are drawn from the analysis itself).
The block ``record`` alone holds what may differ between two runs that agree: the digest of
the file and its row numbers, versions, platform and seed. Outside it, shuffling the rows or
the columns of the input changes no digit.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterable, Sequence
from dataclasses import asdict
from typing import Any

from robustrm.analysis import Analysis, Row, apart, references
from robustrm.ledger import Ledger, LedgerLine
from robustrm.methods.summary import OccasionSummary
from robustrm.results import plain
from robustrm.sensitivity_analysis import Sensitivity
from robustrm.table import OccasionTable, natural_key

SCHEMA = "robustrm.report"
SCHEMA_VERSION = 2

Document = dict[str, Any]

_ORDER_STATISTICS = {"smallest": 0.0, "q1": 0.25, "median": 0.5, "q3": 0.75, "largest": 1.0}


def document(analysis: Analysis, sensitivity: Sensitivity | None = None) -> Document:
    """Return everything that a report of `analysis` shows, JSON-safe and unrounded.

    Parameters
    ----------
    analysis : Analysis
        A finished analysis.
    sensitivity : Sensitivity, optional
        Whether its conclusion holds; the key ``sensitivity`` is None without it.

    Returns
    -------
    dict
        Keys ``schema``, ``schema_version``, ``study``, ``plan``, ``advice``, ``attainable``,
        ``primary``, ``omnibus``, ``supplementary``, ``beside``, ``skipped``,
        ``sensitivity``, ``effects``,
        ``summary``, ``cells``, ``inclusion``, ``ledger``, ``notes`` and ``record``.
    """
    reference = references(analysis.rows())
    result: Document = plain(
        {
            "schema": SCHEMA,
            "schema_version": SCHEMA_VERSION,
            "study": _study(analysis),
            "plan": analysis.plan.to_dict(),
            "advice": None if analysis.advice is None else analysis.advice.to_dict(),
            "attainable": analysis.attainable.to_dict(),
            "primary": _primary(analysis),
            "omnibus": _omnibus(analysis),
            "supplementary": [_row(row, reference) for row in analysis.supplementary],
            "beside": [_row(row, reference) for row in analysis.beside],
            "skipped": [asdict(skip) for skip in analysis.skips],
            "sensitivity": None if sensitivity is None else sensitivity.to_dict(),
            "effects": [effect.to_dict() for effect in analysis.effects],
            "summary": [_summary(s, analysis.table) for s in analysis.summary],
            "cells": _cells(analysis.table),
            "inclusion": _inclusion(analysis),
            "ledger": _ledger(analysis.ledger, analysis.table.occasions),
            "notes": [note.to_dict() for note in analysis.notes],
            "record": dict(analysis.record),
        }
    )
    return result


def _study(analysis: Analysis) -> dict[str, Any]:
    table, plan = analysis.table, analysis.plan
    return {
        "marker": table.marker,
        "unit": table.unit,
        "scale": analysis.scale,
        "n_subjects": table.n_subjects,
        "n_complete": int((~table.missing.any(axis=1)).sum()),
        "n_occasions": table.n_occasions,
        "subjects": list(table.subjects),
        "occasions": list(table.occasions),
        "resolution": table.resolution,
        "purpose": plan.purpose,
        "design": plan.design,
    }


# ── results as rows ───────────────────────────────────────────────────────────────────────


def _primary(analysis: Analysis) -> dict[str, Any]:
    family = analysis.primary.to_dict()
    family["comparisons"] = [
        {**comparison.to_dict(), **_head(row), "apart": []}
        for comparison, row in zip(analysis.primary, analysis.rows(), strict=False)
    ]
    return family


def _omnibus(analysis: Analysis) -> dict[str, Any] | None:
    supporting = [row for row in analysis.rows() if row.role == "supporting"]
    return {**_row(supporting[0], {}), "apart": []} if supporting else None


def _head(row: Row) -> dict[str, Any]:
    return {
        "role": row.role,
        "label": row.label,
        "title": row.title,
        "adjust": row.adjust,
        "p_adjusted": row.p_adjusted,
    }


def _row(row: Row, reference: dict[str, Row]) -> dict[str, Any]:
    return {
        **_head(row),
        "apart": apart(row.result, reference.get(row.label, row).result),
        "result": row.result.to_dict(),
    }


# ── the data and who is in what ───────────────────────────────────────────────────────────


def _summary(summary: OccasionSummary, table: OccasionTable) -> dict[str, Any]:
    j = table.occasions.index(summary.occasion)
    below, above = table.below[:, j], table.above[:, j]
    return {
        **summary.to_dict(),
        "beyond": {name: _side(summary, q) for name, q in _ORDER_STATISTICS.items()},
        "lower_limit": float(table.lower_limit[below, j].max()) if below.any() else None,
        "upper_limit": float(table.upper_limit[above, j].min()) if above.any() else None,
    }


def _side(summary: OccasionSummary, q: float) -> str | None:
    """Say on which side of a limit an order statistic lies; None where measured or unknown."""
    position = q * (summary.n - 1)
    if 0 < math.ceil(position) + 1 <= summary.n_below:
        return "below"
    return "above" if 0 < summary.n - math.floor(position) <= summary.n_above else None


def _cells(table: OccasionTable) -> list[dict[str, Any]]:
    return [
        {str(key): value for key, value in cell.items()}
        for cell in table.to_long().to_dict("records")
    ]


def _inclusion(analysis: Analysis) -> dict[str, Any]:
    names = list(dict.fromkeys(entry.analysis for entry in analysis.inclusions))
    used = {(entry.analysis, entry.subject): entry for entry in analysis.inclusions}
    return {
        "analyses": [
            {"analysis": name, "n": sum(used[name, s].included for s in analysis.table.subjects)}
            for name in names
        ],
        "subjects": [
            {"subject": subject, "included": [used[name, subject].included for name in names]}
            for subject in analysis.table.subjects
        ],
        "left": [
            {"analysis": entry.analysis, "subject": entry.subject, "reason": entry.reason}
            for entry in analysis.inclusions
            if not entry.included
        ],
    }


def _ledger(ledger: Ledger, occasions: Sequence[str]) -> dict[str, Any]:
    """Return the ledger; lines of one step stand by subject, whatever the order of the file."""
    lines: list[LedgerLine] = []
    for _, step in itertools.groupby(ledger.lines, key=lambda line: line.step):
        lines.extend(_by_subject(step, occasions))
    return Ledger(tuple(lines), ledger.counts).to_dict()


def _by_subject(lines: Iterable[LedgerLine], occasions: Sequence[str]) -> list[LedgerLine]:
    place = {occasion: j for j, occasion in enumerate(occasions)}
    return sorted(
        lines,
        key=lambda line: (natural_key(line.subject or ""), place.get(line.occasion or "", -1)),
    )
