"""The pages tell what the package does: lists in the docs are compared with the source."""

from __future__ import annotations

import ast
import dataclasses
import importlib.util
import re
import tomllib
from collections.abc import Iterator
from importlib.resources import files
from pathlib import Path
from types import ModuleType

import pytest

import robustrm as rm
from robustrm.methods.registry import FAMILIES, METHODS

ROOT = Path(__file__).resolve().parents[1]
DOCS = ROOT / "docs"
PAGES = [ROOT / "README.md", ROOT / "DEVELOPERS.md", *sorted(DOCS.rglob("*.md"))]
SOURCES = sorted((ROOT / "robustrm").rglob("*.py"))
NAMES = [page.relative_to(ROOT).as_posix() for page in PAGES]


def text(name: str) -> str:
    return (ROOT / name).read_text(encoding="utf-8")


def section(page: str, heading: str) -> str:
    """Return what stands under a heading of the second level."""
    found = re.search(rf"^## {re.escape(heading)}\n(.*?)(?=^## |\Z)", text(page), re.M | re.S)
    assert found, f"{page} has no section {heading!r}"
    return found[1]


def first_column(table: str) -> list[str]:
    """Return the code in the first cell of every row of a table."""
    return re.findall(r"^\| `([^`]+)`", table, re.M)


# ── one page a method ─────────────────────────────────────────────────────────────────────

HEADINGS = (
    "When to use", "Formula", "Null hypothesis", "Estimand",
    "Ties, zeros, limits, missing values", "Small samples", "What not to conclude",
    "Worked example",
)  # fmt: skip


@pytest.mark.parametrize("method", METHODS, ids=lambda method: method.name)
def test_every_method_has_its_page(method):
    page = text(f"docs/methods/{method.name}.md")
    call = f"rm.{method.name}("
    if method.kind == "family":
        call = f'rm.follow_up(table, method="{method.name}"'
    assert [h for h in HEADINGS if f"\n## {h}\n" not in page] == []
    assert re.search(r"\n## Sources?\n", page)
    assert call in page
    assert ">>> " in page


@pytest.mark.parametrize("method", METHODS, ids=lambda method: method.name)
def test_a_page_asks_the_question_of_its_method(method):
    page = text(f"docs/methods/{method.name}.md")
    question = re.search(r"\*\*Question\.\*\* (.+?)\n\n", page, re.S)
    assert question
    assert " ".join(question[1].split()) == method.question


def test_the_start_page_leads_to_every_page():
    linked = set(links("docs/index.md"))
    # fragments of the changelog, TOPIC.KIND.md, live until the next release
    inner = [p for p in DOCS.rglob("*.md") if p.name != "index.md" and "." not in p.stem]
    assert [p.name for p in inner if p.relative_to(DOCS).as_posix() not in linked] == []


# ── links ─────────────────────────────────────────────────────────────────────────────────


def prose(name: str) -> str:
    """Return a page without its code."""
    return re.sub(r"`[^`\n]*`", "", re.sub(r"^ *```.*?^ *```", "", text(name), flags=re.M | re.S))


def links(name: str) -> list[str]:
    return re.findall(r"\]\(([^)\s]+)\)", prose(name))


def anchors(page: Path) -> set[str]:
    """Return the anchors of a page, as GitHub makes them of headings."""
    titles = re.findall(r"^#+ (.+)$", page.read_text(encoding="utf-8"), re.M)
    plain = (re.sub(r"[^\w\- ]", "", title.strip().lower()) for title in titles)
    return {title.replace(" ", "-") for title in plain}


def dead_links(name: str) -> Iterator[str]:
    here = ROOT / name
    for link in links(name):
        if re.match(r"https?://|mailto:", link):
            continue
        path, _, anchor = link.partition("#")
        page = here if not path else (here.parent / path).resolve()
        known = page.exists() and page.is_relative_to(ROOT)
        if not known or (anchor and page.suffix == ".md" and anchor not in anchors(page)):
            yield link


@pytest.mark.parametrize("name", NAMES)
def test_every_link_leads_somewhere(name: str):
    assert list(dead_links(name)) == []


# ── the plan ──────────────────────────────────────────────────────────────────────────────


def test_the_plan_page_has_every_key_with_its_default():
    rows = re.findall(
        r"^\| `(\w+)` \| (.+?) \| .+ \|$", section("docs/guide/plan.md", "Keys"), re.M
    )
    told = {
        key: None if default == "none" else tomllib.loads(f"x = {default.strip('`')}")["x"]
        for key, default in rows
    }
    assert told == rm.Plan().to_dict()
    assert [key for key, _ in rows] == [field.name for field in dataclasses.fields(rm.Plan)]


def test_every_choice_of_the_plan_is_named():
    keys = section("docs/guide/plan.md", "Keys")
    rows = dict(re.findall(r"^\| `(\w+)` \|(.+)\|$", keys, re.M))
    plan = importlib.import_module("robustrm.plan.plan")
    choices = {
        **plan._CHOICES,
        "direction": ("greater", "less"),
        "pair": (*plan.methods_for("pair"), *plan.methods_for("family")),
        "omnibus": plan.methods_for("omnibus"),
        "contrasts": FAMILIES,
    }
    missing = [
        (key, choice)
        for key, options in choices.items()
        for choice in options
        if f'"{choice}"' not in rows[key]
    ]
    assert missing == []


def test_the_plan_file_of_the_page_is_a_plan(tmp_path: Path):
    blocks = re.findall(r"```toml\n(.*?)```", text("docs/guide/plan.md"), re.S)
    assert blocks
    for block in blocks:
        (tmp_path / "plan.toml").write_text(block, encoding="utf-8")
        rm.Plan.load(tmp_path / "plan.toml")


# ── codes: read from the calls that make a problem or a note ──────────────────────────────


def calls(tree: ast.AST) -> Iterator[tuple[str, ast.Call]]:
    for node in ast.walk(tree):
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name | ast.Attribute):
            name = node.func.id if isinstance(node.func, ast.Name) else node.func.attr
            yield name, node


def makers(trees: list[ast.Module], kind: str) -> dict[str, int]:
    """Return the class `kind` and the functions that pass a code on, with the code's position."""
    found = {kind: 0}
    for tree in trees:
        for node in ast.walk(tree):
            if not isinstance(node, ast.FunctionDef):
                continue
            parameters = [argument.arg for argument in node.args.args]
            if "code" in parameters and any(name == kind for name, _ in calls(node)):
                found[node.name] = parameters.index("code")
    return found


def codes(kind: str, sources: list[Path]) -> set[str]:
    """Return every literal code with which `sources` make a problem or a note."""
    trees = [ast.parse(path.read_text(encoding="utf-8")) for path in sources]
    known = makers(trees, kind)
    found: set[str] = set()
    for tree in trees:
        for name, call in calls(tree):
            if name not in known:
                continue
            position = known[name]
            given = [word.value for word in call.keywords if word.arg == "code"]
            given += call.args[position : position + 1]
            found |= {
                value.value
                for value in given
                if isinstance(value, ast.Constant) and isinstance(value.value, str)
            }
    return found


def of_rooms(*rooms: str) -> list[Path]:
    return [path for path in SOURCES if path.relative_to(ROOT / "robustrm").parts[0] in rooms]


def test_every_problem_code_is_on_the_reading_page():
    told = first_column(section("docs/guide/reading.md", "What stops a run, and what to do"))
    assert sorted(told) == sorted(codes("Problem", SOURCES))


def test_every_note_of_reading_is_on_the_reading_page():
    told = first_column(section("docs/guide/reading.md", "What is noticed and left as it is"))
    assert sorted(told) == sorted(codes("Note", of_rooms("reading", "records", "table")))


def test_every_note_of_an_analysis_is_on_the_report_page():
    told = first_column(section("docs/guide/report.md", "Notes"))
    assert sorted(told) == sorted(codes("Note", of_rooms("methods", "analysis")))


def test_codes_are_found_where_a_function_passes_them_on(tmp_path: Path):
    source = (
        'def _of(group, code): return Problem(code, "")\n'
        'def f(): return [Problem("a", ""), Problem(code="b"), _of([], "c"), Note("d")]\n'
    )
    (tmp_path / "x.py").write_text(source, encoding="utf-8")
    assert codes("Problem", [tmp_path / "x.py"]) == {"a", "b", "c"}


# ── the report ────────────────────────────────────────────────────────────────────────────


@pytest.fixture(scope="module")
def analysis() -> rm.Analysis:
    table = rm.read_table(
        Path(str(files("robustrm.demo") / "calprotectin.csv")),
        subject="patient",
        occasions=["week 0", "week 2", "week 6", "week 12"],
    )
    return rm.analyze(table, rng=1)


def test_every_key_of_the_results_is_on_the_report_page(analysis: rm.Analysis):
    told = first_column(section("docs/guide/report.md", "results.json"))
    assert told == list(analysis.to_dict())


def test_every_file_of_the_report_is_on_the_report_page(analysis: rm.Analysis, tmp_path: Path):
    folder = analysis.write_report(tmp_path / "report")
    told = first_column(section("docs/guide/report.md", "Files"))
    written = {path.relative_to(folder).as_posix() for path in folder.rglob("*") if path.is_file()}
    assert {name for name in written if not any(Path(name).match(t) for t in told)} == set()
    assert {t for t in told if not any(Path(name).match(t) for name in written)} == set()


# ── for developers ────────────────────────────────────────────────────────────────────────


def test_the_room_map_is_the_tree():
    block = re.search(r"```text\n(.*?)```", section("DEVELOPERS.md", "Rooms"), re.S)
    assert block
    told = re.findall(r"^  ([\w.]+/?)", block[1], re.M)
    package = ROOT / "robustrm"
    rooms = {p.name for p in package.glob("*.py")} | {"py.typed"}
    rooms |= {f"{p.name}/" for p in package.iterdir() if (p / "__init__.py").exists()}
    assert sorted(told) == sorted(rooms)


def test_every_stage_of_the_one_command_is_told():
    stages = re.findall(r'^stage "([^"]+)"', text(".ci/run"), re.M)
    told = re.findall(r"^\| ([^|]+?) \|", section("DEVELOPERS.md", "The one command"), re.M)
    assert told[2:] == [stage for stage in stages if not stage.startswith("done")]


def test_every_dependency_earns_its_place():
    project = tomllib.loads(text("pyproject.toml"))["project"]
    told = first_column(section("DEVELOPERS.md", "Dependencies"))
    wanted = [*project["dependencies"], *project["optional-dependencies"]["parquet"]]
    assert sorted(told) == sorted(re.split(r"[<>=\[]", need)[0] for need in wanted)


@dataclasses.dataclass
class Hunk:
    """One place of the diff to copy: lines that must be there, and lines that are added."""

    name: str
    kept: str
    added: str


def hunks() -> Iterator[Hunk]:
    block = re.search(r"```diff\n(.*?)```", section("DEVELOPERS.md", "Add a method"), re.S)
    assert block
    for part in re.split(r"^--- .+\n", block[1], flags=re.M)[1:]:
        head, *places = re.split(r"^@@ .+ @@\n", part, flags=re.M)
        for place in places:
            lines = place.splitlines(keepends=True)
            kept = "".join(line[1:] for line in lines if not line.startswith("+"))
            added = "".join(line[1:] for line in lines if line.startswith("+"))
            yield Hunk(head.strip().removeprefix("+++ b/"), kept, added)


def test_the_diff_to_copy_fits_one_place_of_each_file():
    places = {h.name + h.added: text(h.name).count(h.kept) for h in hunks() if h.kept}
    assert len(places) == 3
    assert set(places.values()) == {1}, places


def test_the_diff_to_copy_is_a_working_method():
    # Two subjects who rank three occasions alike: 6 of 36 arrangements do, and χ² is as large as
    # it can be, n(k − 1) = 4.
    (new,) = [hunk for hunk in hunks() if not hunk.kept]
    module = ModuleType("robustrm.methods.savage_scores")
    exec(compile(new.added, new.name, "exec"), module.__dict__)
    table = rm.OccasionTable.from_array([[9, 7, 6], [4, 3, 2]], occasions=["a", "b", "c"])
    result = module.savage_scores(table)
    assert result.method == "savage_scores"
    assert result.statistic == pytest.approx(4)
    assert result.p_value == pytest.approx(6 / 36)


# ── validation ────────────────────────────────────────────────────────────────────────────


def test_the_validation_page_is_up_to_date():
    spec = importlib.util.spec_from_file_location("make_validation", DOCS / "make_validation.py")
    assert spec
    assert spec.loader
    script = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(script)
    assert text("docs/validation.md") == script.page(), "run `python docs/make_validation.py`"


# ── wording ───────────────────────────────────────────────────────────────────────────────

# Groups that hide a letter keep this file from being its own finding.
OUT_OF_PLACE = {
    "a word from outside": r"\b(l[e]cture|tr[a]nscript|s[e]ssion|pr[o]mpt|h[e]lper)s?\b|\bC[E]O\b",
    "the number of an issue": r"\bissues? #?\d+|(?<![\w(/&])#\d+\b",
    "a path of one machine": r"(?<![\w.:/])/(work|tmp|root|home|Users)\b",
    "advertising": r"\b(blazing|seamless|effortless|world-class|cutting[- ]edge|turnkey)",
    "a bare verdict": r"\b(in)?significant (change|difference|effect|result)s?\b",
}


@pytest.mark.parametrize("name", NAMES)
def test_no_page_holds_what_is_out_of_place(name: str):
    found = [
        (number, what, line.strip())
        for number, line in enumerate(text(name).splitlines(), start=1)
        for what, pattern in OUT_OF_PLACE.items()
        if re.search(pattern, line, re.IGNORECASE)
    ]
    assert found == []


@pytest.mark.parametrize(
    "line",
    ["see iss~ue 12", "closes #~12", "a seaml~ess tool", "a signif~icant change", "two hel~pers"],
)
def test_what_is_out_of_place_is_seen(line: str):
    plain = line.replace("~", "")
    assert [w for w, p in OUT_OF_PLACE.items() if re.search(p, plain, re.IGNORECASE)]
