"""Runs and plates: which values were assayed together, and what that does to a comparison."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

import openpyxl
import pytest

from robustrm.errors import ArgumentError, DataError
from robustrm.reading import read_table
from robustrm.results import Note
from robustrm.table import OccasionTable

WEEKS = ("0", "6", "12")
PLATES: Mapping[str, tuple[str, str, str]] = {
    "own": ("A", "B", "C"),
    "shared": ("A", "A", "A"),
    "two": ("A", "A", "B"),
}


def rows(plates: Mapping[str, tuple[str, ...]]) -> list[tuple[str, str, str, str]]:
    return [
        (subject, week, f"{2 + i + j}.5", plate)
        for i, (subject, names) in enumerate(plates.items())
        for j, (week, plate) in enumerate(zip(WEEKS, names, strict=True))
    ]


def written(folder: Path, cells: list[tuple[str, str, str, str]]) -> Path:
    path = folder / "crp.csv"
    lines = ["id,week,crp,plate", *map(",".join, cells)]
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


def read(path: Path, **options) -> OccasionTable:
    layout = {"subject": "id", "occasion": "week", "value": "crp", "order": WEEKS}
    return read_table(path, **{**layout, "plate": "plate", **options})


def of_plates(table: OccasionTable) -> list[Note]:
    return [note for note in table.notes if note.code.startswith("plate")]


def told(table: OccasionTable) -> str:
    (line,) = table.ledger.of_step("plate")
    return line.what


def same(plates: tuple[str, str, str]) -> dict[str, tuple[str, str, str]]:
    return {f"P{i}": plates for i in range(1, 4)}


def test_each_occasion_in_a_plate_of_its_own_is_cautioned(tmp_path: Path):
    table = read(written(tmp_path, rows(same(PLATES["own"]))))
    (note,) = of_plates(table)
    assert note.code == "plate"
    assert note.fact == (
        "No plate of column 'plate' holds values of two occasions (0: A; 6: B; 12: C)."
    )
    assert "cannot be told from a change" in note.consequence
    assert told(table) == "3 plates in column 'plate'; 0 of 3 subjects with all values in one plate"
    assert table.source["plate"] == {
        "column": "plate",
        "n_plates": 3,
        "apart": [["0", "6"], ["0", "12"], ["6", "12"]],
        "confounded": True,
        "single": False,
    }


def test_several_plates_an_occasion_are_confounded_all_the_same(tmp_path: Path):
    plates = {"P1": ("A1", "B1", "C1"), "P2": ("A1", "B2", "C1"), "P3": ("A10", "B2", "C2")}
    (note,) = of_plates(read(written(tmp_path, rows(plates))))
    assert "(0: A1 and A10; 6: B1 and B2; 12: C1 and C2)" in note.fact


def test_a_person_in_one_plate_needs_no_caution(tmp_path: Path):
    plates = {"P1": ("A", "A", "A"), "P2": ("B", "B", "B"), "P3": ("B", "B", "B")}
    table = read(written(tmp_path, rows(plates)))
    assert of_plates(table) == []
    assert told(table) == "2 plates in column 'plate'; 3 of 3 subjects with all values in one plate"
    assert table.source["plate"]["confounded"] is False


def test_samples_spread_over_plates_need_none_either(tmp_path: Path):
    plates = {"P1": ("A", "B", "A"), "P2": ("B", "A", "B"), "P3": ("A", "A", "B")}
    table = read(written(tmp_path, rows(plates)))
    assert of_plates(table) == []
    assert "0 of 3 subjects" in told(table)


def test_one_value_in_another_plate_is_enough_to_tell_them_apart(tmp_path: Path):
    plates = {**same(PLATES["own"]), "P4": ("B", "C", "A")}
    assert of_plates(read(written(tmp_path, rows(plates)))) == []


def test_occasions_that_share_no_plate_are_named_where_others_do(tmp_path: Path):
    table = read(written(tmp_path, rows(same(PLATES["two"]))))
    (note,) = of_plates(table)
    assert note.fact == "Some occasions share no plate of column 'plate' (0 and 12; 6 and 12)."
    assert table.source["plate"]["confounded"] is False


def test_a_missing_value_was_assayed_nowhere(tmp_path: Path):
    """Alone the missing value would join the plates of week 0 and week 6."""
    cells = rows(same(PLATES["own"]))
    cells[1] = ("P1", "6", "haemolysed", "A")
    (note,) = of_plates(read(written(tmp_path, cells)))
    assert note.fact.startswith("No plate")
    cells[1] = ("P1", "6", "<0.3", "A")
    assert [n.fact.startswith("Some") for n in of_plates(read(written(tmp_path, cells)))] == [True]


def test_values_without_a_plate_are_named(tmp_path: Path):
    cells = rows(same(PLATES["own"]))
    cells[1] = (*cells[1][:3], "")
    missing, note = of_plates(read(written(tmp_path, cells)))
    assert missing.code == "plate missing"
    assert missing.fact == "1 value without a plate in column 'plate': P1 at 6."
    assert note.code == "plate"


def test_an_empty_column_says_nothing_of_plates(tmp_path: Path):
    table = read(written(tmp_path, rows(same(("", "", "")))))
    assert [note.code for note in of_plates(table)] == ["plate missing"]
    assert table.source["plate"]["confounded"] is False


def test_a_plate_of_its_own_for_every_value_reads_like_a_sample(tmp_path: Path):
    cells = [(*cell[:3], f"T{place}") for place, cell in enumerate(rows(same(PLATES["own"])))]
    (note,) = of_plates(read(written(tmp_path, cells)))
    assert note.fact == "Every value has a plate of its own in column 'plate'."


def test_the_order_of_the_rows_changes_nothing(tmp_path: Path):
    cells = rows(same(PLATES["two"]))
    cells[4] = (*cells[4][:3], "")
    one = read(written(tmp_path, cells))
    other = read(written(tmp_path, cells[::-1]))
    assert of_plates(one) == of_plates(other)
    assert told(one) == told(other)


def test_replicates_in_two_plates_are_in_both(tmp_path: Path):
    cells = [*rows(same(PLATES["own"])), ("P1", "0", "2.7", "B")]
    table = read(written(tmp_path, cells), replicates="mean")
    (note,) = of_plates(table)
    assert "(0 and 12; 6 and 12)" in note.fact


def test_conditions_choose_the_rows_that_count(tmp_path: Path):
    cells = [*rows(same(PLATES["own"])), *[("P9", w, "3.0", "A") for w in WEEKS]]
    path = tmp_path / "arms.csv"
    lines = ["id,week,crp,plate,arm"]
    lines += [f"{','.join(cell)},{'usual' if cell[0] == 'P9' else 'diet'}" for cell in cells]
    path.write_text("\n".join(lines), encoding="utf-8")
    assert of_plates(read(path, where="arm=diet"))[0].fact.startswith("No plate")


def test_a_workbook_is_read_alike(tmp_path: Path):
    book = openpyxl.Workbook()
    sheet = book.active
    assert sheet is not None
    sheet.append(["id", "week", "crp", "plate"])
    for subject, week, value, _ in rows(same(PLATES["own"])):
        sheet.append([subject, int(week), float(value), WEEKS.index(week) + 1])
    book.save(tmp_path / "crp.xlsx")
    table = read(tmp_path / "crp.xlsx")
    assert "(0: 1; 6: 2; 12: 3)" in of_plates(table)[0].fact


def test_without_the_option_nothing_is_said(tmp_path: Path):
    table = read(written(tmp_path, rows(same(PLATES["own"]))), plate=None)
    assert of_plates(table) == []
    assert table.ledger.of_step("plate") == ()
    assert "plate" not in table.source


def test_a_wide_file_has_no_column_for_it(tmp_path: Path):
    path = tmp_path / "wide.csv"
    path.write_text("id,w0,w6,plate\nP1,1,2,A\n", encoding="utf-8")
    with pytest.raises(ArgumentError, match="`plate` is for one row a cell, got 'plate' with `occ"):
        read_table(path, subject="id", occasions=["w0", "w6"], plate="plate")


def test_a_column_that_is_not_there_is_named_with_its_neighbour(tmp_path: Path):
    with pytest.raises(DataError, match=r"no column 'plat'\. Did you mean 'plate'\?"):
        read(written(tmp_path, rows(same(PLATES["own"]))), plate="plat")
