"""The document as one self-contained page: no script, nothing from the network."""

from __future__ import annotations

import html
import json
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from robustrm._format import Style, listing, restyled
from robustrm.report import sentences, sheets
from robustrm.report.document import Document
from robustrm.report.effects_sheet import effects_sheet
from robustrm.report.methods_text import methods_paragraph
from robustrm.report.plan_text import origin
from robustrm.report.results_text import results_paragraph
from robustrm.report.sensitivity_sheets import sensitivity_sheets
from robustrm.sensitivity_analysis import PARTS, TITLES

ANSWER = "comparisons"  # the figure that stands beside the answer
SENSITIVITY = ("specifications", "without-one-", "missing-map")  # of the sensitivity section
METHODS = "methods-"  # how the names of those begin that stand beside the parametric results


@dataclass(frozen=True)
class Drawing:
    """A figure for the page.

    Parameters
    ----------
    name : str
        Name for identifiers: letters, digits and hyphens.
    title, alt : str
        Title, and what the figure shows in words; plain text.
    svg : str
        The figure as SVG text.
    """

    name: str
    title: str
    alt: str
    svg: str


def page(document: Document, drawings: Sequence[Drawing] = (), style: Style = "medical") -> str:
    """Return the whole report as the text of one HTML file.

    Parameters
    ----------
    document : dict
        From :func:`robustrm.report.document.document`.
    drawings : sequence of Drawing
        Figures, set inline.
    style : {"medical", "apa"}, default "medical"
        How p values are written.

    Returns
    -------
    str
        Every label is escaped; the page declares a policy under which nothing is loaded and
        no script runs.
    """
    import jinja2

    environment = jinja2.Environment(
        loader=jinja2.PackageLoader("robustrm.report", "templates"),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    environment.filters["inline"] = _inline
    template = environment.get_template("report.html.j2")
    return template.render(
        document=document,
        style=style,
        say=_said(document, style),
        sheet=_set(document, style),
        record=record_lines(document["record"]),
        answer_drawings=[d for d in drawings if d.name == ANSWER],
        sensitivity=_sensitivity(document, style),
        screen=_screen(document, style),
        sensitivity_drawings=[d for d in drawings if d.name.startswith(SENSITIVITY)],
        methods_drawings=[d for d in drawings if d.name.startswith(METHODS)],
        drawings=[
            d
            for d in drawings
            if d.name != ANSWER and not d.name.startswith((METHODS, *SENSITIVITY))
        ],
    )


def _said(document: Document, style: Style) -> dict[str, Any]:
    """Return every sentence of the page."""
    overall, others = sentences.supporting_rows(document), sentences.other_rows(document)
    return {
        "marker": sentences.marker(document),
        "question": sentences.question(document),
        "shape": sentences.shape(document),
        "completeness": sentences.completeness(document),
        "exploratory": sentences.exploratory(document),
        "origin": origin(document),
        "counts_instead": sentences.counts_instead(document),
        "planned_tests": sentences.tested(document["primary"]["comparisons"]),
        "planned_notes": sentences.remarks(document["primary"]["comparisons"], style),
        "family_notes": sentences.family_notes(document, style),
        "overall_tests": sentences.tested(overall),
        "overall_notes": sentences.remarks(overall, style),
        "roles": sentences.ROLES,
        "adjusters": sentences.adjusters(sentences.all_rows(document)),
        "other_tests": sentences.tested(others),
        "other_notes": sentences.remarks(others, style),
        "skipped": sentences.skipped(document),
        "general_notes": sentences.general_notes(document, style),
        "methods": methods_paragraph(document, style),
        "results": results_paragraph(document, style),
        "cautions": sentences.CAUTIONS,
    }


def _set(document: Document, style: Style) -> dict[str, sheets.Sheet]:
    """Return every table of the page."""
    matrix, sets = sheets.inclusion_sheets(document)
    return {
        "primary": sheets.primary_sheet(document, style),
        "overall": sheets.overall_sheet(document, style),
        "contrasts": sheets.beside_contrasts_sheet(document, style),
        "all_occasions": sheets.beside_overall_sheet(document, style),
        "summary": sheets.summary_sheet(document),
        "effects": effects_sheet(document, style),
        "occasions": sheets.occasions_sheet(document),
        "special": sheets.special_cells_sheet(document),
        "left": sheets.left_sheet(document),
        "matrix": matrix,
        "sets": sets,
        "ledger": sheets.ledger_sheet(document),
    }


def _screen(document: Document, style: Style) -> sheets.Sheet | None:
    """Return the table that says in one screen what holds; None without a sensitivity analysis."""
    if document["sensitivity"] is None:
        return None
    return sensitivity_sheets(document, style)["overview"]


def _sensitivity(document: Document, style: Style) -> list[dict[str, Any]]:
    """Return the parts of the sensitivity section: title, sentences, notes and table."""
    if document["sensitivity"] is None:
        return []
    tables = sensitivity_sheets(document, style)
    own = {"leave_one_out": "left_out", "missing": "gaps", "questions": "margins"}
    found = []
    for name in PARTS:
        held = document["sensitivity"][name]
        sheet = tables.get(own.get(name, ""))
        found.append(
            {
                "name": name.replace("_", "-"),
                "title": TITLES[name],
                "sentences": [restyled(text, style) for text in held["sentences"]],
                "notes": [sentences.note_text(note, style) for note in held["notes"]],
                "sheet": sheet if sheet is not None and sheet.lines else None,
            }
        )
    return found


def record_lines(record: Mapping[str, Any], prefix: str = "") -> list[tuple[str, str]]:
    """Return the record as pairs of name and text, nested blocks told by their path."""
    lines: list[tuple[str, str]] = []
    for key, value in record.items():
        name = f"{prefix}{key.replace('_', ' ')}"
        if isinstance(value, Mapping):
            lines.extend(record_lines(value, f"{name}: "))
        elif isinstance(value, list) and all(isinstance(item, str) for item in value):
            lines.append((name, listing(value, 20)))
        elif value is not None:
            lines.append((name, value if isinstance(value, str) else json.dumps(value)))
    return lines


def _inline(drawing: Drawing) -> str:
    """Return a figure as an element of the page: named, scalable, its identifiers its own."""
    svg = drawing.svg[drawing.svg.index("<svg") :]
    svg = re.sub(r"<!--.*?-->|<metadata>.*?</metadata>", "", svg, flags=re.DOTALL)
    svg = re.sub(r"<[^>]+>", lambda tag: _own_ids(tag[0], drawing.name), svg)
    svg = svg.replace(">*{", f">#figure-{drawing.name} *{{", 1)
    opening, rest = svg.split(">", 1)
    opening = re.sub(r'\s(?:width|height)="[^"]*"', "", opening)
    label = html.escape(drawing.alt)
    return f'{opening} role="img" aria-label="{label}">{rest.strip()}'


def _own_ids(tag: str, name: str) -> str:
    return re.sub(r'(\sid="|url\(#|href="#)', rf"\g<1>{name}-", tag)
