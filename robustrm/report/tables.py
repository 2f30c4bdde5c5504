"""The tables of a report as CSV: tidy, unrounded, safe to open in a spreadsheet.

Text in a cell that begins with ``=``, ``+``, ``-``, ``@``, a tab or a carriage return gets a
leading apostrophe, because a spreadsheet would run it as a formula. Numbers are left as they
are. Files are UTF-8 with a comma between cells, a point in decimals and an empty cell for
what is not there.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from robustrm.report.document import Document
from robustrm.report.effects_sheet import no_change
from robustrm.report.sentences import note_text

_FORMULA = ("=", "+", "-", "@", "\t", "\r")

_RESULT = (
    "method", "statistic_name", "statistic", "df", "p_value", "null", "p_low", "p_high", "draws",
    "arrangements", "alternative", "n_subjects", "n_occasions", "scale", "estimand",
    "estimate_name", "estimate", "low", "high", "level", "unit", "hypothesis",
)  # fmt: skip
_ROW = ("role", "label", "title", "differs_in", "p_adjusted", "adjust", *_RESULT)


def csv_tables(document: Document) -> dict[str, str]:
    """Return the CSV text of every table by its name.

    Returns
    -------
    dict of str
        ``summary``, ``comparisons``, ``beside``, ``effects``, ``inclusion``, ``ledger`` and
        ``cells``; of a sensitivity analysis ``specifications``, ``left-out``, ``limits``,
        ``missing``, ``tipping`` and ``margins``.
    """
    primary = document["primary"]["comparisons"]
    overall = [document["omnibus"]] if document["omnibus"] else []
    others = [*overall, *document["supplementary"], *document["beside"]]
    return {
        "summary": _csv([_without(s, "beyond") for s in document["summary"]]),
        "comparisons": _csv([_comparison(row) for row in primary], ("first", "second", *_ROW)),
        "beside": _csv([_row(row) for row in others], _ROW),
        "effects": _csv([_effect(effect) for effect in document["effects"]], _EFFECT),
        "inclusion": _csv(_inclusions(document), ("analysis", "subject", "included", "reason")),
        "ledger": _csv(document["ledger"]["lines"], _LEDGER),
        "cells": _csv(document["cells"]),
        **_sensitivity_tables(document["sensitivity"]),
    }


def _sensitivity_tables(held: Mapping[str, Any] | None) -> dict[str, str]:
    if held is None:
        return {}
    return {
        "specifications": _csv(held["grid"]["frame"]),
        "left-out": _csv(held["leave_one_out"]["frame"]),
        "limits": _csv(held["limits"]["frame"]),
        "missing": _csv(held["missing"]["frame"]),
        "tipping": _csv(held["missing"]["tipping"]),
        "margins": _csv(held["questions"]["margins"]),
    }


_EFFECT = ("group", "label", "name", "value", "low", "high", "level", "kind", "no_change",
           "unit", "scale", "n_subjects", "reading", "remark", "notes")  # fmt: skip
_LEDGER = ("step", "subject", "occasion", "cells", "what")


def _comparison(row: Mapping[str, Any]) -> dict[str, Any]:
    return {"first": row["first"], "second": row["second"], **_row(row)}


def _row(row: Mapping[str, Any]) -> dict[str, Any]:
    result, estimate = row["result"], row["result"]["estimate"] or {}
    p_low, p_high = result["p_interval"] or (None, None)
    named = {
        **{name: row[name] for name in ("role", "label", "title", "p_adjusted", "adjust")},
        **{name: result[name] for name in _RESULT if name in result},
        **{name: estimate.get(name) for name in ("low", "high", "level", "unit")},
    }
    return {
        **named,
        "differs_in": ", ".join(row["apart"]),
        "df": _df(result),
        "p_low": p_low,
        "p_high": p_high,
        "estimate_name": estimate.get("name"),
        "estimate": estimate.get("value"),
    }


def _df(result: Mapping[str, Any]) -> str:
    """Return degrees of freedom; beside a defined statistic a missing one is infinite."""
    missing = "" if result["statistic"] is None else "infinite"
    listed = (missing if df is None else repr(df) for df in result["df"])
    return ", ".join(text for text in listed if text)


def _effect(effect: Mapping[str, Any]) -> dict[str, Any]:
    # the scale is that of the effect: None where the order of the values alone counts
    estimate = effect["estimate"]
    notes = " ".join(note_text(note) for note in estimate["notes"])
    told = {"no_change": no_change(estimate), "notes": notes}
    return {**estimate, **_without(effect, "estimate"), **told}


def _inclusions(document: Document) -> list[dict[str, Any]]:
    inclusion = document["inclusion"]
    reasons = {(left["analysis"], left["subject"]): left["reason"] for left in inclusion["left"]}
    return [
        {
            "analysis": analysis["analysis"],
            "subject": entry["subject"],
            "included": entry["included"][column],
            "reason": reasons.get((analysis["analysis"], entry["subject"]), ""),
        }
        for column, analysis in enumerate(inclusion["analyses"])
        for entry in inclusion["subjects"]
    ]


def _without(values: Mapping[str, Any], key: str) -> dict[str, Any]:
    return {name: value for name, value in values.items() if name != key}


def _csv(rows: Iterable[Mapping[str, Any]], columns: Sequence[str] | None = None) -> str:
    kept = list(rows)
    names = list(columns if columns is not None else kept[0] if kept else ())
    sheet = io.StringIO()
    writer = csv.writer(sheet, lineterminator="\n")
    writer.writerow(names)
    writer.writerows([_cell(row[name]) for name in names] for row in kept)
    return sheet.getvalue()


def csv_text(rows: Iterable[Mapping[str, Any]], columns: Sequence[str]) -> str:
    """Return rows as CSV text, headings made harmless too: they may hold labels of the user."""
    sheet = io.StringIO()
    writer = csv.writer(sheet, lineterminator="\n")
    writer.writerow([_cell(name) for name in columns])
    writer.writerows([_cell(row[name]) for name in columns] for row in rows)
    return sheet.getvalue()


def _cell(value: Any) -> str:
    if value is None:
        return ""
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, str):
        return f"'{value}" if value.startswith(_FORMULA) else value
    return repr(value)
