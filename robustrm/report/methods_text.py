"""Methods and Results in the words of a paper; every number is taken from the document.

Drafts for the authors to check: what the analysis did and found, in the usual order. No
sentence can say more than a within-subject comparison shows. ``style="medical"`` writes
``P = 0.013``; ``style="apa"`` writes ``p = .013`` and drops the leading zero of every
quantity that cannot exceed 1.
"""

from __future__ import annotations

from robustrm._format import (
    Style,
    counted,
    level_text,
    listing,
    percent,
    restyled,
)
from robustrm.methods.registry import in_sentence
from robustrm.methods.registry import method as registered
from robustrm.report.document import Document
from robustrm.report.results_text import results_paragraph
from robustrm.report.sentences import (
    FAMILIES,
    NULLS,
    SUBSTITUTES,
    ZEROS,
    adjustment,
    all_rows,
    is_exploratory,
    marker,
    planned_rows,
)


def methods_text(document: Document, style: Style = "medical") -> str:
    """Return both paragraphs under their headings, one line a paragraph, for pasting."""
    return (
        f"Methods\n\n{methods_paragraph(document, style)}\n\n"
        f"Results\n\n{results_paragraph(document, style)}\n"
    )


def methods_paragraph(document: Document, style: Style = "medical") -> str:
    """Return what was done, in the order of a statistical-methods section."""
    parts = [
        _measured(document),
        _scale(document),
        _contrasts(document),
        _null_distributions(document),
        _adjusted(document),
        _estimates(document),
        _overall_method(document),
        _companions_method(document),
        _beside_method(document),
        _limits_rule(document),
        _missing_rule(document),
        "The analysis removed no value as an outlier.",
        restyled(document["attainable"]["sentence"], style),
        _exploratory_rule(document),
        _software(document),
    ]
    return " ".join(part for part in parts if part)


def _measured(document: Document) -> str:
    study = document["study"]
    occasions = listing(study["occasions"], 12)
    return (
        f"{marker(document)} was measured in the same subjects on {study['n_occasions']} "
        f"occasions ({occasions})."
    )


def _scale(document: Document) -> str:
    if document["study"]["scale"] == "log":
        return "Values were compared as ratios, on the log scale."
    return "Values were compared as differences, on the raw scale."


def _contrasts(document: Document) -> str:
    plan, family = document["plan"], document["primary"]
    title = in_sentence(registered(plan["pair"]).title)
    sides = "two-sided" if plan["sides"] == 2 else "one-sided"
    rule = f", {ZEROS[plan['zeros']]}" if plan["pair"] == "signed_rank" else ""
    comparisons = counted(len(family["comparisons"]), "comparison")
    towards = "" if plan["sides"] == 2 else f" towards {_towards(plan['direction'])} values"
    return (
        f"The planned primary analysis compared {FAMILIES[family['family']]} ({comparisons}) "
        f"by the {title} ({sides}{towards}{rule})."
    )


def _towards(direction: str) -> str:
    return "larger" if direction == "greater" else "smaller"


def _null_distributions(document: Document) -> str:
    compared = {row["result"]["null"] for row in document["primary"]["comparisons"]}
    if compared == {"asymptotic"}:
        row = document["omnibus"]
        overall = f", that of the overall test is {NULLS[row['result']['null']]}" if row else ""
        return f"P values of the planned comparisons are asymptotic{overall}."
    used = {row["result"]["null"] for row in planned_rows(document)}
    parts = []
    if "exact" in used:
        parts.append("exact, given the observed ties and zeros")
    if "monte carlo" in used:
        draws = max(row["result"]["draws"] or 0 for row in planned_rows(document))
        parts.append(f"from up to {draws} random arrangements where an exact one is too costly")
    return f"Null distributions are {listing(parts)}." if parts else ""


def _adjusted(document: Document) -> str:
    family = document["primary"]
    name = adjustment(family)
    level = percent(1 - family["level"])
    if name is None:
        return f"The level of the tests was {level}."
    if family["adjust"] == "single-step":
        return (
            "P values were adjusted over all pairs of occasions by the studentized range, at level "
            f"{level}."
        )
    m = len(family["comparisons"])
    return (
        f"P values were adjusted over the {m} comparisons by the {name} method, at level {level}."
    )


def _estimates(document: Document) -> str:
    family = document["primary"]
    shown = [c["estimate"] for c in family["comparisons"] if c["estimate"]]
    if not shown:
        return ""
    name, kind = shown[0]["name"], shown[0]["kind"]
    held = f"{'at least ' if kind == 'exact' else ''}{level_text(family['level'])}"
    if family["intervals"] == "simultaneous":
        return f"The estimate is the {name}, with {kind} intervals that together hold {held}."
    unadjusted = " and are not adjusted for their number" if len(family["comparisons"]) > 1 else ""
    return f"The estimate is the {name}, with {kind} intervals that hold {held} each{unadjusted}."


def _overall_method(document: Document) -> str:
    row = document["omnibus"]
    if row is None:
        return ""
    return (
        f"The {in_sentence(row['title'])} over all occasions supports the planned comparisons, "
        f"which are reported whatever it says. Its null hypothesis: "
        f"{_uncapped(row['result']['hypothesis'])}"
    )


def _companions_method(document: Document) -> str:
    titles = dict.fromkeys(in_sentence(row["title"]) for row in document["supplementary"])
    return f"Beside these, by default: {listing([*titles])}." if titles else ""


def _beside_method(document: Document) -> str:
    roles = {row["role"]: row["result"]["scale"] for row in document["beside"]}
    if not roles:
        return ""
    told = {
        "sensitivity": "as sensitivity analyses, which assume normal residuals",
        "supplementary": "as supplementary analyses, which have another estimand",
    }
    scales = [f"on the {roles[role]} scale {told[role]}" for role in told if role in roles]
    return (
        "Within-subject analysis of variance (Greenhouse-Geisser correction) and paired t tests "
        f"(Bonferroni) stand beside, {listing(scales)}."
    )


def _limits_rule(document: Document) -> str:
    given_up = any(note["code"] == "given up" for note in document["notes"])
    below = given_up or any(s["n_below"] for s in document["summary"])
    above = any(s["n_above"] for s in document["summary"])
    if not below and not above:
        return ""
    if not below:
        return (
            "Values above a limit were ranked beyond all measured ones; where a size was needed, "
            "the limit itself entered."
        )
    rule = SUBSTITUTES[document["plan"]["substitute"]]
    repeated = ", and the signed-rank comparisons were repeated with other substitutes"
    return (
        "Values beyond a limit were ranked beyond all measured ones; where a size was needed, "
        f"{rule} entered for a value below it"
        f"{repeated if document['plan']['pair'] == 'signed_rank' else ''}."
    )


def _missing_rule(document: Document) -> str:
    if document["study"]["n_complete"] == document["study"]["n_subjects"]:
        return ""
    if document["plan"]["adjust"] in ("closed", "single-step"):
        return "Planned comparisons use the subjects with every occasion; no value was filled in."
    return (
        "Each comparison uses all subjects with both occasions, overall tests those with every "
        "occasion; no value was filled in."
    )


def _exploratory_rule(document: Document) -> str:
    if not is_exploratory(document):
        return ""
    return "The study is exploratory: estimates and intervals come first, P values are exploratory."


def _software(document: Document) -> str:
    versions = dict(document["record"].get("versions", {}))
    own = f"robustrm {versions.pop('robustrm', '')}".strip()
    others = f" ({', '.join(f'{name} {v}' for name, v in versions.items())})" if versions else ""
    drawn = any(row["result"]["null"] == "monte carlo" for row in all_rows(document))
    seed = f", random seed {document['record']['seed']}" if drawn else ""
    return f"Computed with {own}{others}{seed}."


def _uncapped(sentence: str) -> str:
    return f"{sentence[:1].lower()}{sentence[1:]}"
