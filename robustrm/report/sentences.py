"""Sentences about a document that the terminal text, the paragraphs and the page share.

Each function writes one sentence, or one list of them, from the numbers of the document.
None decides anything, and none can say more than a within-subject comparison shows.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

from robustrm._format import Style, counted, listing, p_cell, restyled
from robustrm.methods.adjusting import TITLES
from robustrm.methods.registry import in_sentence
from robustrm.report.document import Document

Result = Mapping[str, Any]

CAUTIONS = (
    "These are statistics for research, not a diagnosis and not a medical device.",
    "A value that may need clinical follow-up goes to the responsible clinician under the "
    "study's protocol.",
    "Local rules, ethics approval and a qualified statistician come first.",
)

SCALES = {"log": "log scale (ratios)", "raw": "raw scale (differences)"}
NULLS = {
    "exact": "exact",
    "monte carlo": "Monte Carlo",
    "asymptotic": "asymptotic",
    "parametric": "parametric",
    "bootstrap": "bootstrap",
    "saddlepoint": "saddlepoint",
    "importance sampling": "importance sampling",
}
ROLES = {
    "primary": "the planned contrasts",
    "supporting": "overall tests that support them",
    "sensitivity": "the same question under other assumptions",
    "supplementary": "a question about another estimand",
}
FAMILIES = {
    "first": "each later occasion against the first",
    "all": "every pair of occasions",
    "successive": "each occasion against the one before it",
    "named": "the pairs named in the plan",
}

SUBSTITUTES = {
    "half": "half the limit",
    "root2": "the limit divided by √2",
    "limit": "the limit itself",
}
ZEROS = {
    "pratt": "zero differences ranked and then left out, after Pratt",
    "drop": "zero differences left out before ranking, after Wilcoxon",
}


@dataclass(frozen=True)
class Tested:
    """What one or several rows test, and what their estimate is about."""

    rows: str
    hypothesis: str
    estimand: str


@dataclass(frozen=True)
class Remark:
    """A note with the rows that it is about; no rows where it is about all."""

    rows: str
    text: str


def is_exploratory(document: Document) -> bool:
    """Say whether p values must carry their label."""
    return bool(document["study"]["purpose"] == "exploratory")


def marker(document: Document) -> str:
    """Return the marker with its unit."""
    study = document["study"]
    return f"{study['marker']} ({study['unit']})" if study["unit"] else str(study["marker"])


def size(document: Document) -> str:
    """Say how many subjects and occasions there are, and on which scale they are compared."""
    return f"{marker(document)}: {shape(document)}"


def shape(document: Document) -> str:
    """Say the same without the marker."""
    study = document["study"]
    subjects = counted(study["n_subjects"], "subject")
    occasions = counted(study["n_occasions"], "occasion")
    return (
        f"{subjects} × {occasions} ({listing(study['occasions'], 12)}), {SCALES[study['scale']]}."
    )


def completeness(document: Document) -> str:
    """Say how many subjects have every occasion."""
    study = document["study"]
    n, complete = study["n_subjects"], study["n_complete"]
    if complete == n:
        return f"All {n} subjects have every occasion." if n > 1 else "It has every occasion."
    return f"{complete} of {counted(n, 'subject')} {_has(complete)} every occasion."


def _has(count: int) -> str:
    return "has" if count == 1 else "have"


def question(document: Document) -> str:
    """Say what the plan asks."""
    plan, family = document["plan"], document["primary"]
    sides = "two-sided" if plan["sides"] == 2 else f"one-sided ({_direction(plan['direction'])})"
    comparisons = counted(len(family["comparisons"]), "comparison")
    return (
        f"Did {document['study']['marker']} shift within subjects, and by how much? "
        f"Planned: {FAMILIES[family['family']]}, {comparisons}, {sides}."
    )


def _direction(direction: str) -> str:
    return "second larger" if direction == "greater" else "second smaller"


def exploratory(document: Document) -> str:
    """Label the p values of an exploratory study; empty for a confirmatory one."""
    if not is_exploratory(document):
        return ""
    return "Exploratory study: estimates and intervals come first, and P values are exploratory."


def adjustment(family: Mapping[str, Any]) -> str | None:
    """Return the name of the adjustment, None where there is nothing to adjust."""
    if family["adjust"] == "none" or len(family["comparisons"]) < 2:
        return None
    return TITLES[family["adjust"]]


def adjusters(rows: Iterable[Result]) -> str:
    """Say how the adjusted p values of each method were adjusted; empty where none was."""
    used = {row["title"]: TITLES[row["adjust"]] for row in rows if row["adjust"] in _ADJUSTING}
    listed = listing([f"{in_sentence(title)} by {name}" for title, name in used.items()])
    return f"Adjusted P: {listed}." if listed else ""


_ADJUSTING = frozenset(TITLES) - {"none"}


# ── rows ──────────────────────────────────────────────────────────────────────────────────


def planned_rows(document: Document) -> list[Result]:
    """Return the planned contrasts and the overall test."""
    return [*document["primary"]["comparisons"], *_omnibus(document)]


def supporting_rows(document: Document) -> list[Result]:
    """Return the overall test and its companions."""
    rows = [*_omnibus(document), *document["supplementary"]]
    return [row for row in rows if row["role"] == "supporting"]


def other_rows(document: Document) -> list[Result]:
    """Return what is neither planned nor overall support."""
    rows = [*document["supplementary"], *document["beside"]]
    return [row for row in rows if row["role"] != "supporting"]


def _omnibus(document: Document) -> list[Result]:
    return [document["omnibus"]] if document["omnibus"] else []


def all_rows(document: Document) -> list[Result]:
    """Return every result of the document: planned ones first, parametric ones last."""
    return [*planned_rows(document), *document["supplementary"], *document["beside"]]


def tested(rows: Iterable[Result]) -> list[Tested]:
    """Say for every row which null it tests and what it estimates, alike rows together."""
    labels: dict[tuple[str, str, str, str], list[str]] = {}
    for row in rows:
        result = row["result"]
        key = (row["title"], result["scale"], result["hypothesis"], result["estimand"])
        who = labels.setdefault(key, [])
        if row["label"] not in who:  # one statistic may stand against two null distributions
            who.append(row["label"])
    return [
        Tested(f"{title}, {scale} scale ({listing(who, 20)})", hypothesis, estimand)
        for (title, scale, hypothesis, estimand), who in labels.items()
    ]


def remarks(rows: Iterable[Result], style: Style = "medical") -> list[Remark]:
    """Return the notes of the rows, alike notes together."""
    about: dict[str, list[Result]] = {}
    for row in rows:
        for note in row["result"]["notes"]:
            about.setdefault(note_text(note, style), []).append(row)
    return [Remark(_names(alike), text) for text, alike in about.items()]


def _names(rows: Iterable[Result]) -> str:
    """Name rows: planned contrasts by their occasions alone, others by method and scale too."""
    labels: dict[str, list[str]] = {}
    for row in rows:
        method = f"{row['title']}, {row['result']['scale']} scale, "
        labels.setdefault("" if row["role"] == "primary" else method, []).append(row["label"])
    return "; ".join(f"{method}{listing(who, 20)}" for method, who in labels.items())


def note_text(note: Mapping[str, str], style: Style = "medical") -> str:
    """Return a note as running text."""
    parts = (note["fact"], note["consequence"], note["action"])
    return restyled(" ".join(part for part in parts if part), style)


def family_notes(document: Document, style: Style = "medical") -> list[str]:
    """Return what a reader must know of the planned family as a whole."""
    family = [note_text(note, style) for note in document["primary"]["notes"]]
    return [*_partitions(document, style), *family]


def _partitions(document: Document, style: Style) -> list[str]:
    """Say which hypothesis decided each p value of a closed family, beside that of Holm."""
    told = []
    for row in document["primary"]["comparisons"]:
        details = row["result"]["details"]
        if "partition" in details:
            told.append(
                f"{row['label']}: the adjusted P is that of the hypothesis which joins "
                f"{details['partition']} ({NULLS[details['partition_null']]}); by Holm it would "
                f"be {p_cell(details['p_holm'], style)}."
            )
    return told


def moves(document: Document, label: str) -> str:
    """Return how many subjects fell and rose in one comparison; empty where not counted.

    Said with their number where the comparison rests on fewer, those with every occasion.
    """
    sizes = {
        row["label"]: row["result"]["n_subjects"] for row in document["primary"]["comparisons"]
    }
    found = [
        ("" if effect["n_subjects"] == sizes[label] else f"of {effect['n_subjects']} with both, ")
        + str(effect["remark"])
        for effect in document["effects"]
        if effect["label"] == label and effect["estimate"]["name"] == "probability of a fall"
    ]
    return "".join(found[:1])


def counts_instead(document: Document) -> list[str]:
    """Return the counts of falls and rises for every contrast that has no estimate."""
    return [
        f"No estimate for {row['label']}; counts stand instead: {found} "
        f"(n = {row['result']['n_subjects']})."
        for row in document["primary"]["comparisons"]
        if row["estimate"] is None and (found := moves(document, row["label"]))
    ]


def general_notes(document: Document, style: Style = "medical") -> list[str]:
    """Return what a reader must know of the analysis as a whole."""
    return [note_text(note, style) for note in document["notes"]]


def skipped(document: Document) -> list[str]:
    """Say which analyses could not be made, and why."""
    return [f"{skip['analysis']}: {skip['reason']}" for skip in document["skipped"]]
