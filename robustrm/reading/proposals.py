"""When no layout is declared: the options that seem to fit, to be checked and pasted."""

from __future__ import annotations

import re
import shlex
from collections import defaultdict
from collections.abc import Mapping, Sequence

from robustrm.cells import parse_cell
from robustrm.errors import DataError, Problem
from robustrm.reading.audit import is_arm, is_private
from robustrm.records.sheets import Sheet, option_list
from robustrm.table import natural_key

_ID = re.compile(
    r"\b(id|ids|subject|participant|patient|proband|person|subj|code|pid|animal|record)\b"
)
_OCCASION = re.compile(
    r"\b(occasion|visit|week|day|month|time|timepoint|session|phase|period|wave|date)\b"
)
_VALUE = re.compile(r"\b(value|result|conc|concentration|level|reading|measurement)\b")
_COVARIATE = re.compile(
    r"\b(age|sex|gender|bmi|height|weight|year|plate|batch|site|centre|center|replicate|rep|dose"
    r"|smoker|ethnicity|row|no|nr|number)\b"
)
_NUMERIC_SHARE = 0.6


def propose(sheet: Sheet) -> DataError:
    """Return the error that no layout is declared, with the options that seem to fit."""
    names = [h for h in sheet.headings if h and sheet.headings.count(h) == 1]
    numeric = [h for h in names if _is_numeric(sheet.texts(h))]
    subject = _subject(sheet, names, numeric)
    if subject is None:
        lines = ["--subject COLUMN --occasions 'FIRST,SECOND,...'"]
    elif len(set(sheet.texts(subject))) < len(sheet.rows):
        lines = _long_lines(sheet, names, numeric, subject)
    else:
        lines = _wide_lines(numeric, subject)
    problem = Problem(
        "layout",
        "which column holds the identifiers and which the occasions is not declared. The headings "
        f"are {', '.join(repr(name) for name in names)}.",
        f"Check this proposal and add it: {'  or  '.join(lines)}",
    )
    return DataError([problem], sheet.source)


def _words(heading: str) -> str:
    return re.sub(r"[\W_]+", " ", re.sub(r"(?<=[a-z])(?=[A-Z])", " ", heading)).casefold()


def _is_numeric(texts: Sequence[str]) -> bool:
    cells = [parse_cell(text) for text in texts if text]
    numbers = [c for c in cells if c.number is not None or c.reason in ("ambiguous", "word")]
    return bool(cells) and len(numbers) >= _NUMERIC_SHARE * len(cells)


def _subject(sheet: Sheet, names: Sequence[str], numeric: Sequence[str]) -> str | None:
    named = [h for h in names if _ID.search(_words(h)) and not is_private(h)]
    if named:
        return named[0]
    texts = [h for h in names if h not in numeric and all(sheet.texts(h)) and not is_private(h)]
    return texts[0] if texts else None


def _long_lines(
    sheet: Sheet, names: Sequence[str], numeric: Sequence[str], subject: str
) -> list[str]:
    others = [h for h in names if h != subject and not is_arm(h) and not is_private(h)]
    occasions = [h for h in others if _OCCASION.search(_words(h))] or [
        h for h in others if h not in numeric and 2 <= len(set(sheet.texts(h))) <= 20
    ]
    occasion = occasions[0] if occasions else "COLUMN"
    values = [h for h in numeric if h in others and h != occasion]
    values = (
        [h for h in values if _VALUE.search(_words(h))]
        or [h for h in values if not _COVARIATE.search(_words(h))]
        or ["COLUMN"]
    )
    labels = sorted({t for t in sheet.texts(occasion) if t}, key=natural_key) if occasions else []
    order = f" --order {option_list(labels)}" if labels else ""
    return [
        f"--subject {shlex.quote(subject)} --occasion {shlex.quote(occasion)} "
        f"--value {shlex.quote(value)}{order}"
        for value in values[:3]
    ]


def _wide_lines(numeric: Sequence[str], subject: str) -> list[str]:
    columns = [
        h for h in numeric if h != subject and not _COVARIATE.search(_words(h)) and not is_arm(h)
    ]
    families: Mapping[str, list[str]] = defaultdict(list)
    for heading in columns:
        families[re.sub(r"\d+(?=\D*$)", "#", heading)].append(heading)
    groups = [sorted(group, key=natural_key) for group in families.values() if len(group) > 1]
    chosen = groups or ([columns] if len(columns) > 1 else [["FIRST", "SECOND", "..."]])
    return [
        f"--subject {shlex.quote(subject)} --occasions {option_list(group)}" for group in chosen[:3]
    ]
