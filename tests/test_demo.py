"""The invented data set is what its script makes, and comes out of the installed package."""

from __future__ import annotations

from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest

import robustrm as rm
from robustrm.demo import DEMO_FILE, make_demo, write_demo
from robustrm.errors import ArgumentError


@pytest.fixture
def table(tmp_path: Path) -> rm.OccasionTable:
    return rm.read_table(
        write_demo(tmp_path),
        subject="patient",
        occasions=list(make_demo.CHANGES),
        marker="faecal calprotectin",
        unit="µg/g",
    )


def test_the_shipped_file_is_what_the_script_makes():
    shipped = files("robustrm.demo").joinpath(DEMO_FILE).read_bytes()
    assert shipped == make_demo.demo_text().encode("utf-8")


def test_another_seed_makes_other_data():
    assert make_demo.demo_text(make_demo.SEED + 1) != make_demo.demo_text()


def test_the_script_says_that_nobody_was_measured():
    assert "invented" in (make_demo.__doc__ or "")


def test_it_is_written_whole_into_a_new_folder(tmp_path: Path):
    target = write_demo(tmp_path / "a" / "b")
    assert target == tmp_path / "a" / "b" / DEMO_FILE
    assert target.read_text(encoding="utf-8") == make_demo.demo_text()


def test_writing_it_again_changes_nothing(tmp_path: Path):
    first = write_demo(tmp_path).read_bytes()
    assert write_demo(tmp_path).read_bytes() == first


def test_a_different_file_of_that_name_is_left_alone(tmp_path: Path):
    (tmp_path / DEMO_FILE).write_text("mine\n", encoding="utf-8")
    with pytest.raises(ArgumentError, match=r"must not hold another calprotectin\.csv"):
        write_demo(tmp_path)
    assert (tmp_path / DEMO_FILE).read_text(encoding="utf-8") == "mine\n"


def test_it_has_the_faults_that_it_promises(table: rm.OccasionTable):
    assert table.values.shape == (14, 4)
    assert int(table.below.sum()) == 3
    assert np.unique(table.lower_limit).tolist() == [30.0]
    assert int(table.missing.sum()) == 1
    assert table.tokens[table.missing].tolist() == ["missed"]


def test_it_is_skewed_and_the_change_is_moderate(table: rm.OccasionTable):
    # The model says 0.60 at week 12 and a person SD of 0.95; a sample of 14 lies near both.
    logs = np.log(table.values)
    assert 0.55 < np.exp(np.mean(logs[:, 3] - logs[:, 0])) < 0.65
    first = table.values[:, 0]
    assert first.mean() > 1.3 * np.median(first)
    assert first.max() > 1000
