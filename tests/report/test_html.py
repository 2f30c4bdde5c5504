"""The page: valid, accessible, self-contained, and deaf to hostile labels."""

from __future__ import annotations

import itertools
import re
from html.parser import HTMLParser

import pytest

from robustrm.analysis import Analysis
from robustrm.figures import pictures
from robustrm.report.document import document
from robustrm.report.html import Drawing, page, record_lines

VOID = {"meta", "link", "br", "hr", "img", "input", "use", "path"}


class Reader(HTMLParser):
    """Reads tags, attributes and text, and insists that every tag is closed in order."""

    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.words: dict[str, list[str]] = {}

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        if tag not in VOID:
            assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        if self.open:
            self.words.setdefault(self.open[-1], []).append(data)

    def all(self, tag: str) -> list[dict[str, str | None]]:
        return [attributes for name, attributes in self.tags if name == tag]


def read(html: str) -> Reader:
    reader = Reader()
    reader.feed(html)
    reader.close()
    assert reader.open == []
    return reader


def drawings(analysis: Analysis) -> list[Drawing]:
    return [
        Drawing(picture.name, picture.title, picture.alt, picture.to_bytes("svg").decode())
        for picture in pictures(analysis)
    ]


def test_tags_are_closed_in_order(varied: Analysis):
    read(page(document(varied)))


def test_the_frame_of_the_page(analysis: Analysis):
    reader = read(page(document(analysis), drawings(analysis)))
    assert reader.all("html") == [{"lang": "en"}]
    assert reader.words["title"] == ["calprotectin (µg/g), 14 subjects on 4 occasions"]
    assert len(reader.all("h1")) == 1
    assert reader.all("a")[0] == {"class": "skip", "href": "#answer"}
    levels = [int(tag[1]) for tag, _ in reader.tags if re.fullmatch("h[1-6]", tag)]
    assert all(after - before <= 1 for before, after in itertools.pairwise(levels))


def test_the_sections_stand_in_their_order(analysis: Analysis):
    reader = read(page(document(analysis)))
    assert [section["id"] for section in reader.all("section")] == [
        "answer", "plan", "figures", "occasions", "overall", "beside", "effects", "limits",
        "inclusion", "paragraphs", "cautions", "record",
    ]  # fmt: skip
    targets = {a["href"].removeprefix("#") for a in reader.all("a") if a["href"]}
    assert targets == {section["id"] for section in reader.all("section")}


def test_tables_are_captioned_and_their_headings_scoped(analysis: Analysis):
    reader = read(page(document(analysis)))
    assert len(reader.all("table")) == len(reader.all("caption")) >= 10
    assert {th.get("scope") for th in reader.all("th")} == {"col", "row", "rowgroup"}
    assert all(td["data-label"] for td in reader.all("td"))


def test_identifiers_are_unique_and_references_hold(analysis: Analysis):
    html = page(document(analysis), drawings(analysis))
    reader = read(html)
    ids = [attributes["id"] for _, attributes in reader.tags if attributes.get("id")]
    assert len(ids) == len(set(ids))
    used = set(re.findall(r"url\(#([^)]+)\)", html)) | set(re.findall(r'href="#([^"]+)"', html))
    assert used <= set(ids)


def test_figures_are_inline_named_and_described(analysis: Analysis):
    drawn = drawings(analysis)
    reader = read(page(document(analysis), drawn))
    described = reader.all("svg")
    assert sorted(svg["aria-label"] or "" for svg in described) == sorted(d.alt for d in drawn)
    assert {svg["role"] for svg in described} == {"img"}
    assert all("viewbox" in svg for svg in described)
    assert len(reader.all("figcaption")) == len(drawn)


def test_nothing_is_loaded_and_no_script_runs(analysis: Analysis):
    html = page(document(analysis), drawings(analysis))
    reader = read(html)
    policy = [m["content"] for m in reader.all("meta") if m.get("http-equiv")]
    assert policy == ["default-src 'none'; style-src 'unsafe-inline'; img-src data:"]
    tags = {tag for tag, _ in reader.tags}
    assert tags & {"script", "link", "iframe", "object", "embed", "img", "form"} == set()
    addresses = set(re.findall(r'https?://[^"\s<]+', html))
    assert addresses <= {"http://www.w3.org/2000/svg", "http://www.w3.org/1999/xlink"}
    assert not any(name.startswith("on") for _, attributes in reader.tags for name in attributes)


def test_hostile_labels_are_text(hostile: Analysis):
    html = page(document(hostile), drawings(hostile))
    reader = read(html)
    assert {tag for tag, _ in reader.tags} & {"script", "b", "img"} == set()
    assert not any(name.startswith("on") for _, attributes in reader.tags for name in attributes)
    assert html.count("</style>") == 1 + len(reader.all("svg"))
    assert "{{ 7*7 }}" in html
    assert "&lt;b&gt;week 0&lt;/b&gt;" in html


def test_rows_on_another_footing_stand_apart(analysis: Analysis):
    held = document(analysis)
    block = re.search(r'<section id="beside".*?</section>', page(held), flags=re.DOTALL)
    assert block is not None
    shown = re.findall(r'<tr role="row" class="apart">(.*?)</tr>', block[0], flags=re.DOTALL)
    others = [*held["supplementary"], *held["beside"]]
    apart = [row for row in others if {"n", "scale"} & set(row["apart"])]
    assert len(shown) == len(apart) > len(analysis.primary)
    told = sorted(", ".join(row["apart"]) for row in apart)
    assert sorted(re.findall(r'data-label="Differs in"[^>]*>([^<]*)', "".join(shown))) == told


def test_the_same_analysis_gives_the_same_page(analysis: Analysis):
    one = page(document(analysis), drawings(analysis))
    assert page(document(analysis), drawings(analysis)) == one


def test_the_record_is_told_line_by_line():
    record = {"source": {"file": "a.csv", "rows": [1, 2]}, "seed": "7", "command": None,
              "columns": ["a", "b"]}  # fmt: skip
    assert record_lines(record) == [
        ("source: file", "a.csv"), ("source: rows", "[1, 2]"), ("seed", "7"),
        ("columns", "a and b"),
    ]  # fmt: skip


def luminance(colour: str) -> float:
    """Relative luminance, WCAG 2.2 definition."""
    parts = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    linear = [p / 12.92 if p <= 0.04045 else ((p + 0.055) / 1.055) ** 2.4 for p in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


@pytest.mark.parametrize("text", ["--ink", "--quiet", "--accent", "#45412f"])
@pytest.mark.parametrize("ground", ["--paper", "--sheet", "--shade", "--callout"])
def test_text_contrasts_with_its_ground(analysis: Analysis, text: str, ground: str):
    colours = dict(re.findall(r"(--\w+): (#[0-9a-f]{6});", page(document(analysis))))
    high, low = sorted((luminance(colours.get(c, c)) for c in (text, ground)), reverse=True)
    # 4.5:1 is the least for text of normal size, WCAG 2.2 success criterion 1.4.3
    assert (high + 0.05) / (low + 0.05) >= 4.5
