"""The CSV tables: unrounded, complete, and harmless in a spreadsheet."""

from __future__ import annotations

import csv
import io
import re

import pytest

from robustrm.analysis import Analysis
from robustrm.report.document import document
from robustrm.report.tables import csv_tables


def rows_of(text: str) -> list[dict[str, str]]:
    return list(csv.DictReader(io.StringIO(text)))


def test_every_table_is_there_and_rectangular(varied: Analysis):
    tables = csv_tables(document(varied))
    assert list(tables) == [
        "summary", "comparisons", "beside", "effects", "inclusion", "ledger", "cells",
    ]  # fmt: skip
    for text in tables.values():
        lines = list(csv.reader(io.StringIO(text)))
        assert len({len(line) for line in lines}) == 1
        assert text.endswith("\n")
        assert "\r" not in text


def test_numbers_are_written_without_loss(analysis: Analysis):
    tables = csv_tables(document(analysis))
    for kept, comparison in zip(rows_of(tables["comparisons"]), analysis.primary, strict=True):
        assert float(kept["p_value"]) == comparison.p_value
        assert float(kept["p_adjusted"]) == comparison.p_adjusted
        assert comparison.estimate is not None
        assert float(kept["estimate"]) == comparison.estimate.value
        assert float(kept["high"]) == comparison.estimate.high
    cells = rows_of(tables["cells"])
    assert len(cells) == analysis.table.values.size
    measured = [float(cell["value"]) for cell in cells if cell["state"] == "value"]
    plain = ~(analysis.table.censored | analysis.table.missing)
    assert measured == analysis.table.values[plain].tolist()


def test_roles_estimands_and_n_stand_in_every_row(analysis: Analysis):
    tables = csv_tables(document(analysis))
    for name in ("comparisons", "beside"):
        for row in rows_of(tables[name]):
            assert all(row[key] for key in ("role", "estimand", "scale", "n_subjects", "method"))


def test_no_cell_starts_a_formula(hostile: Analysis):
    number = re.compile(r"-?(\d+\.?\d*)(e[+-]?\d+)?")
    for text in csv_tables(document(hostile)).values():
        for line in csv.reader(io.StringIO(text)):
            for cell in line:
                assert not cell.startswith(("=", "+", "-", "@", "\t", "\r")) or number.fullmatch(
                    cell
                )


@pytest.mark.parametrize(("subject", "shown"), [("@SUM(A1)", "'@SUM(A1)"), ("-2", "'-2")])
def test_a_label_like_a_formula_gets_an_apostrophe(hostile: Analysis, subject: str, shown: str):
    held = document(hostile)
    assert subject in held["study"]["subjects"]
    assert shown in [row["subject"] for row in rows_of(csv_tables(held)["cells"])]


def test_a_label_with_comma_quote_and_line_end_survives(hostile: Analysis):
    subjects = [row["subject"] for row in rows_of(csv_tables(document(hostile))["cells"])]
    assert 'a,b\n"c"' in subjects
