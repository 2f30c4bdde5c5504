"""Results in the words of a paper; every number is taken from the document."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from robustrm._format import (
    Style,
    bounded,
    declared,
    interval_phrase,
    listing,
    number,
    p_cell,
    p_phrase,
    p_range,
    percent,
    span,
    statistic_phrase,
)
from robustrm.methods.registry import in_sentence
from robustrm.report.document import Document
from robustrm.report.sentences import (
    NULLS,
    Result,
    adjustment,
    completeness,
    is_exploratory,
    marker,
    moves,
    skipped,
    supporting_rows,
)
from robustrm.report.sheets import order_statistic, quartiles


def results_paragraph(document: Document, style: Style = "medical") -> str:
    """Return what was found, estimates first; the limits of the design close it."""
    parts = [
        completeness(document),
        _medians(document),
        _limits_found(document),
        *(_contrast(row, document, style) for row in document["primary"]["comparisons"]),
        _exploratory_p_values(document, style),
        _substitutes_found(document, style),
        *_overall(document, style),
        *_beside_contrasts(document, style),
        *_beside_overall(document, style),
        *_not_made(document),
        _design(document),
    ]
    return " ".join(part for part in parts if part)


def _medians(document: Document) -> str:
    parts = [
        f"{order_statistic(s, 'median')} [{quartiles(s)}] at {s['occasion']} (n = {s['n']})"
        for s in document["summary"]
        if s["n"]
    ]
    return f"The median [Q1, Q3] of {marker(document)} was {listing(parts, 12)}." if parts else ""


def _limits_found(document: Document) -> str:
    sides = {"below": "below the lower", "above": "above the upper"}
    measured = sum(s["n"] for s in document["summary"])
    parts = []
    for side, words in sides.items():
        count = sum(s[f"n_{side}"] for s in document["summary"])
        if count:
            limits = listing(_limits(document, side))
            share = percent(count / measured)
            parts.append(f"{count} of {measured} values ({share}) lay {words} limit ({limits})")
    return f"{listing(parts)}." if parts else ""


def _limits(document: Document, side: str) -> list[str]:
    key = "lower_limit" if side == "below" else "upper_limit"
    unit = f" {document['study']['unit']}" if document["study"]["unit"] else ""
    values = {cell[key] for cell in document["cells"] if cell["state"] == side}
    return [f"{declared(value)}{unit}" for value in sorted(values)]


def _contrast(row: Result, document: Document, style: Style) -> str:
    """Return one planned contrast; its p value follows apart when the study is exploratory."""
    result = row["result"]
    facts = [f"n = {result['n_subjects']}", *filter(None, [moves(document, row["label"])])]
    if not is_exploratory(document):
        facts.append(_p_values(row, document, style))
    estimate = result["estimate"]
    if estimate is None:
        reasons = [note["fact"] for note in result["notes"] if note["code"] in _WHY_NO_ESTIMATE]
        reason = f" {' '.join(reasons)}" if reasons else ""
        return f"No estimate is given for {row['label']} ({'; '.join(facts)}).{reason}"
    interval = interval_phrase(estimate["level"], estimate["low"], estimate["high"], style)
    return (
        f"The {_between(row, estimate)} was {_value(estimate)} ({'; '.join([interval, *facts])})."
    )


_WHY_NO_ESTIMATE = ("mostly beyond the limit", "not estimable", "no interval")


def _between(row: Result, estimate: Mapping[str, Any]) -> str:
    second, first = row["second"], row["first"]
    if estimate["scale"] == "log":
        return f"{estimate['name']} of {second} to {first}"
    return f"{estimate['name']} {second} − {first}"


def _value(estimate: Mapping[str, Any]) -> str:
    unit = f" {estimate['unit']}" if estimate["unit"] else ""
    return f"{number(estimate['value'])}{unit}"


def _with_interval(result: Result, style: Style) -> str:
    estimate = result["estimate"]
    interval = interval_phrase(estimate["level"], estimate["low"], estimate["high"], style)
    return f"{_value(estimate)} ({interval}; n = {result['n_subjects']})"


def _p_values(row: Result, document: Document, style: Style) -> str:
    result = row["result"]
    if result["p_value"] is None:
        return "no P value"
    text = f"{NULLS[result['null']]} {p_phrase(result['p_value'], style)}{_drawn(result, style)}"
    name = adjustment(document["primary"]) if row["role"] == "primary" else None
    if name is None or row["p_adjusted"] is None:
        return text
    adjusted = f"{name}-adjusted" if name[0].isupper() else "adjusted"
    return f"{text}, {adjusted} {p_phrase(row['p_adjusted'], style)}"


def _drawn(result: Result, style: Style) -> str:
    """Return the uncertainty of a Monte Carlo p value; empty where p is exact."""
    if result["p_interval"] is None:
        return ""
    low, high = (p_cell(end, style) for end in result["p_interval"])
    return f", 99% interval {low} to {high} from {result['draws']} draws"


def _exploratory_p_values(document: Document, style: Style) -> str:
    if not is_exploratory(document):
        return ""
    parts = [
        f"{row['label']}, {_p_values(row, document, style)} (n = {row['result']['n_subjects']})"
        for row in document["primary"]["comparisons"]
    ]
    return f"Exploratory P values: {'; '.join(parts)}."


def _substitutes_found(document: Document, style: Style) -> str:
    """Say how estimate and p move with the number that enters for a value below a limit."""
    parts = []
    for row in document["primary"]["comparisons"]:
        spread = row["result"]["details"].get("substitutes")
        if spread is not None:
            estimate = row["result"]["estimate"]
            moved = f"{estimate['name']} {_range(*spread['estimate'])}, " if estimate else ""
            over = row["result"]["details"].get("over_substitutes", spread)
            verb = "is unchanged" if over["reading"] == "unchanged" else "changes"
            low, high = spread["p_value"]
            p_values = p_range(low, high, style)
            name = adjustment(document["primary"])
            if name is not None and "p_adjusted" in over:
                lowest, highest = over["p_adjusted"]
                p_values += f", {name}-adjusted {p_range(lowest, highest, style)}"
            parts.append(f"{row['label']}: {moved}{p_values}, the reading {verb}")
    if not parts:
        return ""
    return f"With substitutes from near 0 to the limit, {'; '.join(parts)}."


def _range(low: float, high: float) -> str:
    return number(low) if number(low) == number(high) else span(low, high)


def _overall(document: Document, style: Style) -> list[str]:
    """Return one sentence for the overall test and for each of its companions."""
    label = "exploratory " if is_exploratory(document) else ""
    sentences = []
    for row in supporting_rows(document):
        found = _test(row, document, style, label)
        w = row["result"]["details"].get("kendall_w")
        agreement = f", Kendall's W = {bounded(w, style)}" if w is not None else ""
        title = in_sentence(row["title"])
        sentences.append(f"Over all occasions the {title} gave {found}{agreement}.")
    return sentences


def _test(row: Result, document: Document, style: Style, label: str) -> str:
    """Return statistic, degrees of freedom, p and n: ``F(1.62, 17.80) = 4.12, P = 0.037``."""
    result = row["result"]
    n = f"n = {result['n_subjects']}"
    if result["statistic"] is None:
        p = f", {p_phrase(result['p_value'], style)}" if result["p_value"] is not None else ""
        return f"no defined statistic{p} ({n})"
    found = statistic_phrase(result["statistic_name"], result["df"], result["statistic"])
    if result["null"] == "parametric":
        return f"{found}, {label}{p_phrase(result['p_value'], style)} ({n})"
    return f"{found}, {label}{_p_values(row, document, style)} ({n})"


def _beside_contrasts(document: Document, style: Style) -> list[str]:
    """Return the parametric estimates on the planned scale; the other scale is in the tables."""
    told = [
        (row, _with_interval(row["result"], style))
        for row in document["beside"]
        if row["role"] == "sensitivity" and row["result"]["estimate"]
    ]
    if not told:
        return []
    names = listing(sorted({row["result"]["estimand"] for row, _ in told}))
    listed = "; ".join(f"{row['label']}, {words}" for row, words in told)
    return [f"Beside these, under a normal model, the {names} was: {listed}."]


def _beside_overall(document: Document, style: Style) -> list[str]:
    label = "exploratory " if is_exploratory(document) else ""
    sentences = []
    for row in document["beside"]:
        result = row["result"]
        if result["method"] == "anova":
            sentences.append(
                f"Analysis of variance on the {result['scale']} scale ({row['role']}; "
                f"{result['estimand']}{_epsilon(result, style)}) gave "
                f"{_test(row, document, style, label)}."
            )
    return sentences


def _epsilon(result: Result, style: Style) -> str:
    epsilon = result["details"]["epsilon_gg"]
    if epsilon is None or result["n_occasions"] == 2:
        return ""
    return f"; Greenhouse-Geisser epsilon = {bounded(epsilon, style)}"


def _not_made(document: Document) -> list[str]:
    return [f"Not made: {sentence}" for sentence in skipped(document)]


def _design(document: Document) -> str:
    """Return the sentence that the declared design asks for; it stands last."""
    if document["study"]["design"] == "single-arm":
        return (
            "The study had no control group, so a change cannot be attributed to an intervention."
        )
    return "The order of the occasions is declared as randomised within subjects."
