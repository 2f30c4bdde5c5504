"""The examples run, and their pages say what the commands say today."""

from __future__ import annotations

import os
import re
import runpy
import shlex
import subprocess
import sys
from pathlib import Path

import pytest
from click.testing import CliRunner

from robustrm.cli import main

ROOT = Path(__file__).resolve().parents[1]
EXAMPLES = ROOT / "examples"
MESSY = EXAMPLES / "messy"
SCRIPTS = sorted(EXAMPLES.glob("*.py"))
MAKE = runpy.run_path(str(MESSY / "make_messy.py"))
README = runpy.run_path(str(MESSY / "make_readme.py"))


@pytest.mark.slow
@pytest.mark.parametrize("script", SCRIPTS, ids=lambda path: path.name)
def test_a_script_runs_where_it_is_run(script: Path, tmp_path: Path):
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "PYTHONIOENCODING": "utf-8"}
    done = subprocess.run(
        [sys.executable, str(script)],
        cwd=tmp_path,
        env=environment,
        capture_output=True,
        encoding="utf-8",
        check=False,
    )
    assert done.returncode == 0, done.stderr
    assert done.stdout.strip()
    reports = [path for name in ("report", "panel") for path in tmp_path.rglob(f"{name}.html")]
    assert len(reports) == 1


def test_there_are_scripts():
    assert SCRIPTS


@pytest.mark.parametrize("name", sorted(MAKE["TEXT_FILES"]))
def test_a_messy_file_is_what_its_script_makes(name: str):
    assert (MESSY / name).read_bytes() == MAKE["text_files"]()[name]


def test_the_messy_workbook_is_what_its_script_makes():
    # Cells are compared: the container of a workbook holds the time at which it was written.
    from openpyxl import load_workbook

    book = load_workbook(MESSY / MAKE["WORKBOOK"])
    stored = {sheet.title: [list(row) for row in sheet.values] for sheet in book.worksheets}
    made = MAKE["workbook_cells"]()
    width = {name: max(map(len, rows)) for name, rows in made.items()}
    assert stored == {
        name: [[*row, *[None] * (width[name] - len(row))] for row in rows]
        for name, rows in made.items()
    }


def test_the_script_says_that_nobody_was_measured():
    assert "invented" in MAKE["__doc__"]


@pytest.mark.cli
def test_the_page_says_what_the_commands_say():
    page = (MESSY / "README.md").read_text(encoding="utf-8")
    assert README["renewed"](page) == page


def test_the_page_shows_every_messy_file():
    page = (MESSY / "README.md").read_text(encoding="utf-8")
    commands = [match["command"] for match in README["BLOCK"].finditer(page)]
    for name in [*MAKE["TEXT_FILES"], MAKE["WORKBOOK"]]:
        assert any(f"check {name} " in command or command.endswith(name) for command in commands)
        assert f"`{name}`" in page


def test_a_stale_page_is_seen():
    stale = "```console\n$ robustrm methods friedman\nan old answer\n```"
    assert README["renewed"](stale) != stale
    assert "Friedman" in README["renewed"](stale)


@pytest.mark.cli
def test_the_readme_shows_what_the_command_prints(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    (block,) = re.findall(r"<!-- run-command -->(.*?)<!-- /run-command -->", readme, re.DOTALL)
    commands = re.findall(r"\.venv/bin/robustrm ([^&`]*)", block)
    (shown,) = re.findall(r"```text\n(.*?)```", readme, re.DOTALL)
    monkeypatch.chdir(tmp_path)
    results = [CliRunner().invoke(main, shlex.split(command)) for command in commands]
    assert [result.exit_code for result in results] == [0, 0]
    assert shown in results[1].stdout
    assert (tmp_path / "demo" / "report" / "report.html").exists()


def test_the_pictures_of_the_readme_are_drawn_from_the_demo():
    made = runpy.run_path(str(ROOT / "docs" / "images" / "make_images.py"))
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    names = {f"{made['PREFIX']}-{name}.svg" for name in made["SHOWN"]}
    assert set(re.findall(r"docs/images/([\w.-]+)\)", readme)) == names
    # The estimate in the alternative text is that of the analysis.
    estimate = made["demo_analysis"]().primary["week 0", "week 12"].estimate
    said = f"ratio {estimate.value:.2f} with its interval {estimate.low:.2f} to {estimate.high:.2f}"
    assert said in readme
