"""What was understood of a file, before anything is computed: one plain dict, and its text.

The text is for a terminal of 80 columns. It shows who has what on which occasion, and never
whether anything changed.
"""

from __future__ import annotations

import re
import textwrap
import unicodedata
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from types import MappingProxyType
from typing import Any

import numpy as np

from robustrm._format import aligned, counted, number, percent
from robustrm.errors import DataError, Problem
from robustrm.results import Note, plain
from robustrm.table import OccasionTable
from robustrm.ties import Floats

_WIDTH = 80
_MOST_REPLICATES = 10
_GLUE = "\ufdd0"  # not a character, so no text holds it
_MARKS = MappingProxyType({"value": "●", "below": "<", "above": ">", "missing": "–"})
_WORDS = MappingProxyType(
    {
        "value": "measured",
        "below": "below the limit",
        "above": "above the limit",
        "missing": "missing",
    }
)
_LAYOUTS = MappingProxyType(
    {"wide": "one row a subject, one column an occasion", "long": "one row a value"}
)
_DECIMALS = MappingProxyType({".": "point", ",": "comma"})


def structure(table: OccasionTable) -> dict[str, Any]:
    """Return what was understood of a table, JSON-safe.

    Parameters
    ----------
    table : OccasionTable
        A table as read.

    Returns
    -------
    dict
        Keys ``source``, ``marker``, ``unit``, ``resolution``, ``lower_limit``,
        ``upper_limit`` (the distinct limits), ``occasions``, ``subjects`` (states, and
        reasons of gaps, in natural order), ``counts``, ``n_complete``, ``replicates``,
        ``notes`` and ``ledger``.
    """
    ordered = table.in_natural_order()
    states = ordered.to_long()["state"].to_numpy().reshape(ordered.values.shape)
    result: dict[str, Any] = plain(
        {
            "source": ordered.source,
            "marker": ordered.marker,
            "unit": ordered.unit,
            "resolution": ordered.resolution,
            "lower_limit": _distinct(ordered.lower_limit),
            "upper_limit": _distinct(ordered.upper_limit),
            "occasions": ordered.occasions,
            "subjects": [
                {
                    "subject": subject,
                    "states": dict(zip(ordered.occasions, states[i], strict=True)),
                    "reasons": _reasons(ordered, i),
                }
                for i, subject in enumerate(ordered.subjects)
            ],
            "counts": {
                occasion: {state: Counter(states[:, j])[state] for state in _MARKS}
                for j, occasion in enumerate(ordered.occasions)
            },
            "n_complete": int((~ordered.missing.any(axis=1)).sum()),
            "replicates": ordered.replicates,
            "notes": ordered.notes,
            "ledger": ordered.ledger.to_dict(),
        }
    )
    return result


def _distinct(limits: Floats) -> Floats:
    return np.unique(limits[~np.isnan(limits)])


def _reasons(table: OccasionTable, row: int) -> dict[str, str]:
    gaps = np.flatnonzero(table.missing[row]).tolist()
    return {table.occasions[j]: str(table.tokens[row, j]) or "no reason given" for j in gaps}


# ── as text ───────────────────────────────────────────────────────────────────────────


def structure_text(found: Mapping[str, Any]) -> str:
    """Return the dict of :func:`structure` as text for a terminal."""
    blocks = (
        _head(found),
        _map(found),
        _counts(found),
        _replicates(found["replicates"]),
        _notes(found["notes"]),
        _ledger(found["ledger"]),
    )
    return _printable("\n\n".join(block for block in blocks if block))


def _head(found: Mapping[str, Any]) -> str:
    source, n = found["source"], len(found["subjects"])
    unit = f" ({found['unit']})" if found["unit"] else ""
    title = (
        f"{found['marker']}{unit}: {counted(n, 'subject')} × {len(found['occasions'])} occasions, "
        f"{found['n_complete']} complete"
    )
    facts = {
        "file": f"{source.get('file')}, {_kind(source)}",
        "layout": _LAYOUTS.get(source.get("layout", ""), ""),
        "unit": found["unit"] or "not known: say it with --unit",
        "decimal mark": _DECIMALS.get(source.get("decimal", ""), "none seen"),
        "limits": f"lower {_listed(found['lower_limit'])}, upper {_listed(found['upper_limit'])}",
        "reported in": f"steps of {found['resolution']:g}" if found["resolution"] else "",
    }
    return "\n".join(
        [title, *(_hanging(f"  {k.ljust(14)}", text) for k, text in facts.items() if text)]
    )


def _kind(source: Mapping[str, Any]) -> str:
    if source.get("sheet"):
        return f"sheet {source['sheet']!r}"
    return f"separated by {source.get('delimiter')}, {source.get('encoding')}"


def _listed(limits: Sequence[float]) -> str:
    return " and ".join(f"{limit:g}" for limit in limits) or "none"


def _map(found: Mapping[str, Any]) -> str:
    """Return one row a subject and one column an occasion, the reasons of gaps beside."""
    subjects, heads, key = found["subjects"], found["occasions"], []
    left = max(len(entry["subject"]) for entry in subjects)
    if left + sum(len(head) + 2 for head in heads) > _WIDTH:
        key = [f"[{j}] {occasion}" for j, occasion in enumerate(heads, start=1)]
        heads = [line.partition(" ")[0] for line in key]
    lines = ["  ".join([" " * left, *heads]).rstrip()]
    for entry in subjects:
        marks = [
            _MARKS[state].center(len(head))
            for head, state in zip(heads, entry["states"].values(), strict=True)
        ]
        gaps = ", ".join(f"{occasion}: {why}" for occasion, why in entry["reasons"].items())
        lines.append("  ".join([entry["subject"].ljust(left), *marks, gaps]).rstrip())
    marks = [f"{_MARKS[state]} {_WORDS[state]}" for state in _occurring(found)]
    return "\n".join([*lines, "", "   ".join(marks), *key])


def _occurring(found: Mapping[str, Any]) -> list[str]:
    """Return the states that occur; measured always."""
    counts = found["counts"].values()
    return [s for s in _MARKS if s == "value" or any(count[s] for count in counts)]


def _counts(found: Mapping[str, Any]) -> str:
    """Return one row an occasion, so that long labels do not make the table wide."""
    states = _occurring(found)
    rows = [
        [occasion, *(str(count[state]) for state in states)]
        for occasion, count in found["counts"].items()
    ]
    return aligned(["occasion", *(_WORDS[state] for state in states)], rows)


def _replicates(replicates: Sequence[Mapping[str, Any]]) -> str:
    """Return the sets of replicates that lie furthest apart."""
    if not replicates:
        return ""
    widest = sorted(replicates, key=lambda r: -(r["cv"] or 0))[:_MOST_REPLICATES]
    rows = [
        [
            f"{r['subject']}, {r['occasion']}",
            "; ".join(number(value) for value in r["values"]),
            number(r["mean"]),
            "–" if r["cv"] is None else percent(r["cv"]),
        ]
        for r in widest
    ]
    head = f"Replicates: {len(replicates)} sets, the widest {len(rows)} of them"
    return f"{head}\n{aligned(['sample', 'values', 'mean', 'CV'], rows)}"


def _notes(notes: Iterable[Mapping[str, Any]]) -> str:
    texts = [_hanging("- ", str(Note(**note))) for note in notes]
    return "\n".join(["Noticed, and left as it is", *texts]) if texts else ""


def _ledger(ledger: Mapping[str, Any]) -> str:
    counts = ledger["counts"]
    head = (
        f"Ledger: {counts['read']} cells read, {counts['values']} values, {counts['below']} below "
        f"and {counts['above']} above a limit, {counts['missing']} missing"
    )
    lines = [_hanging("- ", f"{line['step']}: {line['what']}") for line in ledger["lines"]]
    return "\n".join([_hanging("", head), *lines])


def problems_text(error: DataError) -> str:
    """Return every problem as a block: code and place, what was found, what to do."""
    head = str(error).partition("\n")[0]
    return _printable("\n\n".join([head, *map(_problem, error.problems)]))


def _problem(problem: Problem) -> str:
    place = {"row": problem.row, "column": problem.column, "text": problem.text}
    shown = [f"{name} {value!r}" for name, value in place.items() if value is not None]
    head = f"[{problem.code}] {', '.join(shown)}".rstrip()
    return "\n".join([head, _hanging("  ", problem.message), _action(problem.action)])


def _action(text: str) -> str:
    """Return what to do; options to be added stand on a line of their own, to be copied."""
    said, colon, options = text.partition(": --")
    if not colon or ". " in options:
        return _hanging("  → ", text)
    return "\n".join([_hanging("  → ", f"{said}:"), f"    --{options}"])


def _hanging(start: str, text: str) -> str:
    """Return `text` after `start`, further lines below it; words and quotes stay whole."""
    whole = re.sub(r"(?<!\w)'[^']*'", lambda quote: quote[0].replace(" ", _GLUE), text)
    filled = textwrap.fill(
        whole,
        width=_WIDTH,
        initial_indent=start,
        subsequent_indent=" " * len(start),
        break_long_words=False,
        break_on_hyphens=False,
    )
    return filled.replace(_GLUE, " ")


def _printable(text: str) -> str:
    """Replace control and formatting characters: a label must not move the cursor."""
    return "".join(
        "�" if unicodedata.category(c) in ("Cc", "Cf") and c != "\n" else c for c in text
    )
