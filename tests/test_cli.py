"""The command line: what it reads, prints and returns, with real files."""

from __future__ import annotations

import dataclasses
import hashlib
import json
import os
import shlex
import subprocess
import sys
from pathlib import Path

import click
import pytest
from click.testing import CliRunner, Result

import robustrm as rm
from robustrm.cli import exits, main, options
from robustrm.demo import DEMO_FILE, DEMO_OPTIONS, write_demo
from robustrm.errors import BudgetError, DataError, PlanError, Problem, TooFewError
from robustrm.methods.registry import METHODS
from robustrm.plan import Plan

pytestmark = pytest.mark.cli


def run(*words: str | Path, stdin: bytes | None = None) -> Result:
    return CliRunner().invoke(main, [str(word) for word in words], input=stdin)


def shell(*words: str | Path, **extra) -> subprocess.CompletedProcess[bytes]:
    line = [sys.executable, "-m", "robustrm", *map(str, words)]
    return subprocess.run(line, capture_output=True, check=False, **extra)


@pytest.fixture
def demo(tmp_path: Path) -> Path:
    return write_demo(tmp_path)


def csv(folder: Path, text: str, name: str = "data.csv") -> Path:
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return path


WIDE = "id,a,b,c\nP1,3,4,5\nP2,7,6,5\nP3,2,2,1\nP4,9,8,3\nP5,6,4,4\nP6,8,5,2\n"
READ_WIDE = ("--subject", "id", "--occasions", "a,b,c")


# ── help and version ──────────────────────────────────────────────────────────────────


@pytest.mark.parametrize("command", [(), *((name,) for name in sorted(main.commands))])
def test_every_help_page_has_an_example_and_no_long_line(command: tuple[str, ...]):
    result = run(*command, "--help")
    assert result.exit_code == 0
    assert "\n  Example:\n    robustrm" in result.output
    assert max(map(len, result.output.splitlines())) <= 80


def examples() -> list[list[str]]:
    pages = [main, *main.commands.values()]
    lines = "\n".join((page.epilog or "").replace("\\\n", " ") for page in pages).splitlines()
    shown = dict.fromkeys(line.strip() for line in lines if line.strip().startswith("robustrm"))
    return [shlex.split(line)[1:] for line in shown]


@pytest.mark.parametrize("words", examples(), ids=" ".join)
def test_the_examples_of_the_help_pages_run(
    words: list[str], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
):
    files = {
        "crp.csv": "id,week 0,week 6,week 12\nP1,3,4,5\nP2,7,6,5\nP3,2,2,1\nP4,9,8,3\n",
        "long.csv": "id,week,crp\nP1,0,3\nP1,6,4\nP1,12,5\nP2,0,7\nP2,6,6\nP2,12,5\n",
    }
    monkeypatch.chdir(tmp_path)
    csv(tmp_path, files["long.csv" if "--occasion" in words else "crp.csv"], "crp.csv")
    write_demo("demo")
    result = run(*words)
    assert result.exit_code == 0, result.output


def test_the_version_is_that_of_the_package():
    assert run("--version").output == f"robustrm, version {rm.__version__}\n"


def test_python_dash_m_is_the_same_command_line():
    done = shell("--version")
    assert done.stdout.decode() == f"robustrm, version {rm.__version__}\n"


# ── options are edits of a plan, and the options of read_table ────────────────────────


def names_of(command: click.Command) -> set[str]:
    return {param.name or "" for param in command.params}


def test_every_key_of_the_plan_but_those_of_the_file_itself_is_an_option_of_analyze():
    keys = {field.name for field in dataclasses.fields(Plan)} - set(options._OF_THE_FILE)
    assert keys <= names_of(main.commands["analyze"])
    assert set(options._PLAN_HELP) == keys - set(options._OF_READING)


@pytest.mark.parametrize("command", ["check", "analyze"])
def test_every_argument_of_read_table_is_an_option(command: str):
    assert set(options._READING) <= names_of(main.commands[command])


def test_no_option_has_a_default_that_the_plan_or_the_reader_should_have(demo: Path):
    params = main.commands["analyze"].make_context("analyze", [str(demo)]).params
    set_here = {name for name, value in params.items() if value not in (None, (), False)}
    assert set_here == {"data", "style"}


def test_without_options_the_plan_is_the_usual_one():
    assert options.plan_of(None, {}) == Plan()


EDITS: list[tuple[list[str], dict]] = [
    (["--marker-kind", "score"], {"marker_kind": "score"}),
    (["--scale", "raw"], {"scale": "raw"}),
    (["--contrasts", "all"], {"contrasts": "all"}),
    (["--contrasts", "a,c"], {"contrasts": (("a", "c"),)}),
    (["--contrasts", "a,c", "--contrasts", "b,c"], {"contrasts": (("a", "c"), ("b", "c"))}),
    (["--pair", "paired_t"], {"pair": "paired_t"}),
    (["--omnibus", "anova"], {"omnibus": "anova"}),
    (["--zeros", "drop"], {"zeros": "drop"}),
    (["--adjust", "hommel"], {"adjust": "hommel"}),
    (["--intervals", "simultaneous"], {"intervals": "simultaneous"}),
    (["--level", "0.9"], {"level": 0.9}),
    (["--sides", "1", "--direction", "less"], {"sides": 1, "direction": "less"}),
    (["--substitute", "root2"], {"substitute": "root2"}),
    (["--not-in-time"], {"in_time": False}),
    (["--purpose", "confirmatory"], {"purpose": "confirmatory"}),
    (["--design", "randomised-order"], {"design": "randomised-order"}),
    (["--selected"], {"selected": True}),
    (["--not-selected"], {"selected": False}),
    (["--own-runs"], {"own_runs": True}),
    (["--shared-runs"], {"own_runs": False}),
    (["--stages", "999,9999"], {"stages": (999, 9999)}),
    (["--seed", "7"], {"seed": 7}),
    (["--companions", "rank_pair,hotelling"], {"companions": ("rank_pair", "hotelling")}),
    (["--companions", "none"], {"companions": ()}),
    (["--missing", "complete"], {"missing": "complete"}),
    (
        ["--margin", "1.25", "--margin-reason", "agreed"],
        {"margin": 1.25, "margin_reason": "agreed"},
    ),
    (["--estimand", "the ratio in all"], {"estimand": "the ratio in all"}),
    (["--trim", "0.1"], {"trim": 0.1}),
    (["--winsorize", "0.2"], {"winsorize": 0.2}),
    (["--bootstrap-draws", "999"], {"bootstrap_draws": 999}),
    (["--marker", "CRP"], {"marker": "CRP"}),
    (["--unit", "mg/L"], {"unit": "mg/L"}),
    (["--lower-limit", "0.3"], {"lower_limit": 0.3}),
    (["--upper-limit", "20,,30"], {"upper_limit": (20.0, None, 30.0)}),
]


def plan_seen_by_analyze(monkeypatch: pytest.MonkeyPatch, *words: str | Path) -> Plan:
    seen: list[Plan] = []

    def spy(table, plan, *, advice, progress):
        seen.append(plan)
        raise KeyboardInterrupt

    monkeypatch.setattr(rm, "analyze", spy)
    result = run("analyze", *words)
    assert seen, result.output
    return seen[0]


@pytest.mark.parametrize(("words", "changes"), EDITS, ids=lambda x: " ".join(x))
def test_an_option_changes_its_key_and_no_other(
    words: list[str], changes: dict, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
):
    planned = Plan(occasions=("a", "b", "c"))
    planned.save(tmp_path / "plan.toml")
    words = ["--plan", str(tmp_path / "plan.toml"), *words]
    plan = plan_seen_by_analyze(monkeypatch, csv(tmp_path, WIDE), *READ_WIDE, *words)
    assert plan == planned.amended(**changes)
    assert plan != planned


def test_every_key_of_the_plan_is_edited_above():
    edited = {key for _, changes in EDITS for key in changes} | {"occasions"}
    known = {field.name for field in dataclasses.fields(Plan)}
    assert edited == known - set(options._OF_THE_FILE)


def test_an_option_amends_the_plan_of_the_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    Plan(adjust="hommel", level=0.9).save(tmp_path / "plan.toml")
    words = ("--plan", tmp_path / "plan.toml", "--level", "0.99")
    plan = plan_seen_by_analyze(monkeypatch, csv(tmp_path, WIDE), *READ_WIDE, *words)
    assert (plan.adjust, plan.level) == ("hommel", 0.99)
    assert plan.amendments == ("level: 0.9 was planned, 0.99 was used",)


def test_a_plan_file_says_how_the_data_are_read(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    planned = Plan(occasions=("a", "c"), marker="CRP", unit="mg/L", lower_limit=2.5)
    planned.save(tmp_path / "plan.toml")
    words = ("--subject", "id", "--plan", tmp_path / "plan.toml")
    tables: list = []

    def spy(table, plan, *, advice, progress):
        tables.append((table, plan))
        raise KeyboardInterrupt

    monkeypatch.setattr(rm, "analyze", spy)
    run("analyze", csv(tmp_path, WIDE), *words)
    table, plan = tables[0]
    assert (table.occasions, table.marker, table.unit) == (("a", "c"), "CRP", "mg/L")
    assert table.lower_limit.min() == table.lower_limit.max() == 2.5
    assert plan == planned


def test_without_a_plan_file_the_advice_fills_in_what_no_option_declares(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
):
    data = csv(tmp_path, WIDE)
    plan = plan_seen_by_analyze(monkeypatch, data, *READ_WIDE, "--omnibus", "quade")
    assert (plan.omnibus, plan.scale, plan.pair) == ("quade", "log", "signed_rank")
    plan = plan_seen_by_analyze(monkeypatch, data, *READ_WIDE, "--marker-kind", "score")
    assert (plan.omnibus, plan.scale) == ("aligned_ranks", "raw")


# ── advice ────────────────────────────────────────────────────────────────────────────────────


def test_advice_for_a_design_can_be_saved_and_followed(tmp_path: Path):
    file = tmp_path / "plan.toml"
    result = run("advise", "--subjects", "6", "--visits", "3", "--seed", "4", "--save", file)
    assert result.exit_code == 0, result.output
    assert "after Holm 0.0625" in result.output  # 2 comparisons, 2 · 2/2⁶, by hand
    plan = Plan.load(file)
    assert (plan.omnibus, plan.scale, plan.seed) == ("aligned_ranks", "log", 4)
    assert plan.created is not None
    assert plan.data_digest is None
    done = run("analyze", csv(tmp_path, WIDE), *READ_WIDE, "--plan", file)
    assert done.exit_code == 0, done.output
    assert f"the plan was written on {plan.created}, without data" in " ".join(done.output.split())


def test_advice_on_data_puts_down_their_digest(tmp_path: Path):
    data, file = csv(tmp_path, WIDE), tmp_path / "plan.toml"
    result = run("advise", data, *READ_WIDE, "--save", file, "--statement")
    assert result.exit_code == 0, result.output
    assert Plan.load(file).data_digest == hashlib.sha256(data.read_bytes()).hexdigest()
    assert "The plan in words" in result.output
    assert "Primary analysis. Planned is" in result.output


def test_a_plan_is_not_written_over(tmp_path: Path):
    file = tmp_path / "plan.toml"
    file.write_text("dear")
    result = run("advise", "--subjects", "6", "--visits", "3", "--save", file)
    assert result.exit_code == 2
    assert "must name a new file" in result.output
    assert file.read_text() == "dear"


def test_advice_as_json_holds_plan_reasons_and_figures(tmp_path: Path):
    result = run("advise", csv(tmp_path, WIDE), *READ_WIDE, "--json")
    held = json.loads(result.stdout)
    assert held["plan"]["omnibus"] == "aligned_ranks"
    assert held["figures"]["n_subjects"] == 6
    assert held["simulated"] is None


def test_advice_without_data_or_design_is_refused():
    result = run("advise")
    assert result.exit_code == 2
    assert "needs a table, or" in result.output


@pytest.mark.parametrize(
    ("given", "labels"),
    [
        (["a,b,c"], ["a", "b", "c"]),
        (["week 0, week 2"], ["week 0", "week 2"]),
        (['"rest, lying",after'], ["rest, lying", "after"]),
        (["rest, lying", "after"], ["rest, lying", "after"]),
        ([], None),
    ],
)
def test_labels_are_a_list_or_one_each(given: list[str], labels: list[str] | None):
    assert options.label_list(given) == labels


def test_labels_with_commas_reach_the_reader(tmp_path: Path):
    data = csv(tmp_path, 'id,"rest, lying",after\nP1,3,4\nP2,7,6\n')
    whole = run("check", data, "--subject", "id", "--occasions", '"rest, lying",after')
    one_each = ("--occasions", "rest, lying", "--occasions", "after")
    assert run("check", data, "--subject", "id", *one_each).output.startswith("value: 2 subjects")
    assert whole.exit_code == 0, whole.output


@pytest.mark.parametrize(
    ("text", "limit"), [("0.3", 0.3), ("0.3,0.5", [0.3, 0.5]), ("0.3,,0.5", [0.3, None, 0.5])]
)
def test_limits_are_one_number_or_one_an_occasion(text: str, limit: object):
    assert options._numbers(text) == limit


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--lower-limit", "low"], "'low' is no number. Write 0.3, or one an occasion"),
        (["--where", "arm"], "'arm' is no condition. Write COLUMN=VALUE"),
        (["--stages", "many"], "'many' does not list whole numbers"),
        (["--adjust", "holmes"], "'holmes' is not one of"),
        (["--level", "95"], "`level` must be in (0, 1), got 95.0. Did you mean 0.95?"),
        (["--contrasts", "frist"], "Did you mean 'first'?"),
        (["--occasion", "week"], "`occasions` is for one row a subject"),
    ],
)
def test_a_wrong_option_is_usage(words: list[str], said: str, tmp_path: Path):
    result = run("analyze", csv(tmp_path, WIDE), *READ_WIDE, *words)
    assert result.exit_code == exits.USAGE
    assert said in result.stderr
    assert result.stdout == ""


# ── exit codes ────────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize(
    ("error", "code"),
    [
        (rm.ArgumentError("`x` must be y."), 2),
        (BudgetError("`null` must be 'auto'."), 2),
        (PlanError("The plan has no key 'x'."), 2),
        (TooFewError("2 subjects are needed."), 3),
        (DataError([Problem("code", "found.", "do.")]), 3),
        (rm.RobustrmError("any other"), 1),
        (RuntimeError("a bug"), 1),
        (KeyboardInterrupt(), 130),
    ],
    ids=lambda x: type(x).__name__,
)
def test_every_end_has_its_exit_code(
    error: BaseException, code: int, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
):
    def fail(*_args, **_options):
        raise error

    monkeypatch.setattr(rm, "analyze", fail)
    result = run("analyze", csv(tmp_path, WIDE), *READ_WIDE)
    assert result.exit_code == code
    assert result.stdout == ""
    assert "Traceback" not in result.stderr
    assert len(result.stderr.strip()) > 0


@pytest.mark.parametrize("place", ["before", "after"])
def test_debug_shows_the_traceback(place: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    def fail(*_args, **_options):
        raise RuntimeError("a bug")

    monkeypatch.setattr(rm, "analyze", fail)
    words: list[str | Path] = ["analyze", csv(tmp_path, WIDE), *READ_WIDE]
    words = ["--debug", *words] if place == "before" else [*words, "--debug"]
    result = run(*words)
    assert result.exit_code == 1
    assert "Traceback" in result.stderr
    assert "RuntimeError: a bug" in result.stderr


def test_an_unexpected_error_is_one_sentence(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    def fail(*_args, **_options):
        raise RuntimeError("a bug")

    monkeypatch.setattr(rm, "analyze", fail)
    result = run("analyze", csv(tmp_path, WIDE), *READ_WIDE)
    assert result.stderr == (
        "Error: RuntimeError: a bug. Run again with --debug for the traceback.\n"
    )


def test_a_refused_plan_file_is_usage(tmp_path: Path):
    plan = csv(tmp_path, "contrast = 'all'\n", "plan.toml")
    result = run("analyze", csv(tmp_path, WIDE), *READ_WIDE, "--plan", plan)
    assert result.exit_code == 2
    assert "The plan has no key 'contrast'. Did you mean 'contrasts'?" in result.stderr


def test_a_file_that_is_not_there_is_usage(tmp_path: Path):
    result = run("check", tmp_path / "nothing.csv", *READ_WIDE)
    assert result.exit_code == 2
    assert "does not exist" in result.stderr


def test_refused_data_list_every_problem_with_place_and_action(tmp_path: Path):
    data = csv(tmp_path, "id,a,b,c\nP1,3,see note,5\nP2,7,6,5 mg/L\nP3,1,2,3\n")
    result = run("analyze", data, *READ_WIDE)
    assert result.exit_code == 3
    assert result.stdout == ""
    blocks = result.stderr.strip().split("\n\n")
    assert blocks[0] == ("2 problems to settle before anything is computed in data.csv:")
    assert blocks[1].startswith("[unreadable] row 2, column 'b', text 'see note'\n")
    assert blocks[2].startswith("[unreadable] row 3, column 'c', text '5 mg/L'\n")
    assert all("\n  → " in block for block in blocks[1:])


def test_zero_on_the_log_scale_is_refused_with_the_question(tmp_path: Path):
    data = csv(tmp_path, "id,a,b,c\nP1,3,0,5\nP2,7,6,5\nP3,1,2,3\n")
    for command in ("check", "analyze"):
        result = run(command, data, *READ_WIDE)
        assert result.exit_code == 3
        assert "below a limit, or a true zero?" in " ".join(result.output.split())
    assert run("check", data, *READ_WIDE, "--scale", "raw").exit_code == 0


def test_a_reader_that_leaves_is_no_noise(demo: Path):
    # The pipe is closed before anything is written to it.
    reading, writing = os.pipe()
    os.close(reading)
    line = [sys.executable, "-m", "robustrm", "analyze", str(demo), *DEMO_OPTIONS]
    done = subprocess.run(line, stdout=writing, stderr=subprocess.PIPE, check=False)
    os.close(writing)
    assert done.returncode == 1
    assert done.stderr == b""


@pytest.mark.skipif(os.name == "nt", reason="no such signal on Windows")
def test_an_interrupt_ends_with_130(demo: Path):
    program = f"""
import os, signal, time
from robustrm.cli import main, options

def interrupted(*_args, **_options):
    os.kill(os.getpid(), signal.SIGINT)
    time.sleep(60)

options.read_table = interrupted
main(["check", {str(demo)!r}, "--subject", "patient"])
"""
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, check=False)
    assert done.returncode == 130
    assert done.stderr == b"Interrupted.\n"


# ── check ─────────────────────────────────────────────────────────────────────────────


def test_check_shows_who_has_what(demo: Path):
    result = run("check", demo, *DEMO_OPTIONS)
    assert result.exit_code == 0
    lines = result.stdout.splitlines()
    assert lines[0] == "faecal calprotectin (µg/g): 14 subjects × 4 occasions, 13 complete"
    assert "K05    ●       ●       ●        <" in lines
    assert "K09    ●       ●       –        ●     week 6: missed" in lines
    assert "week 6          12                1        1" in lines
    assert max(map(len, lines[:-1])) <= 80


def test_check_says_how_numbers_were_read(tmp_path: Path):
    data = csv(tmp_path, "id;a;b;c\nP1;0,5;1,25;3\nP2;2;< 0,3;4,5\n")
    output = " ".join(run("check", data, *READ_WIDE).stdout.split())
    assert "decimal mark comma" in output
    assert "'0,5' as 0.5, '1,25' as 1.25, '< 0,3' as 0.3 and '4,5' as 4.5" in output


def test_check_numbers_the_occasions_when_their_labels_are_long(tmp_path: Path):
    labels = [f"visit {j}, morning before breakfast" for j in (1, 2, 3)]
    heading = ",".join(f'"{label}"' for label in labels)
    data = csv(tmp_path, f"id,{heading}\nP1,3,4,\nP2,7,6,5\n")
    words = [word for label in labels for word in ("--occasions", label)]
    lines = run("check", data, "--subject", "id", *words).stdout.splitlines()
    assert "    [1]  [2]  [3]" in lines
    assert f"P1   ●    ●    –   {labels[2]}: no reason given" in lines
    assert f"[3] {labels[2]}" in lines


def test_check_lists_replicates_with_their_cv(tmp_path: Path):
    rows = "".join(f"P{i},{w},{v}\n" for i in (1, 2) for w in "ab" for v in (10, 10 + 4 * (i - 1)))
    data = csv(tmp_path, f"id,week,crp\n{rows}")
    words = ("--subject", "id", "--occasion", "week", "--value", "crp", "--order", "a,b")
    lines = run("check", data, *words, "--replicates", "mean").stdout.splitlines()
    # SD of 10 and 14 is 2.83, their mean 12.
    assert "P2, a   10.0; 14.0  12.0  24%" in lines


def test_check_proposes_a_command_that_runs(demo: Path, monkeypatch: pytest.MonkeyPatch):
    monkeypatch.chdir(demo.parent)
    proposed = run("check", DEMO_FILE, *DEMO_OPTIONS).stdout.splitlines()[-1]
    words = shlex.split(proposed)
    assert words == ["robustrm", "analyze", DEMO_FILE, *DEMO_OPTIONS, "--out", "report"]
    assert run(*words[1:]).exit_code == 0
    assert (demo.parent / "report" / "report.html").exists()


def test_check_lists_problems_as_its_result(tmp_path: Path):
    data = csv(tmp_path, "id,a,b,c\nP1,3,see note,5\nP2,7,6,5\n")
    result = run("check", data, *READ_WIDE)
    assert result.exit_code == 3
    assert result.stdout.startswith("1 problem to settle before anything is computed")
    assert result.stderr == ""


def test_check_as_json(demo: Path):
    result = run("check", demo, *DEMO_OPTIONS, "--json")
    found = json.loads(result.stdout)
    assert found["problems"] == []
    assert found["n_complete"] == 13
    assert found["counts"]["week 6"] == {"value": 12, "below": 1, "above": 0, "missing": 1}
    assert found["subjects"][8]["reasons"] == {"week 6": "missed"}
    assert len(found["source"]["sha256"]) == 64
    assert shlex.split(found["analyze"])[:2] == ["robustrm", "analyze"]
    assert "--json" not in found["analyze"]


def test_problems_as_json(tmp_path: Path):
    data = csv(tmp_path, "id,a,b,c\nP1,3,see note,5\nP2,7,6,5\n")
    result = run("check", data, *READ_WIDE, "--json")
    (problem,) = json.loads(result.stdout)["problems"]
    assert result.exit_code == 3
    assert (problem["code"], problem["row"], problem["text"]) == ("unreadable", 2, "see note")


def test_a_label_cannot_move_the_cursor(tmp_path: Path):
    data = csv(tmp_path, "id,a,b,c\nP1\x1b[2J,3,4,5\nP2,7,6,5\n")
    assert "\x1b" not in run("check", data, *READ_WIDE).output


# ── analyze ───────────────────────────────────────────────────────────────────────────


def test_analyze_prints_the_result_and_writes_the_report(demo: Path):
    folder = demo.parent / "report"
    result = run("analyze", demo, *DEMO_OPTIONS, "--out", folder)
    assert result.exit_code == 0, result.output
    assert result.stderr == f"Report: {folder / 'report.html'}\n"
    assert "week 12 vs week 0" in result.stdout
    names = {path.name for path in folder.iterdir()}
    assert {"report.html", "results.json", "tables", "figures", "methods.txt", "plan.toml"} <= names


def test_json_on_stdout_is_the_results_file_and_nothing_else(demo: Path):
    folder = demo.parent / "report"
    words = (*DEMO_OPTIONS, "--seed", "1", "--out", folder)
    result = run("analyze", demo, *words, "--json")
    written = (folder / "results.json").read_text(encoding="utf-8")
    assert json.loads(result.stdout) == json.loads(written)


def test_the_command_line_computes_what_the_package_computes(demo: Path):
    document = json.loads(run("analyze", demo, *DEMO_OPTIONS, "--seed", "1", "--json").stdout)
    table = rm.read_table(
        demo, subject="patient", occasions=["week 0", "week 2", "week 6", "week 12"]
    )
    expected = rm.analyze(table, Plan(seed=1)).primary
    shown = [c["p_adjusted"] for c in document["primary"]["comparisons"]]
    assert shown == [c.p_adjusted for c in expected]


def test_quiet_leaves_stderr_empty(demo: Path):
    folder = demo.parent / "report"
    result = run("analyze", demo, *DEMO_OPTIONS, "--out", folder, "--quiet")
    assert result.stderr == ""


def test_styles_of_p(demo: Path):
    medical = run("analyze", demo, *DEMO_OPTIONS, "--style", "medical").stdout
    apa = run("analyze", demo, *DEMO_OPTIONS, "--style", "apa").stdout
    assert "0.013" in medical
    assert " .013" in apa


def test_standard_input_is_read_as_bytes(demo: Path):
    from_file = run("analyze", demo, *DEMO_OPTIONS, "--seed", "1")
    piped = run("analyze", "-", *DEMO_OPTIONS, "--seed", "1", stdin=demo.read_bytes())
    assert piped.stdout == from_file.stdout


def test_a_real_pipe_and_a_narrow_encoding(demo: Path):
    words = ("check", "-", *DEMO_OPTIONS)
    narrow = {**os.environ, "PYTHONIOENCODING": "cp1252"}
    done = shell(*words, input=demo.read_bytes(), env=narrow)
    assert done.returncode == 0, done.stderr
    assert b"\\u25cf" in done.stdout


# ── demo and methods ──────────────────────────────────────────────────────────────────


def test_demo_writes_the_data_and_the_command_that_analyzes_them(tmp_path: Path):
    result = run("demo", tmp_path / "my demo")
    assert result.exit_code == 0
    assert (tmp_path / "my demo" / DEMO_FILE).exists()
    words = shlex.split(result.stdout)
    assert words[:2] == ["robustrm", "analyze"]
    assert run(*words[1:], "--quiet").exit_code == 0
    assert (tmp_path / "my demo" / "report" / "report.html").exists()


def test_demo_overwrites_nothing(tmp_path: Path):
    csv(tmp_path, "mine\n", DEMO_FILE)
    result = run("demo", tmp_path)
    assert result.exit_code == 2
    assert "must not hold another calprotectin.csv" in result.stderr
    assert (tmp_path / DEMO_FILE).read_text(encoding="utf-8") == "mine\n"


def test_methods_lists_every_method_with_its_question():
    output = " ".join(run("methods").stdout.split())
    for method in METHODS:
        assert f" {method.name} {method.title} {method.question} Null hypothesis: " in output


@pytest.mark.parametrize("method", METHODS, ids=lambda method: method.name)
def test_methods_explains_a_method(method):
    result = run("methods", method.name)
    assert result.exit_code == 0
    call = f"robustrm.{method.name}("
    if method.kind == "family":
        call = f'robustrm.follow_up(table, method="{method.name}", family='
    assert call in result.stdout
    assert "Notes\n-----" in result.stdout


def test_methods_does_not_know_every_name():
    result = run("methods", "freidman")
    assert result.exit_code == 2
    assert "got 'freidman'. Did you mean 'friedman'?" in result.stderr


def test_a_direction_without_one_side_is_refused(tmp_path: Path):
    path = tmp_path / "a.csv"
    path.write_text("id,a,b\nX,1,2\nY,2,3\n", encoding="utf-8")
    options = ["--subject", "id", "--occasions", "a,b", "--direction", "less"]
    result = CliRunner().invoke(main, ["analyze", str(path), *options])
    assert result.exit_code == 2
    assert "Add --sides 1" in result.stderr


def test_a_method_of_a_whole_family_is_taken_from_the_command_line(tmp_path: Path):
    path = tmp_path / "a.csv"
    path.write_text("id,a,b,c\nX,1,2,4\nY,2,3,9\nZ,3,8,7\n", encoding="utf-8")
    words = ["analyze", str(path), "--subject", "id", "--occasions", "a,b,c", "--pair", "nemenyi"]
    result = run(*words, "--adjust", "single-step")
    assert result.exit_code == 0, result.stderr
    assert "P, single-step" in result.stdout
    refused = run(*words)
    assert refused.exit_code == 2
    assert "`adjust` must be 'single-step' with `pair` 'nemenyi'" in refused.stderr


def test_closed_testing_takes_aligned_ranks_from_the_command_line(tmp_path: Path):
    path = tmp_path / "a.csv"
    path.write_text("id,a,b,c\nX,1,2,4\nY,2,3,9\nZ,3,7,8\n", encoding="utf-8")
    options = [
        "--subject",
        "id",
        "--occasions",
        "a,b,c",
        "--adjust",
        "closed",
        "--pair",
        "aligned_ranks",
    ]
    result = CliRunner().invoke(main, ["analyze", str(path), *options])
    assert result.exit_code == 0, result.stderr
    assert "P, closed" in result.stdout
