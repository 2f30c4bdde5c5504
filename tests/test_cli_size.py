"""`robustrm size`: what it reads, prints, writes and returns."""

from __future__ import annotations

import json
import signal
import subprocess
import sys
from pathlib import Path

import pandas as pd
import pytest
from click.testing import CliRunner, Result

import robustrm as rm
from robustrm.cli import main
from robustrm.plan import Plan

pytestmark = pytest.mark.cli

ASKED = ("--cv-within", "0.42", "--cv-between", "0.9", "--seed", "1")
SMALL = ("--n", "8-9", "--datasets", "100")


def run(*words: str | Path) -> Result:
    return CliRunner().invoke(main, ["size", *map(str, words)])


def test_the_text_is_that_of_the_function():
    result = run(*ASKED, "--ratios", "1,0.8,0.6", *SMALL)
    assert result.exit_code == 0, result.output
    found = rm.sample_size(
        cv_within=0.42, cv_between=0.9, ratios=[1, 0.8, 0.6], n=[8, 9], datasets=100,
        plan=Plan(seed=1),
    )  # fmt: skip
    assert result.stdout == f"{found}\n"


def test_json_is_that_of_the_function_whatever_the_workers():
    words = (*ASKED, "--smallest-ratio", "0.6", "--visits", "3", *SMALL, "--json")
    here, there = run(*words), run(*words, "--workers", "2")
    assert here.stdout == there.stdout
    found = json.loads(here.stdout)
    assert found["assumed"]["ratios"] == [1, 1, 0.6]
    assert found["seed"] == 1
    assert {row["n"] for row in found["table"]} == {8, 9}


def test_options_are_the_arguments_and_edits_of_the_plan():
    words = (
        "--n", "8,10", "--target", "0.7", "--distribution", "log-t3", "--limit", "0.1",
        "--dropout", "0.2", "--datasets", "100", "--pair", "sign_test", "--adjust", "hommel",
        "--contrasts", "all", "--occasions", "week 0,week 2,week 6", "--missing", "complete",
    )  # fmt: skip
    found = json.loads(run(*ASKED, "--ratios", "1,0.8,0.6", *words, "--json").stdout)
    assumed = {
        "distribution": "log-t3", "limit": 0.1, "dropout": 0.2,
        "labels": ["week 0", "week 2", "week 6"],
    }  # fmt: skip
    assert {name: found["assumed"][name] for name in assumed} == assumed
    planned = {"pair": "sign_test", "adjust": "hommel", "contrasts": "all", "missing": "complete"}
    assert {name: found["plan"][name] for name in planned} == planned
    assert (found["target"], found["datasets"]) == (0.7, 100)
    assert [row["n"] for row in found["table"]][::15][:1] == [8]


def test_a_folder_has_tables_figure_text_and_plan(tmp_path: Path):
    result = run(*ASKED, "--ratios", "1,0.6", *SMALL, "--out", tmp_path / "size")
    assert result.exit_code == 0, result.output
    assert "Tables, figure and text" in result.stderr
    assert sorted(path.name for path in (tmp_path / "size").iterdir()) == [
        "attainable.csv", "plan.toml", "power.csv", "power.png", "power.svg", "sizing.json",
        "sizing.txt", "widths.csv",
    ]  # fmt: skip
    held = json.loads((tmp_path / "size" / "sizing.json").read_text(encoding="utf-8"))
    table = pd.read_csv(tmp_path / "size" / "power.csv")
    assert table["power"].tolist() == [row["power"] for row in held["table"]]
    assert Plan.load(tmp_path / "size" / "plan.toml").seed == 1
    again = run(*ASKED, "--ratios", "1,0.6", *SMALL, "--out", tmp_path / "size")
    assert again.exit_code == 2
    assert "must be new or empty" in again.stderr
    assert sorted(path.name for path in tmp_path.iterdir()) == ["size"]


def test_a_pilot_gives_the_variation(tmp_path: Path):
    file = tmp_path / "pilot.csv"
    file.write_text("id,a,b\nP1,3,4\nP2,7,6\nP3,2,2\nP4,9,8\nP5,6,4\n", encoding="utf-8")
    words = ("--pilot", file, "--subject", "id", "--occasions", "a,b", "--seed", "1", *SMALL)
    found = json.loads(run(*words, "--ratios", "1,0.8,0.6", "--json").stdout)
    table = rm.read_table(file, subject="id", occasions=["a", "b"])
    variation = rm.sample_size(pilot=table, ratios=[1, 0.5], n=[8], datasets=100, rng=1).pilot
    assert variation is not None
    assert found["pilot"] == variation.to_dict()
    assert found["assumed"]["cv_within"] == variation.cv_within
    # three occasions are planned, whatever the pilot had
    assert len(found["assumed"]["labels"]) == 3
    refused = run(*words[:4], "--ratios", "1,0.8")
    assert refused.exit_code == 3


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--cv-within", "42", "--cv-between", "1", "--ratios", "1,0.8"], "did you mean 0.42?"),
        ([*ASKED], "One of `--ratios` and `--smallest-ratio` must be given, got none"),
        ([*ASKED, "--ratios", "1,0.8", "--smallest-ratio", "0.8"], "got both"),
        ([*ASKED, "--smallest-ratio", "0.8"], "needs the number of occasions"),
        ([*ASKED, "--ratios", "1,low"], "'1,low' does not list ratios"),
        ([*ASKED, "--ratios", "1,0.8", "--n", "six"], "'six' does not list numbers of subjects"),
        ([*ASKED, "--ratios", "1,0.8", "--pair", "rank_pair"], "for a simulation"),
        ([*ASKED, "--ratios", "1,0.8", "--workers", "0"], "`workers` must be a whole number"),
    ],
)
def test_a_wrong_option_is_usage(words: list[str], said: str):
    result = run(*words)
    assert result.exit_code == 2
    assert said in result.stderr
    assert result.stdout == ""


@pytest.mark.slow
@pytest.mark.skipif(sys.platform == "win32", reason="signals are sent otherwise there")
def test_an_interrupt_ends_it_and_what_is_finished_is_kept(tmp_path: Path):
    words = [*ASKED, "--ratios", "1,0.8,0.6", "--pair", "sign_flip", "--n", "20-40"]
    line = [sys.executable, "-m", "robustrm", "size", *words, "--workers", "2"]
    kept = tmp_path / "kept"
    with subprocess.Popen(
        [*line, "--resume", str(kept)], stdout=subprocess.PIPE, stderr=subprocess.PIPE
    ) as process:
        while not list(kept.glob("*.npz")) and process.poll() is None:
            pass
        process.send_signal(signal.SIGINT)
        out, told = process.communicate()
    assert process.returncode == 130, told.decode()
    assert out == b""
    assert told.decode().strip() == "Interrupted."
    assert list(kept.glob("*.npz"))
    assert not list(kept.glob(".*.part"))
