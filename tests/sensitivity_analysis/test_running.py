"""All parts together: what holds on one screen, in document, page, folder and text."""

from __future__ import annotations

import json
import re
from html import unescape
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner

import robustrm as rm
from robustrm.cli import main
from robustrm.report.document import document
from robustrm.report.folder import write_report
from robustrm.report.html import page
from robustrm.report.sensitivity_text import sensitivity_text
from robustrm.sensitivity_analysis import PARTS, Sensitivity

OCCASIONS = ["week 0", "week 6", "week 12"]
CHOICES = {"test": ("aligned_ranks", "friedman"), "scale": ("log",), "outliers": ("kept",)}


def clear_change() -> rm.OccasionTable:
    """Twelve subjects who all fall by about a half at week 12; by a seeded generator."""
    rng = np.random.default_rng(3)
    level = np.exp(rng.normal(3, 0.8, (12, 1)))
    values = level * np.exp(rng.normal(0, 0.15, (12, 3))) * np.array([1.0, 0.8, 0.45])
    return rm.OccasionTable.from_array(values.round(2), occasions=OCCASIONS, marker="CRP")


def plan() -> rm.Plan:
    return rm.Plan(omnibus="aligned_ranks", grid=CHOICES, seed=5, companions=())  # type: ignore[arg-type]  # as a plan file has it


@pytest.fixture(scope="module")
def found() -> Sensitivity:
    return rm.sensitivity(clear_change(), plan())


def test_a_clear_change_reads_the_same_everywhere(found: Sensitivity):
    last = found.overview.set_index("label").loc["week 12 vs week 0"]
    assert last.to_dict() == {
        "without_one": "the same",
        "limits": "no value beyond a limit",
        "missing": "no visit missed",
        "parametric_log": "the same",
        # of arithmetic means, which the two largest values carry
        "parametric_raw": "otherwise",
    }


def test_the_tables_are_those_of_the_parts(found: Sensitivity):
    assert found.grid_p == found.parts.grid.grid_p
    assert 0 < found.grid_p < 0.05
    assert found.beside is found.parts.beside.frame
    assert found.leave_one_out["left_out"].nunique() == 12
    assert len(found.missing) == 0
    assert set(found.sentences) == set(PARTS)


def test_the_same_seed_gives_the_same_bytes(found: Sensitivity):
    again = rm.sensitivity(clear_change(), plan())
    assert json.dumps(again.to_dict()) == json.dumps(found.to_dict())
    json.dumps(found.to_dict(), allow_nan=False)


def test_progress_counts_the_analysis_and_the_parts():
    seen: list[tuple[int, int]] = []
    rm.sensitivity(clear_change(), plan(), progress=lambda *step: seen.append(step))
    assert seen == [(i, len(PARTS) + 1) for i in range(1, len(PARTS) + 2)]


def test_one_person_who_carries_the_result_is_named():
    """All but S1 hardly move; S1 rises ten-fold and turns the paired t test on raw values."""
    rng = np.random.default_rng(8)
    values = np.exp(rng.normal(2, 0.3, (10, 1))) * np.exp(rng.normal(0, 0.05, (10, 2)))
    values[:, 1] *= 0.93
    values[0, 1] = values[0, 0] * 12
    table = rm.OccasionTable.from_array(values.round(2), occasions=["before", "after"])
    held = rm.sensitivity(table, plan())
    told = " ".join(held.sentences["beside"])
    assert re.search(r"with S1 left out both read as a fall", told)
    assert held.overview["parametric_raw"].tolist() == ["otherwise"]


def test_the_page_holds_the_section_only_where_it_was_made(found: Sensitivity):
    held = document(found.analysis, found)
    with_it, without = page(held), page(document(found.analysis))
    assert 'id="sensitivity"' in with_it
    assert 'href="#sensitivity"' in with_it
    assert 'id="sensitivity"' not in without
    assert 'href="#sensitivity"' not in without
    for text in found.sentences["grid"]:
        assert text in unescape(with_it)


def test_the_text_says_first_what_holds(found: Sensitivity):
    lines = sensitivity_text(document(found.analysis, found)).splitlines()
    assert lines[0].startswith("What holds and what does not")
    assert any(line.startswith("week 12 vs week 0") and "the same" in line for line in lines[:8])


def test_the_folder_holds_tables_and_figures_and_gives_way_to_a_new_report(
    found: Sensitivity, tmp_path: Path
):
    target = write_report(found.analysis, tmp_path / "report", sensitivity=found)
    tables = {path.stem for path in (target / "tables").iterdir()}
    assert {"specifications", "left-out", "limits", "missing", "tipping", "margins"} <= tables
    figures = {path.name for path in (target / "figures").iterdir()}
    assert {"specifications.svg", "without-one-1.png"} <= figures
    assert "missing-map.svg" not in figures  # nothing is missing
    write_report(found.analysis, target)
    assert not (target / "tables" / "limits.csv").exists()


def test_the_command_prints_what_holds_and_writes_the_report(tmp_path: Path):
    wide = clear_change().to_wide().rename_axis("id").reset_index(drop=False)
    file = tmp_path / "crp.csv"
    wide.to_csv(file, index=False)
    subject = str(wide.columns[0]) if wide.columns[0] != "index" else "subject"
    plan().save(tmp_path / "plan.toml")
    words = [
        "sensitivity", str(file), "--subject", subject, "--occasions", ",".join(OCCASIONS),
        "--plan", str(tmp_path / "plan.toml"), "--out", str(tmp_path / "report"),
    ]  # fmt: skip
    result = CliRunner().invoke(main, words)
    assert result.exit_code == 0, result.output
    assert result.stdout.startswith("What holds and what does not")
    held = json.loads((tmp_path / "report" / "results.json").read_text(encoding="utf-8"))
    assert set(held["sensitivity"]) == {"overview", *PARTS}
