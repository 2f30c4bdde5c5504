"""One study in every layout is one table; what came from where is told; options are checked."""

from __future__ import annotations

import contextlib
import datetime as dt
import hashlib
import io
import random
from pathlib import Path
from typing import Any

import numpy as np
import openpyxl
import pytest
from hypothesis import given
from hypothesis import strategies as st

from robustrm.errors import ArgumentError, DataError, RobustrmError
from robustrm.reading import read_table
from robustrm.reading.audit import audit_lines, is_arm, is_private, state_map
from robustrm.table import OccasionTable

OCCASIONS = ["week 0", "week 2", "week 10"]
ROWS = [
    ("P1", "3.1", "2.05", "<0.3"),
    ("P2", "0.45", "missed", "0.7"),
    ("P10", "12", "8.8", "haemolysed"),
    ("007", "<0.3", "1.5", ""),
]
OPTIONS: dict[str, Any] = {"subject": "id", "marker": "CRP", "unit": "mg/L"}
WIDE: dict[str, Any] = {**OPTIONS, "occasions": OCCASIONS}
LONG: dict[str, Any] = {**OPTIONS, "occasion": "visit", "value": "result", "order": OCCASIONS}


def wide_text(rows=ROWS, delimiter=",") -> bytes:
    lines = [("id", *OCCASIONS), *rows]
    return "\n".join(delimiter.join(line) for line in lines).encode()


def long_text(rows=ROWS) -> bytes:
    lines = ["id,visit,result"]
    lines += [
        f"{name},{label},{text}"
        for name, *texts in rows
        for label, text in zip(OCCASIONS, texts, strict=True)
    ]
    return "\n".join(lines).encode()


def workbook(*sheets: tuple[str, list]) -> bytes:
    book = openpyxl.Workbook()
    del book["Sheet"]
    for title, rows in sheets:
        sheet = book.create_sheet(title)
        for row in rows:
            sheet.append(row)
    return saved(book)


def saved(book: openpyxl.Workbook) -> bytes:
    stream = io.BytesIO()
    book.save(stream)
    return stream.getvalue()


def as_number(text: str) -> object:
    try:
        return float(text)
    except ValueError:
        return text or None


def wide_workbook() -> bytes:
    rows = [[name, *map(as_number, texts)] for name, *texts in ROWS]
    return workbook(("data", [["id", *OCCASIONS], *rows]))


def read(data: bytes, **options) -> OccasionTable:
    return read_table(io.BytesIO(data), **options)


def problem_of(data: bytes, **options) -> str:
    with pytest.raises(DataError) as caught:
        read(data, **options)
    return str(caught.value)


# ── one study, one table ──────────────────────────────────────────────────────────────


def test_four_layouts_give_one_table():
    first = read(wide_text(), **WIDE)
    semicolons = wide_text([tuple(t.replace(".", ",") for t in row) for row in ROWS], ";")
    assert read(long_text(), **LONG) == first
    assert read(semicolons, **WIDE) == first
    assert read(wide_workbook(), **WIDE) == first
    assert first.step is not None
    assert first.tokens.tolist() == [["", "", ""], ["", "missed", ""], ["", "", "haemolysed"],
                                     ["", "", ""]]  # fmt: skip


def test_a_frame_gives_the_table_of_the_file():
    import pandas as pd

    wide = pd.DataFrame(ROWS, columns=["id", *OCCASIONS])
    first = read(wide_text(), **WIDE)
    assert OccasionTable.from_wide(wide, **WIDE) == first
    long = wide.melt(id_vars="id", var_name="visit", value_name="result")
    assert OccasionTable.from_long(long, **LONG) == first


@pytest.mark.property
@given(st.randoms())
def test_shuffled_rows_and_columns_have_the_same_content(shuffler: random.Random):
    rows = list(ROWS)
    shuffler.shuffle(rows)
    first = read(wide_text(), **WIDE)
    again = read(wide_text(rows), **WIDE)
    assert again.in_natural_order() == first.in_natural_order()
    np.testing.assert_array_equal(again.by_content().values, first.by_content().values)
    columns = [0, 1, 2, 3]
    shuffler.shuffle(columns)
    lines = [[line[j] for j in columns] for line in [("id", *OCCASIONS), *ROWS]]
    assert read("\n".join(map(",".join, lines)).encode(), **WIDE) == first
    body = long_text().decode().split("\n")
    moved = body[1:]
    shuffler.shuffle(moved)
    shuffled = read("\n".join([body[0], *moved]).encode(), **LONG)
    assert shuffled.in_natural_order() == first.in_natural_order()


@pytest.mark.property
@given(st.binary(max_size=300) | st.text(alphabet="id,;\t\"'\n\r0129.<>-# Pw=", max_size=200))
def test_junk_stops_with_a_sentence_and_never_otherwise(junk: bytes | str):
    data = junk.encode() if isinstance(junk, str) else junk
    for options in (WIDE, LONG, {}):
        with contextlib.suppress(RobustrmError):
            read(data, **options)


# ── what the table says of its source ─────────────────────────────────────────────────


def test_the_source_tells_file_and_layout_and_no_folder(tmp_path: Path):
    path = tmp_path / "crp.csv"
    path.write_bytes(wide_text())
    table = read_table(path, **WIDE)
    assert table.source == {
        "file": "crp.csv",
        "sha256": hashlib.sha256(wide_text()).hexdigest(),
        "kind": "text",
        "encoding": "utf-8",
        "delimiter": "comma",
        "layout": "wide",
        "decimal": ".",
        "n_rows": 4,
    }
    assert table.ledger.of_step("read")[0].what == "12 cells in 4 rows of 'crp.csv' (wide)"
    assert table == read_table(str(path), **WIDE)


def test_the_source_of_a_workbook_names_the_sheet():
    source = read(wide_workbook(), **WIDE).source
    assert (source["kind"], source["sheet"]) == ("workbook", "data")


@pytest.mark.parametrize(
    ("options", "name"),
    [({}, "result"), ({"marker": "CRP"}, "CRP")],
)
def test_the_marker_is_the_heading_or_declared(options: dict, name: str):
    chosen = {key: value for key, value in LONG.items() if key != "marker"}
    assert read(long_text(), **chosen, **options).marker == name


def test_the_marker_chosen_by_a_condition_names_the_table():
    data = long_text().replace(b"id,", b"analyte,id,").replace(b"\n", b"\nIL-6,")
    options = {key: value for key, value in LONG.items() if key != "marker"}
    assert read(data, **options, where="analyte=IL-6").marker == "IL-6"


# ── files that cannot be opened ───────────────────────────────────────────────────────


def test_a_file_that_is_not_there_is_named_with_its_neighbour(tmp_path: Path):
    (tmp_path / "calprotectin.csv").write_bytes(wide_text())
    with pytest.raises(DataError) as caught:
        read_table(tmp_path / "calprotectine.csv", **WIDE)
    assert "there is no file 'calprotectine.csv'. Did you mean 'calprotectin.csv'?" in str(
        caught.value
    )
    assert str(tmp_path) not in str(caught.value)


def test_a_folder_is_no_file(tmp_path: Path):
    with pytest.raises(DataError, match="this is a folder"):
        read_table(tmp_path, **WIDE)


def test_a_path_with_a_zero_byte_is_no_file():
    with pytest.raises(DataError, match="cannot be opened"):
        read_table("a\0b", **WIDE)


def test_a_file_in_text_mode_is_refused():
    with pytest.raises(ArgumentError, match="binary mode"):
        read_table(io.StringIO("id,w0\n"), **WIDE)  # type: ignore[arg-type]


def test_a_huge_file_is_refused(monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr("robustrm.reading.files.LARGEST_FILE", 20)
    assert "the file is larger than 0 MB" in problem_of(wide_text(), **WIDE)


# ── workbooks ─────────────────────────────────────────────────────────────────────────

HEAD = ["id", *OCCASIONS]


def test_several_sheets_are_listed_and_one_is_chosen():
    data = workbook(("notes", [["free text"]]), ("CRP", [HEAD, ["P1", 1, 2, 3]]), ("empty", []))
    said = problem_of(data, **WIDE)
    assert "the workbook has 2 sheets with content: 'notes' and 'CRP'. Choose one with" in said
    assert read(data, sheet="CRP", **WIDE).values.tolist() == [[1, 2, 3]]
    assert "there is no sheet 'crp'" in problem_of(data, sheet="crp", **WIDE)


def test_a_sheet_of_a_text_file_is_an_argument_error():
    with pytest.raises(ArgumentError, match="`sheet` is for workbooks, got 'CRP'"):
        read(wide_text(), sheet="CRP", **WIDE)


def test_an_empty_workbook_is_refused():
    assert "no sheet of the workbook holds anything" in problem_of(workbook(("a", [])), **WIDE)


def test_a_date_in_a_column_of_values_stops():
    data = workbook(("data", [HEAD, ["P1", dt.datetime(2026, 2, 1), 2, 3]]))  # noqa: DTZ001
    said = problem_of(data, **WIDE)
    assert "(row 2, column 'week 0', text '2026-02-01')" in said
    assert "A spreadsheet may have turned a number such as 1-2 or 1.2 into a date" in said


def test_dates_may_be_occasions():
    days = [dt.datetime(2026, 2, 1), dt.datetime(2026, 3, 1)]  # noqa: DTZ001
    data = workbook(("data", [["id", "day", "CRP"], *[["P1", day, 1] for day in days]]))
    table = read(
        data, subject="id", occasion="day", value="CRP", order=["2026-02-01", "2026-03-01"]
    )
    assert table.occasions == ("2026-02-01", "2026-03-01")


def test_a_formula_without_a_stored_result_stops():
    data = workbook(("data", [HEAD, ["P1", "=1+1", 2, 3]]))
    assert "'=1+1' of P1 at week 0 is a formula without a stored result." in problem_of(
        data, **WIDE
    )


def test_an_error_of_a_formula_stops():
    data = workbook(("data", [HEAD, ["P1", "#DIV/0!", 2, 3]]))
    assert "'#DIV/0!' of P1 at week 0 is the error of a spreadsheet formula." in problem_of(
        data, **WIDE
    )


def test_merged_identifiers_stop_with_their_row():
    rows = [["id", "visit", "CRP"], ["P1", "T1", 1], [None, "T2", 2]]
    book = openpyxl.load_workbook(io.BytesIO(workbook(("data", rows))))
    book["data"].merge_cells("A2:A3")
    said = problem_of(saved(book), subject="id", occasion="visit", value="CRP", order=["T1", "T2"])
    assert "[no identifier] (row 3, column 'id'" in said
    assert "cells merged in a spreadsheet" in said


def test_identifiers_shown_with_leading_zeros_keep_them():
    book = openpyxl.load_workbook(io.BytesIO(workbook(("data", [HEAD, [7, 1, 2, 3]]))))
    book["data"]["A2"].number_format = "000"
    assert read(saved(book), **WIDE).subjects == ("007",)


def test_a_number_of_a_workbook_needs_no_decimal_mark():
    data = workbook(("data", [HEAD, ["P1", 1.234, "0,45", "2,5"]]))
    assert read(data, **WIDE).values.tolist() == [[1.234, 0.45, 2.5]]


def test_blank_rows_and_columns_of_a_workbook_are_passed():
    data = workbook(("data", [["a title"], [], [*HEAD, None], ["P1", 1, 2, 3], [], [None]]))
    table = read(data, **WIDE)
    assert table.n_subjects == 1
    assert "row 1 above the headings" in str(table.ledger)


def test_a_workbook_that_unpacks_to_too_much_is_refused(monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr("robustrm.reading.workbooks._MOST_UNPACKED", 10)
    assert "the workbook unpacks to" in problem_of(wide_workbook(), **WIDE)


def test_a_sheet_with_too_many_rows_is_refused(monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr("robustrm.reading.workbooks._MOST_ROWS", 2)
    assert "the sheet has more than 2 rows" in problem_of(wide_workbook(), **WIDE)


# ── options ───────────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize(
    ("options", "text"),
    [
        (
            {**WIDE, "value": "CRP", "order": ["a", "b"]},
            "`occasions` is for one row a subject and `value` and `order` for one row a cell",
        ),
        ({**WIDE, "occasions": ["week 0"]}, "`occasions` must hold at least 2 names, got 1."),
        ({**WIDE, "where": "arm"}, "`where` must be written as COLUMN=VALUE, got 'arm'."),
        ({**WIDE, "where": ["arm=a", "arm=b"]}, "`where` must name one value a column"),
        ({**WIDE, "replicates": "median"}, "`replicates` must be one of 'mean', 'geometric'"),
        ({**LONG, "order": ["week 0", "week 0"]}, "`order` must not repeat a name"),
    ],
)
def test_an_option_that_breaks_its_rule(options: dict, text: str):
    with pytest.raises(ArgumentError) as caught:
        read(wide_text(), **options)
    assert str(caught.value).startswith(text)


def test_conditions_add_up():
    data = b"id,arm,sex,w0,w2\nP1,diet,f,1,2\nP2,diet,m,3,4\nP3,usual,f,5,6\n"
    table = read(data, subject="id", occasions=["w0", "w2"], where=["arm=diet", "sex=m"])
    assert table.subjects == ("P2",)


# ── the audit ─────────────────────────────────────────────────────────────────────────


def test_the_state_map_shows_who_has_what():
    states = state_map(read(wide_text(), **WIDE))
    assert states.index.tolist() == ["007", "P1", "P2", "P10"]
    assert list(states.loc["P2"]) == ["value", "missed", "value"]
    assert list(states.loc["007"]) == ["below", "value", "missing"]
    assert audit_lines(read(wide_text(), **WIDE))[0] == (
        "week 0: 4 cells of 4, 1 below and 0 above a limit"
    )


@pytest.mark.parametrize("heading", ["arm", "Group", "treatment", "study_arm", "TreatmentGroup",
                                     "allocation", "Randomisation", "cohort"])  # fmt: skip
def test_headings_of_arms_are_known(heading: str):
    assert is_arm(heading)


@pytest.mark.parametrize("heading", ["age group", "warm", "harm", "week", "blood group"])
def test_other_headings_are_no_arms(heading: str):
    assert not is_arm(heading)


@pytest.mark.parametrize("heading", ["name", "Last Name", "patient_name", "DOB", "date of birth",
                                     "e-mail", "initials"])  # fmt: skip
def test_headings_of_personal_details_are_known(heading: str):
    assert is_private(heading)


@pytest.mark.parametrize("heading", ["id", "subject", "patient", "marker", "week 0"])
def test_other_headings_are_not_personal(heading: str):
    assert not is_private(heading)


@pytest.mark.property
@given(
    st.lists(st.floats(1, 1.4), min_size=3, max_size=5),
    st.integers(0, 2),
    st.sampled_from([0.1, 10]),
)
def test_a_tenfold_error_is_flagged_and_left(values: list[float], place: int, factor: float):
    texts = [f"{value:.3f}" for value in values]
    texts[place] = f"{values[place] * factor * (1.2 if factor > 1 else 0.8):.4f}"
    labels = [f"w{j}" for j in range(len(texts))]
    data = f"id,{','.join(labels)}\nP1,{','.join(texts)}\n".encode()
    table = read(data, subject="id", occasions=labels)
    assert [note.code for note in table.notes] == ["jump"]
    assert f"P1 at w{place}" in table.notes[0].fact
    assert table.values[0, place] == float(texts[place])


def test_a_true_course_is_not_flagged():
    data = b"id,w0,w2,w6\nP1,1,4,16\nP2,<0.3,5,5\n"
    table = read(data, subject="id", occasions=["w0", "w2", "w6"])
    assert "jump" not in [note.code for note in table.notes]


def test_nothing_that_is_said_depends_on_how_the_file_is_sorted(tmp_path: Path):
    """Rows and columns reversed: the same ledger and the same notes, digest and name apart."""
    rows = [
        ["id", "w0", "w1", "w2"], ["A", "1*", "2", "3"], ["b", "4*", "<0.3", "1"],
        ["C", "5", "<0.3", "0.2"], ["D", "7", "ND", "missed"], ["E", "3", "30", "3"],
        ["F", "3", "nd", "0.1"], ["G", "33", "2", "2"], ["H", "2", "NA", "4"],
        ["p7", "1", "1", "1"], ["P7 ", "1", "2", "3"], ["c ", "1", "2", "4"],
    ]  # fmt: skip
    turned = [row[::-1] for row in [rows[0], *rows[:0:-1]]]
    tables = []
    for name, lines in (("as it is", rows), ("turned", turned)):
        folder = tmp_path / name
        folder.mkdir()
        path = folder / "file.csv"
        path.write_text("\n".join(",".join(line) for line in lines), encoding="utf-8")
        tables.append(read_table(path, subject="id", occasions=["w0", "w1", "w2"]))
    first, second = tables
    assert first.notes
    assert first.notes == second.notes
    assert first.ledger == second.ledger
    assert first.in_natural_order() == second.in_natural_order()
