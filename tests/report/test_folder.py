"""A report folder appears whole or not at all, and takes nothing else away."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from robustrm.analysis import Analysis
from robustrm.errors import ArgumentError, RobustrmError
from robustrm.plan import Plan
from robustrm.report import folder as room
from robustrm.report.folder import write_report


def contents(folder: Path) -> dict[str, bytes]:
    return {
        path.relative_to(folder).as_posix(): path.read_bytes()
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


def test_the_files_of_a_report(small: Analysis, tmp_path: Path):
    target = tmp_path / "deep" / "report"
    assert write_report(small, target) == target
    names = set(contents(target))
    assert names >= {"report.html", "results.json", "methods.txt", "plan.toml"}
    assert {f"tables/{name}.csv" for name in (
        "summary", "comparisons", "beside", "effects", "ledger", "inclusion", "cells",
    )} <= names  # fmt: skip
    drawn = {Path(name).stem for name in names if name.startswith("figures/")}
    assert "comparisons" in drawn
    assert all({f"figures/{stem}.svg", f"figures/{stem}.png"} <= names for stem in drawn)
    assert Plan.load(target / "plan.toml") == small.plan
    assert json.loads((target / "results.json").read_text("utf-8")) == small.to_dict()
    assert list(target.parent.iterdir()) == [target]


def test_equal_analyses_give_equal_bytes(small: Analysis, tmp_path: Path):
    one = contents(write_report(small, tmp_path / "one"))
    assert contents(write_report(small, tmp_path / "other")) == one


def test_progress_is_told(small: Analysis, tmp_path: Path):
    steps: list[tuple[int, int]] = []
    write_report(small, tmp_path / "r", progress=lambda done, total: steps.append((done, total)))
    assert steps == [(done, len(steps)) for done in range(1, len(steps) + 1)]


def test_an_earlier_report_is_replaced_with_nothing_of_it_left(small: Analysis, tmp_path: Path):
    target = write_report(small, tmp_path / "report")
    (target / "figures" / "change-99.svg").write_text("old")
    (target / ".DS_Store").write_text("left by a file browser")
    write_report(small, target, style="apa")
    assert "figures/change-99.svg" not in contents(target)
    assert "p = ." in (target / "methods.txt").read_text("utf-8")
    assert list(tmp_path.iterdir()) == [target]


def test_an_empty_folder_is_taken(small: Analysis, tmp_path: Path):
    target = tmp_path / "report"
    target.mkdir()
    write_report(small, target)
    assert (target / "report.html").exists()


def test_another_folder_is_never_touched(small: Analysis, tmp_path: Path):
    target = tmp_path / "thesis"
    target.mkdir()
    (target / "chapter.txt").write_text("dear")
    with pytest.raises(ArgumentError, match=r"got 'thesis', which holds chapter\.txt\. Name a new"):
        write_report(small, target)
    assert contents(tmp_path) == {"thesis/chapter.txt": b"dear"}


@pytest.mark.parametrize("name", ["figures/my notes.docx", "figures/poster.png", "tables/mine.csv"])
def test_a_file_that_others_put_into_a_report_is_not_taken_away(
    small: Analysis, tmp_path: Path, name: str
):
    target = write_report(small, tmp_path / "report")
    (target / name).write_text("dear")
    before = contents(target)
    with pytest.raises(ArgumentError, match=f"which holds {name.split('/')[0]}"):
        write_report(small, target)
    assert contents(target) == before


def test_results_of_something_else_are_no_report(small: Analysis, tmp_path: Path):
    target = tmp_path / "other"
    target.mkdir()
    (target / "results.json").write_text('{"schema": "other"}')
    with pytest.raises(ArgumentError, match="an earlier report and nothing else"):
        write_report(small, target)


def test_a_file_in_the_place_is_refused(small: Analysis, tmp_path: Path):
    (tmp_path / "report").write_text("dear")
    with pytest.raises(ArgumentError, match="must be a folder, got the file 'report'"):
        write_report(small, tmp_path / "report")


def test_the_current_folder_is_refused(
    small: Analysis, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
):
    inside = tmp_path / "a" / "b"
    inside.mkdir(parents=True)
    monkeypatch.chdir(inside)
    for place in (".", ".."):
        with pytest.raises(ArgumentError, match="must not hold the current folder"):
            write_report(small, place)


@pytest.mark.parametrize("failure", [KeyboardInterrupt, ValueError, MemoryError])
def test_nothing_is_left_when_writing_stops(
    small: Analysis,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    failure: type[BaseException],
):
    target = write_report(small, tmp_path / "report")
    before = contents(tmp_path)

    def stop(*args: object) -> None:
        raise failure

    monkeypatch.setattr(room, "_write_figures", stop)
    with pytest.raises(failure):
        write_report(small, target)
    assert contents(tmp_path) == before
    assert list(tmp_path.iterdir()) == [target]


@pytest.mark.parametrize("failure", [KeyboardInterrupt, OSError(28, "No space left on device")])
def test_the_earlier_report_comes_back_when_the_last_rename_fails(
    small: Analysis,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    failure: BaseException,
):
    target = write_report(small, tmp_path / "report")
    before = contents(tmp_path)
    rename = Path.rename

    def refuse(self: Path, other: Path) -> Path:
        if self.name.endswith(".part"):
            raise failure
        return rename(self, other)

    monkeypatch.setattr(Path, "rename", refuse)
    with pytest.raises((KeyboardInterrupt, RobustrmError)):
        write_report(small, target)
    monkeypatch.undo()
    assert contents(tmp_path) == before
    assert list(tmp_path.iterdir()) == [target]


def test_an_error_of_the_file_system_is_told_plainly(
    small: Analysis, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
):
    def full(*args: object) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(room, "_write_tables", full)
    with pytest.raises(RobustrmError, match=r"cannot be written.*: No space left on device\. Noth"):
        write_report(small, tmp_path / "report")
    assert list(tmp_path.iterdir()) == []


def test_a_style_that_does_not_exist_is_refused(small: Analysis, tmp_path: Path):
    with pytest.raises(ArgumentError, match="Did you mean 'medical'"):
        write_report(small, tmp_path / "report", style="medicl")  # type: ignore[arg-type]  # that is the test
