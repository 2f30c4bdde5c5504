"""What a file may hide: arms, several markers, units, names, jumps; and who was measured when."""

from __future__ import annotations

import math
import re
from collections import defaultdict
from collections.abc import Collection, Iterable, Mapping, Sequence
from typing import TYPE_CHECKING

import numpy as np

from robustrm._format import counted, listing, number
from robustrm.cells import clean, looks_like_unit, normal_unit
from robustrm.errors import Problem
from robustrm.ledger import LedgerLine
from robustrm.reading.layout import Framed
from robustrm.records import Findings
from robustrm.records.sheets import Sheet, option_list
from robustrm.results import Note
from robustrm.table import OccasionTable

if TYPE_CHECKING:
    import pandas as pd

_ARM = re.compile(
    r"((study|treatment|intervention|randomi[sz]ation|diet) ?)?(arm|group|grp|allocation|cohort)"
    r"|treat(ment)?|trt|allocat(ion|ed)|randomi[sz](ation|ed)|intervention"
)
_MARKER = re.compile(r"(bio)?markers?|analytes?|assays?|parameters?|test ?(name|code)?|tests")
_UNIT = re.compile(r"units?|(value|result|marker|analyte) ?units?")
_PRIVATE = re.compile(
    r"((first|last|full|given|family|sur|fore|middle|maiden|patient|subject|participant)"
    r" ?)?names?|initials?|dob|(date of )?birth( ?(date|day))?|birthda(y|te)|date of birth"
    r"|e ?mail|phone|telephone|mobile|address|street|post ?code|zip( ?code)?|nhs ?(no|number)?"
    r"|ssn|social security.*|mrn|medical record.*|insurance.*"
)
_BRACKETS = re.compile(r"[\[(]([^\[\]()]+)[\])]\s*$")

_JUMP, _STEADY = 8.0, 3.0


def _plain(heading: str) -> str:
    spaced = re.sub(r"(?<=[a-z])(?=[A-Z])", " ", heading)
    return re.sub(r"[\W_]+", " ", spaced).strip().casefold()


def is_arm(heading: str) -> bool:
    """Whether a heading reads like an arm of a study."""
    return _ARM.fullmatch(_plain(heading)) is not None


def is_marker(heading: str) -> bool:
    """Whether a heading reads like a column that names the marker."""
    return _MARKER.fullmatch(_plain(heading)) is not None


def without_unit(heading: str) -> str:
    """Return a heading without the unit in brackets at its end."""
    inside = _BRACKETS.search(heading)
    if inside and looks_like_unit(inside.group(1)):
        return clean(heading[: inside.start()])
    return clean(heading)


def is_private(heading: str) -> bool:
    """Whether a heading reads like a name, a birth date or another personal detail."""
    return _PRIVATE.fullmatch(_plain(heading)) is not None


def _columns(sheet: Sheet, pattern: re.Pattern[str], used: Collection[str]) -> list[str]:
    return [
        heading
        for heading in dict.fromkeys(sheet.headings)
        if heading
        and heading not in used
        and sheet.headings.count(heading) == 1
        and pattern.fullmatch(_plain(heading))
    ]


def _distinct(texts: Iterable[str]) -> list[str]:
    return list(dict.fromkeys(text for text in texts if text))


# ── several groups in one file ────────────────────────────────────────────────────────


def pooled(sheet: Sheet, used: Collection[str]) -> list[Problem]:
    """Return problems of columns that split the rows in use: arms, or several markers."""
    problems = []
    for heading in _columns(sheet, _ARM, used):
        values = _distinct(sheet.texts(heading))
        if len(values) > 1:
            problems.append(
                Problem(
                    "arm",
                    f"column {heading!r} has {len(values)} values ({listing(values)}). A "
                    "within-subject analysis would pool the arms.",
                    f"Choose one arm: {_where(heading, values)}. If it is no arm, rename or "
                    "remove the column.",
                    column=heading,
                )
            )
    for heading in _columns(sheet, _MARKER, used):
        values = _distinct(sheet.texts(heading))
        if len(values) > 1:
            problems.append(
                Problem(
                    "markers",
                    f"column {heading!r} has {len(values)} values ({listing(values)}): one table "
                    "holds one marker.",
                    f"Choose one: {_where(heading, values)}",
                    column=heading,
                )
            )
    return problems


def _where(heading: str, values: Sequence[str]) -> str:
    return " or ".join(f"--where {option_list([f'{heading}={value}'])}" for value in values[:3])


def in_two_arms(sheet: Sheet, subject: str, used: Collection[str]) -> list[Problem]:
    """Return a problem for every identifier that stands in more than one arm."""
    problems = []
    ids = sheet.texts(subject)
    for heading in _columns(sheet, _ARM, used):
        arms: Mapping[str, dict[str, int]] = defaultdict(dict)
        for name, arm, row in zip(ids, sheet.texts(heading), sheet.rows, strict=True):
            if name and arm:
                arms[name].setdefault(arm, row.number)
        problems += [
            Problem(
                "two arms",
                f"{name!r} stands in {len(seen)} arms: "
                f"{listing([f'{arm} (row {row})' for arm, row in seen.items()])}.",
                "Correct the identifier or the arm.",
                list(seen.values())[-1],
                heading,
                list(seen)[-1],
            )
            for name, seen in arms.items()
            if len(seen) > 1
        ]
    return problems


# ── units ─────────────────────────────────────────────────────────────────────────────


def settle_unit(
    framed: Framed, columns: Sequence[str], declared: str | None, found: Findings
) -> str | None:
    """Return the unit of the values: declared, or the only one that the file states."""
    stated = _stated_units(framed, columns)
    spellings = {unit.casefold(): unit for unit, _, _ in reversed(stated)}
    if len(spellings) > 1:
        shown = listing([repr(unit) for unit in dict.fromkeys(unit for unit, _, _ in stated)])
        odd = next(item for item in stated if item[0].casefold() != stated[0][0].casefold())
        found.problems.append(
            Problem(
                "mixed units",
                f"the values are in different units: {shown}.",
                "Convert them to one unit in the file, or choose rows of one unit with --where.",
                odd[1],
                odd[2],
                odd[0],
            )
        )
        return declared
    unit = next(iter(spellings.values()), None)
    if declared is None:
        if unit is not None:
            what = f"unit {unit!r} taken from row {stated[0][1]}, column {stated[0][2]!r}"
            found.lines.append(LedgerLine("unit", what))
        return unit
    if unit is not None and normal_unit(declared).casefold() != unit.casefold():
        found.problems.append(
            Problem(
                "unit",
                f"the unit is declared as {declared!r} and the file says {unit!r}.",
                "Correct --unit or the file; nothing is converted.",
                stated[0][1],
                stated[0][2],
                unit,
            )
        )
    return declared


def _stated_units(framed: Framed, columns: Sequence[str]) -> list[tuple[str, int, str]]:
    """Return (unit, row, column) of every unit stated for the columns of values."""
    sheet = framed.sheet
    stated = [(*framed.units[name], name) for name in columns if name in framed.units]
    for name in columns:
        inside = _BRACKETS.search(name)
        if inside and looks_like_unit(inside.group(1)):
            stated.append((normal_unit(inside.group(1)), framed.top, name))
    for heading in _columns(sheet, _UNIT, columns):
        stated += [
            (normal_unit(text), row.number, heading)
            for text, row in zip(sheet.texts(heading), sheet.rows, strict=True)
            if text
        ]
    return stated


# ── personal details ──────────────────────────────────────────────────────────────────


def private_notes(sheet: Sheet, subject: str) -> list[Note]:
    """Return notes about columns that look personal: they are not read into the table."""
    notes = []
    others = [h for h in sheet.headings if h and h != clean(subject) and is_private(h)]
    if others:
        notes.append(
            Note(
                "personal columns",
                f"Columns that look like names or other personal details were not copied: "
                f"{listing([repr(heading) for heading in others])}.",
            )
        )
    if is_private(subject):
        notes.append(
            Note(
                "personal identifiers",
                f"The identifiers are taken from {subject!r}, which looks like names.",
                "They appear in results and figures.",
                "Use study codes instead.",
            )
        )
    return notes


# ── the table ─────────────────────────────────────────────────────────────────────────


def jumps(table: OccasionTable) -> list[Note]:
    """Return a note for every value far from the subject's own steady other values.

    Far is 8 times, or an eighth of, the median of the others, which themselves stay within a
    factor of 3. A wrong unit or a dilution not multiplied back looks like that, and so does a
    true rise; the value is not changed.
    """
    measured = ~table.missing & ~table.censored & (table.values > 0)
    notes = []
    for subject in table.ids:
        i = table.subjects.index(subject)
        columns = np.flatnonzero(measured[i]).tolist()
        for j in columns:
            others = [float(table.values[i, other]) for other in columns if other != j]
            ratio = _ratio_to_steady(float(table.values[i, j]), others)
            if ratio is not None:
                notes.append(_jump(subject, table.occasions[j], table.values[i, j], ratio))
    return notes


def _ratio_to_steady(value: float, others: Sequence[float]) -> float | None:
    if len(others) < 2 or max(others) > _STEADY * min(others):
        return None
    ratio = value / float(np.median(others))
    return ratio if abs(math.log(ratio)) >= math.log(_JUMP) else None


def _jump(subject: str, occasion: str, value: float, ratio: float) -> Note:
    return Note(
        "jump",
        f"{subject} at {occasion} ({number(float(value))}) is {number(ratio)} times the median of "
        f"the subject's other values, which stay within a factor of {_STEADY:g}.",
        "A unit or a dilution? The value is kept as it is.",
        "Check it against the laboratory's report.",
    )


def state_map(table: OccasionTable) -> pd.DataFrame:
    """Return what there is of every subject on every occasion, one row a subject.

    Returns
    -------
    DataFrame
        ``"value"``, ``"below"``, ``"above"``, or why the cell is missing (``"missing"`` where
        no reason is written); subjects in natural order as the index.
    """
    import pandas as pd

    ordered = table.in_natural_order()
    states = np.full(ordered.values.shape, "value", dtype=object)
    states[ordered.below], states[ordered.above] = "below", "above"
    states[ordered.missing] = [token or "missing" for token in ordered.tokens[ordered.missing]]
    index = pd.Index(list(ordered.subjects), name="subject", dtype=object)
    return pd.DataFrame(states, index=index, columns=list(ordered.occasions))


def audit_lines(table: OccasionTable) -> list[str]:
    """Return the counts of a table as sentences, one an occasion."""
    return [
        f"{occasion}: {counted(int((~table.missing[:, j]).sum()), 'cell')} of "
        f"{table.n_subjects}, {int(table.below[:, j].sum())} below and "
        f"{int(table.above[:, j].sum())} above a limit"
        for j, occasion in enumerate(table.occasions)
    ]
