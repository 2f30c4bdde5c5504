"""Every sentence that a report can produce, against the phrases that none may hold.

The rules: no "significant" on its own, no causal verb, "not shown" is never "no effect", a
rank test says nothing of medians, and p is never 0.
"""

from __future__ import annotations

import re
from html import unescape

import pytest

from robustrm.analysis import Analysis
from robustrm.report.document import document
from robustrm.report.html import page
from robustrm.report.methods_text import methods_text
from robustrm.report.tables import csv_tables
from robustrm.report.text import text

BANNED = [
    r"(in|non-?)?significan(t|ce)\w*",
    r"\b(no|without|lack of) (effects?|differences?|evidence of)\b",
    r"\bnot? differ\b",
    r"\bmedians? (differs?|differed|chang\w+|fell|rose|decreas\w+|increas\w+)\b",
    r"\bdifference (in|of|between) (the )?medians?\b",
    r"\b(caus(e|es|ed|ing)|led to|leads to|result(s|ed) in|because of|thanks to)\b",
    r"\bdue to\b",
    r"\b(reduc|lower|decreas|increas|improv|suppress|rais|boost)(es|ed|ing)\b",
    r"\b(effective|efficacy|works|worked|benefit\w*|respon(der|ded|se to)\w*)\b",
    r"\b(prov(e|es|ed)|confirm(s|ed) that|demonstrat\w+|establish\w*)\b",
    r"\btrend(s|ed)? (to|toward)\w*\b",
    r"\b(marginal(ly)?|borderline|highly|very) (small|signif\w*)\b",
    r"\b[Pp] ?[=<] ?0?\.0+(?!\d)",
    r"\b[Pp] ?= ?0\b(?!\.)",
    r"\baccept\w* the null\b",
    r"(?-i:\b(nan|None|inf|Infinity)\b)",
]


def visible(html: str) -> str:
    """Return the text of a page, with what is read aloud for its figures."""
    body = re.sub(r"<style.*?</style>", " ", html, flags=re.DOTALL)
    spoken = " ".join(re.findall(r'aria-label="([^"]*)"', body))
    return unescape(re.sub(r"<[^>]+>", " ", body) + " " + spoken)


def everything(analysis: Analysis) -> dict[str, str]:
    held = document(analysis)
    shown = {f"text, {style}": text(held, style) for style in ("medical", "apa")}
    shown |= {f"paragraphs, {style}": methods_text(held, style) for style in ("medical", "apa")}
    shown |= {f"page, {style}": visible(page(held, style=style)) for style in ("medical", "apa")}
    return shown | {f"{name}.csv": table for name, table in csv_tables(held).items()}


def test_no_banned_phrase(varied: Analysis):
    found = [
        (where, match[0])
        for where, words in everything(varied).items()
        for pattern in BANNED
        for match in re.finditer(pattern, words, flags=re.IGNORECASE)
    ]
    assert found == []


@pytest.mark.parametrize("sentence", [
    "The change was significant.", "There was no effect.", "The medians differ.",
    "The diet lowered ferritin.", "Ferritin fell due to the diet.", "P = 0.000", "p < .000",
    "P = 0", "5 responders", "The fall was caused by training.", "The treatment worked.",
    "a trend towards lower values", "There was no difference.", "It proves a change.",
    "differences were nonsignificant", "The values did not differ.", "estimate nan",
])  # fmt: skip
def test_the_list_catches_what_it_is_for(sentence: str):
    assert any(re.search(pattern, sentence, flags=re.IGNORECASE) for pattern in BANNED)


def test_p_values_of_an_exploratory_study_are_labelled(varied: Analysis):
    shown = everything(varied)
    for where in ("text, medical", "paragraphs, medical", "page, medical"):
        assert ("xploratory" in shown[where]) == (varied.plan.purpose == "exploratory")


def test_the_usual_cautions_are_given(analysis: Analysis):
    for where in ("text, medical", "page, medical"):
        words = " ".join(everything(analysis)[where].split())
        assert "statistics for research, not a diagnosis" in words
        assert "goes to the responsible clinician under the study's protocol" in words
        assert "ethics approval and a qualified statistician come first" in words
