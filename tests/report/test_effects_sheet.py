"""The effect sizes of a report: grouped, none silent, the same numbers as those of the analysis."""

from __future__ import annotations

import csv
import io
import re

import pytest

from robustrm.analysis import Analysis, analyze
from robustrm.plan import Plan
from robustrm.report.document import document
from robustrm.report.effects_sheet import effects_sheet
from robustrm.report.tables import csv_tables
from tests.report.conftest import invented


def rows(analysis: Analysis) -> list[dict[str, str]]:
    return list(csv.DictReader(io.StringIO(csv_tables(document(analysis))["effects"])))


def test_every_effect_has_a_row_and_its_group_a_heading(varied: Analysis):
    sheet = effects_sheet(document(varied))
    assert len(sheet.lines) == len(varied.effects)
    headings = [group.heading for group in sheet.groups]
    assert len(headings) == len(set(headings))
    for effect in varied.effects:
        words = f"{effect.estimate.name} ({effect.reading})"
        assert any(heading.endswith(words) for heading in headings)


def test_what_is_not_given_says_why(varied: Analysis):
    for line, effect in zip(effects_sheet(document(varied)).lines, varied.effects, strict=True):
        if effect.is_given:
            assert line.cells[3] != "not given"
        else:
            assert line.cells[3:8] == ("not given", "–", "–", "–", "–")
            assert line.cells[-1] == " ".join(map(str, effect.estimate.notes))
            assert line.cells[-1]


def test_an_interval_stands_with_its_level_and_kind(varied: Analysis):
    for line, effect in zip(effects_sheet(document(varied)).lines, varied.effects, strict=True):
        if effect.estimate.low is not None:
            assert " to " in line.cells[4]
            assert line.cells[5] != "–"
            assert line.cells[6] == effect.estimate.kind
        elif effect.is_given:
            assert line.cells[-1] != "–"


def test_the_table_file_holds_the_numbers_unrounded(analysis: Analysis):
    for row, effect in zip(rows(analysis), analysis.effects, strict=True):
        assert (row["group"], row["label"], row["name"]) == (
            effect.group, effect.label, effect.estimate.name,
        )  # fmt: skip
        assert float(row["value"]) == effect.estimate.value
        assert float(row["no_change"]) == effect.estimate.neutral
        assert row["scale"] == (effect.scale or "")


def test_below_ten_subjects_the_robust_difference_is_an_empty_cell_with_its_reason():
    held = rows(analyze(invented(8), Plan(seed=1)))
    missing = [row for row in held if not row["value"]]
    assert {row["name"] for row in missing} == {"robust standardized difference"}
    assert {row["notes"] for row in missing} == {
        "The robust standardized difference is given from 10 subjects, not 8."
    }


def test_numbers_in_units_of_spread_have_two_decimals(analysis: Analysis):
    sheet = effects_sheet(document(analysis))
    (group,) = [g for g in sheet.groups if "Cohen's d_z" in g.heading]
    for line in group.lines:
        assert re.fullmatch(r"−?\d+\.\d\d", line.cells[3])


@pytest.mark.parametrize("style", ["medical", "apa"])
def test_a_bounded_number_follows_the_style(analysis: Analysis, style: str):
    sheet = effects_sheet(document(analysis), style)  # type: ignore[arg-type]
    value = sheet.lines[0].cells[3]
    assert value.startswith("0.") == (style == "medical") or value == "1.00"
