"""The tables of a report with their numbers rounded, the same ones in the terminal and the page."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

from robustrm._format import (
    DASH,
    Style,
    bounded,
    declared,
    fixed,
    level_text,
    number,
    p_cell,
    span,
    statistic_phrase,
)
from robustrm.report.document import Document
from robustrm.report.sentences import (
    NULLS,
    Result,
    adjustment,
    all_rows,
    is_exploratory,
    supporting_rows,
)

ALL = "all occasions"
# What can be no larger than 1 in size: two decimals, and no leading zero in APA style.
_BOUNDED = (
    "probability of a fall",
    "probability of a larger value",
    "matched-pairs rank-biserial correlation",
    "relative effect",
    "Kendall's W",
)
# In units of spread: two decimals.
_STANDARDIZED = ("robust standardized difference", "Cohen's d_z", "Cohen's d_av")

# What a probability is the probability of, in a column of shifts.
_EVENTS = {"probability of a fall": "fall", "probability of a larger value": "larger"}


@dataclass(frozen=True)
class Line:
    """One row of a table; `apart` where it must not be read as equal to the rows above it."""

    cells: tuple[str, ...]
    apart: bool = False


@dataclass(frozen=True)
class Group:
    """Rows that belong together, with a heading where a table has several groups."""

    heading: str
    lines: tuple[Line, ...]


@dataclass(frozen=True)
class Sheet:
    """A table ready to be set.

    Parameters
    ----------
    caption : str
        What the table shows.
    headings : tuple of str
        One a column; the first column names the row.
    groups : tuple of Group
        The rows.
    words : frozenset of int
        Columns that hold words, set left; the others hold numbers.
    """

    caption: str
    headings: tuple[str, ...]
    groups: tuple[Group, ...]
    words: frozenset[int] = frozenset({0})

    @property
    def lines(self) -> tuple[Line, ...]:
        """All rows."""
        return tuple(line for group in self.groups for line in group.lines)

    def without(self, heading: str) -> Sheet:
        """Return the table without one of its columns."""
        gone = self.headings.index(heading)
        kept = [column for column in range(len(self.headings)) if column != gone]

        def shorter(group: Group) -> Group:
            lines = (
                replace(line, cells=tuple(line.cells[column] for column in kept))
                for line in group.lines
            )
            return replace(group, lines=tuple(lines))

        return replace(
            self,
            headings=tuple(self.headings[column] for column in kept),
            groups=tuple(shorter(group) for group in self.groups),
            words=frozenset(place for place, column in enumerate(kept) if column in self.words),
        )


def _sheet(
    caption: str,
    headings: Sequence[str],
    rows: Sequence[Sequence[str]],
    words: Sequence[int] = (0,),
) -> Sheet:
    lines = tuple(Line(tuple(row)) for row in rows)
    return Sheet(caption, tuple(headings), (Group("", lines),), frozenset(words))


# ── results ───────────────────────────────────────────────────────────────────────────────


def primary_sheet(document: Document, style: Style = "medical") -> Sheet:
    """Return the planned contrasts: estimate and interval first, then p and adjusted p."""
    family = document["primary"]
    name = adjustment(family)
    letter = "P" if style == "medical" else "p"
    together = " together" if family["intervals"] == "simultaneous" else ""
    interval = f"{level_text(family['level'])} CI{together}"
    headings = ["Comparison", "n", "Estimate", interval, "Level"]
    headings += [letter, *([f"{letter}, {name.split()[0]}"] if name else []), "Null distribution"]
    rows = []
    for row in family["comparisons"]:
        adjusted = [p_cell(row["p_adjusted"], style)] if name else []
        result = row["result"]
        cells = [
            row["label"],
            str(result["n_subjects"]),
            *estimate_cells(result["estimate"], style),
        ]
        cells += [level_cell(result["estimate"]), p_cell(result["p_value"], style), *adjusted]
        rows.append([*cells, NULLS[result["null"]]])
    return _sheet(_primary_caption(document), headings, rows, (0, len(headings) - 1))


def _primary_caption(document: Document) -> str:
    shown = [c["result"] for c in document["primary"]["comparisons"] if c["result"]["estimate"]]
    if not shown:
        what = "no estimate possible"
    else:
        estimate = shown[0]["estimate"]
        unit = f" ({estimate['unit']})" if estimate["unit"] else ""
        order = "second / first" if estimate["scale"] == "log" else "second − first"
        what = f"{estimate['name']}{unit}, {order}"
    return f"Planned contrasts: {what}{_exploratory_label(document)}"


def overall_sheet(document: Document, style: Style = "medical") -> Sheet:
    """Return the overall tests; no row where none could be made."""
    headings = ("Test", "Subjects × occasions", "Statistic", "P", "Null distribution")
    lines = [Line(_overall(row, style), _is_apart(row)) for row in supporting_rows(document)]
    caption = f"Overall tests, supporting the planned contrasts{_exploratory_label(document)}"
    return Sheet(caption, headings, (Group("", _apart_last(lines)),), frozenset({0, 4}))


def _overall(row: Result, style: Style) -> tuple[str, ...]:
    result = row["result"]
    return (
        row["title"],
        f"{result['n_subjects']} × {result['n_occasions']}",
        statistic(result),
        p_cell(result["p_value"], style),
        NULLS[result["null"]],
    )


def beside_contrasts_sheet(document: Document, style: Style = "medical") -> Sheet:
    """Return all results about two occasions, by what they compare and what they estimate.

    The planned estimand comes first, those on another footing last. Rows of one group have one
    estimand and one scale, so that no number is read against one of another kind.
    """
    headings = ("Analysis", "Role", "n", "Estimate", "CI", "P", "Adjusted P", "Differs in")
    groups: dict[tuple[str, str, str], list[Line]] = {}
    for row in all_rows(document):
        if row["label"] != ALL:
            result = row["result"]
            numbers = (*_told(result["estimate"], style), p_cell(result["p_value"], style))
            who = (row["title"], row["role"], str(result["n_subjects"]))
            cells = (*who, *numbers, _adjusted(row, style), _differs(row))
            key = (row["label"], result["estimand"], result["scale"])
            groups.setdefault(key, []).append(Line(cells, _is_apart(row)))
    labels = list(dict.fromkeys(label for label, _, _ in groups))
    ordered = sorted(
        groups.items(),
        key=lambda group: (labels.index(group[0][0]), all(line.apart for line in group[1])),
    )
    return Sheet(
        f"Two occasions: every analysis beside the planned one{_exploratory_label(document)}",
        headings,
        tuple(
            Group(f"{label}: {estimand}, {scale} scale", _apart_last(lines))
            for (label, estimand, scale), lines in ordered
        ),
        frozenset({0, 1, 7}),
    )


def beside_overall_sheet(document: Document, style: Style = "medical") -> Sheet:
    """Return all overall results, the planned one first."""
    headings = (
        "Analysis", "Role", "Estimand", "Scale", "n", "Statistic", "P", "Differs in",
    )  # fmt: skip
    lines = []
    for row in all_rows(document):
        if row["label"] == ALL:
            result = row["result"]
            numbers = (statistic(result), p_cell(result["p_value"], style))
            lines.append(Line((*_who(row), *numbers, _differs(row)), _is_apart(row)))
    return Sheet(
        f"All occasions: every analysis beside the planned one{_exploratory_label(document)}",
        headings,
        (Group("", _apart_last(lines)),),
        frozenset({0, 1, 2, 3, 7}),
    )


def _who(row: Result) -> tuple[str, str, str, str, str]:
    result = row["result"]
    n = str(result["n_subjects"])
    return row["title"], row["role"], result["estimand"], result["scale"], n


def _differs(row: Result) -> str:
    return ", ".join(row["apart"]) or DASH


def _is_apart(row: Result) -> bool:
    # Another n or scale is another footing; another estimand on the same footing is told in words.
    return bool({"n", "scale"} & set(row["apart"]))


def _apart_last(lines: Sequence[Line]) -> tuple[Line, ...]:
    return tuple(sorted(lines, key=lambda line: line.apart))


def _exploratory_label(document: Document) -> str:
    return "; P values are exploratory" if is_exploratory(document) else ""


def statistic(result: Result) -> str:
    """Return the statistic of a result with its degrees of freedom."""
    if result["statistic"] is None:
        return "not defined"
    return statistic_phrase(result["statistic_name"], result["df"], result["statistic"])


def _adjusted(row: Result, style: Style) -> str:
    if row["adjust"] in (None, "none") or row["p_adjusted"] is None:
        return DASH
    return p_cell(row["p_adjusted"], style)


def estimate_cells(estimate: Mapping[str, Any] | None, style: Style) -> tuple[str, str]:
    """Return an estimate with its unit, and its interval."""
    if estimate is None:
        return "not given", DASH
    if estimate["name"] in _BOUNDED:
        low, high = (bounded(estimate[end], style) for end in ("low", "high"))
        interval = DASH if estimate["low"] is None else f"{low} to {high}"
        return bounded(estimate["value"], style), interval
    if estimate["name"] in _STANDARDIZED:
        low, high = fixed(estimate["low"]), fixed(estimate["high"])
        return fixed(estimate["value"]), DASH if estimate["low"] is None else f"{low} to {high}"
    unit = {None: "", "%": "%"}.get(estimate["unit"], f" {estimate['unit']}")
    return f"{number(estimate['value'])}{unit}", span(estimate["low"], estimate["high"])


def _told(estimate: Mapping[str, Any] | None, style: Style) -> tuple[str, str]:
    """Return an estimate for a column of shifts, where a probability says that it is one."""
    value, interval = estimate_cells(estimate, style)
    is_fall = estimate is not None and estimate["name"] == "probability of a fall"
    return (f"{value} (fall)" if is_fall else value), interval


def level_cell(estimate: Mapping[str, Any] | None) -> str:
    """Return the level that an interval attains."""
    return DASH if estimate is None or estimate["level"] is None else level_text(estimate["level"])


# ── data ──────────────────────────────────────────────────────────────────────────────────


def summary_sheet(document: Document) -> Sheet:
    """Return what was measured at each occasion."""
    unit = f" ({document['study']['unit']})" if document["study"]["unit"] else ""
    headings = (
        "Occasion", "n", "Median [Q1, Q3]", "Range", "Geometric mean (×/÷ SD)",
        "20% trimmed mean", "Mean (SD)", "Skewness",
    )  # fmt: skip
    rows = [_summary(summary) for summary in document["summary"]]
    return _sheet(f"{document['study']['marker']}{unit} at each occasion", headings, rows)


def _summary(s: Mapping[str, Any]) -> list[str]:
    return [
        s["occasion"],
        str(s["n"]),
        f"{order_statistic(s, 'median')} [{quartiles(s)}]" if s["n"] else DASH,
        f"{order_statistic(s, 'smallest')} to {order_statistic(s, 'largest')}" if s["n"] else DASH,
        _with_spread(s["geometric_mean"], s["geometric_sd"]),
        number(s["trimmed_mean"]),
        _with_spread(s["mean"], s["sd"]),
        fixed(s["skewness"], 1),
    ]


def quartiles(summary: Mapping[str, Any]) -> str:
    """Return both quartiles of an occasion."""
    return f"{order_statistic(summary, 'q1')}, {order_statistic(summary, 'q3')}"


def order_statistic(summary: Mapping[str, Any], name: str) -> str:
    """Return a median, quartile or end of the range; beyond a limit as ``"< 0.3"``."""
    side = summary["beyond"][name]
    if side is None:
        return number(summary[name])
    sign, limit = ("<", "lower_limit") if side == "below" else (">", "upper_limit")
    return f"{sign} {declared(summary[limit])}"


def _with_spread(centre: float | None, spread: float | None) -> str:
    if centre is None:
        return DASH
    return f"{number(centre)} ({number(spread)})"


def occasions_sheet(document: Document) -> Sheet:
    """Return how many values, censored and missing, each occasion has."""
    headings = ("Occasion", "Measured", "Below a limit", "Above a limit", "Missing")
    rows = [
        [
            s["occasion"],
            str(s["n"] - s["n_below"] - s["n_above"]),
            str(s["n_below"]),
            str(s["n_above"]),
            str(s["n_missing"]),
        ]
        for s in document["summary"]
    ]
    return _sheet("Values beyond a limit and missing, by occasion", headings, rows)


def special_cells_sheet(document: Document) -> Sheet:
    """Return every cell that is beyond a limit or missing, with the reason as written."""
    rows = [
        [cell["subject"], cell["occasion"], _state(cell)]
        for cell in document["cells"]
        if cell["state"] != "value"
    ]
    headings = ("Subject", "Occasion", "What is there")
    return _sheet("Cells beyond a limit or missing, one by one", headings, rows, (0, 1, 2))


def _state(cell: Mapping[str, Any]) -> str:
    if cell["state"] == "missing":
        return "missing" if cell["token"] in ("", "missing") else f"missing ({cell['token']})"
    sign, limit = ("<", "lower_limit") if cell["state"] == "below" else (">", "upper_limit")
    return f"{sign} {declared(cell[limit])}"


def inclusion_sheets(document: Document) -> tuple[Sheet, Sheet]:
    """Return who is in which set, and which analyses use each set.

    Analyses with the same subjects share one column, named by a letter.
    """
    inclusion = document["inclusion"]
    patterns: dict[tuple[bool, ...], list[int]] = {}
    for column in range(len(inclusion["analyses"])):
        pattern = tuple(entry["included"][column] for entry in inclusion["subjects"])
        patterns.setdefault(pattern, []).append(column)
    names = [f"Set {_letters(place)}" for place in range(len(patterns))]
    matrix = [
        [entry["subject"], *("in" if pattern[i] else "left out" for pattern in patterns)]
        for i, entry in enumerate(inclusion["subjects"])
    ]
    sets = [
        [name, str(sum(pattern)), "; ".join(inclusion["analyses"][c]["analysis"] for c in columns)]
        for name, (pattern, columns) in zip(names, patterns.items(), strict=True)
    ]
    words = range(len(names) + 1)
    return (
        _sheet("Who is in which set", ("Subject", *names), matrix, tuple(words)),
        _sheet("Which analyses use each set", ("Set", "n", "Analyses"), sets, (0, 2)),
    )


def _letters(place: int) -> str:
    return chr(ord("A") + place) if place < 26 else str(place + 1)


def left_sheet(document: Document) -> Sheet:
    """Return who is left out of an analysis, with the reason."""
    reasons: dict[tuple[str, str], list[str]] = {}
    for left in document["inclusion"]["left"]:
        reasons.setdefault((left["subject"], left["reason"]), []).append(left["analysis"])
    order = {subject: i for i, subject in enumerate(document["study"]["subjects"])}
    rows = [
        [subject, reason, str(len(analyses))]
        for (subject, reason), analyses in sorted(reasons.items(), key=lambda kv: order[kv[0][0]])
    ]
    headings = ("Subject", "Reason", "Analyses left")
    return _sheet("Who is left out, and why", headings, rows, (0, 1))


def ledger_sheet(document: Document) -> Sheet:
    """Return everything that was done to the cells."""
    rows = [
        [line["step"], line["subject"] or DASH, line["occasion"] or DASH, str(line["cells"]),
         line["what"]]
        for line in document["ledger"]["lines"]
    ]  # fmt: skip
    headings = ("Step", "Subject", "Occasion", "Cells", "What was done")
    return _sheet("Ledger of the cells", headings, rows, (0, 1, 2, 4))
