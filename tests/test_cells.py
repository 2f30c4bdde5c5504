"""One cell at a time: what is read, what is refused, and that nothing is guessed."""

from __future__ import annotations

import math
from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from robustrm.cells import (
    Cell,
    lone_mark,
    looks_like_unit,
    marks_of,
    normal_unit,
    parse_cell,
)

THIN = "\u202f"

NUMBERS = [
    ("0,45", "0.45", 2),
    ("0.45", "0.45", 2),
    ("0.10", "0.10", 2),
    ("12,34", "12.34", 2),
    ("0,123", "0.123", 3),  # no number in groups of three begins with 0
    ("1234,567", "1234.567", 3),
    ("1.234", "1.234", 3),
    ("1.234,5", "1234.5", 1),
    ("1,234.5", "1234.5", 1),
    ("1.234.567", "1234567", 0),
    ("1,234,567", "1234567", 0),
    ("1'234.5", "1234.5", 1),
    (f"1{THIN}234,5", "1234.5", 1),
    ("\u00a03.1\u00a0", "3.1", 1),
    ("−2", "-2", 0),
    ("+3", "3", 0),
    (".5", "0.5", 1),
    ("5.", "5", 0),
    ("1e-3", "0.001", 3),
    ("1E3", "1000", 0),
    ("-99", "-99", 0),
]


@pytest.mark.parametrize(("text", "number", "places"), NUMBERS)
def test_a_number_keeps_its_value_and_its_places(text: str, number: str, places: int):
    cell = parse_cell(text)
    assert (cell.kind, cell.number, cell.places) == ("value", Decimal(number), places)


def test_the_lone_comma_is_ambiguous_until_declared():
    assert parse_cell("1,234") == Cell("refused", token="1,234", reason="ambiguous")
    assert parse_cell("1,234", decimal=",").number == Decimal("1.234")
    assert parse_cell("1,234", decimal=".").number == Decimal(1234)
    assert parse_cell("1.234", decimal=",").number == Decimal(1234)
    assert parse_cell("<1,234").reason == "ambiguous"


def test_a_declared_mark_is_not_bent():
    assert parse_cell("0.45", decimal=",").reason == "decimal mark"
    assert parse_cell("0,45", decimal=".").reason == "decimal mark"
    assert parse_cell("1.234,5", decimal=".").reason == "decimal mark"


LIMITS = [
    ("<0.3", "below", "0.3"),
    ("< 0,3", "below", "0.3"),
    ("≤0.3", "below", "0.3"),
    ("<=0.3", "below", "0.3"),
    ("<0.30*", "below", "0.30"),
    (">20", "above", "20"),
    ("≥ 20", "above", "20"),
]


@pytest.mark.parametrize(("text", "kind", "number"), LIMITS)
def test_a_limit_keeps_its_side_and_its_number(text: str, kind: str, number: str):
    cell = parse_cell(text)
    assert (cell.kind, cell.number) == (kind, Decimal(number))


@pytest.mark.parametrize(
    "text", ["<LOD", "< LLOQ", "ND", "n.d.", "BLQ", "bdl", "LOD", "not detected", "<", "Non-detect"]
)
def test_a_word_for_below_a_limit_is_not_missing(text: str):
    cell = parse_cell(text)
    assert (cell.kind, cell.number, cell.token) == ("below", None, text)


@pytest.mark.parametrize("text", [">ULOQ", "> uloq", "ALQ", ">"])
def test_a_word_for_above_a_limit_is_not_missing(text: str):
    assert (parse_cell(text).kind, parse_cell(text).number) == ("above", None)


@pytest.mark.parametrize(
    "text",
    ["", "  ", "NA", "N/A", "n.a.", "nan", "-", "–", "—", ".", "missed", "Missing", "haemolysed",
     "hemolyzed", "not done", "insufficient", "QNS", "withdrawn"],
)  # fmt: skip
def test_a_missing_value_keeps_its_reason(text: str):
    assert parse_cell(text).kind == "missing"
    assert parse_cell(text).token == text.strip()


REFUSED = [
    ("inf", "infinite"),
    ("-Infinity", "infinite"),
    ("0x1F", "unit"),
    ("1_000", "text"),
    ("1 234", "text"),
    ("5,", "text"),
    ("1.234.56", "text"),
    ("1,2,3", "text"),
    ("3.1 mg/L", "unit"),
    ("12.3 H", "unit"),
    ("5%", "unit"),
    ("2026-02-01", "date"),
    ("2026-02-01 00:00:00", "date"),
    ("01.02.2026", "date"),
    ("1/2/26", "date"),
    ("1-2", "date"),
    ("01-Feb", "date"),
    ("1. Feb.", "date"),
    ("Feb-26", "date"),
    ("#DIV/0!", "spreadsheet error"),
    ("#N/A", "spreadsheet error"),
    ("=B2*2", "formula"),
    ("<0", "limit"),
    ("<-1", "limit"),
    ("see note", "text"),
    ("TRUE", "text"),
    ("*", "text"),
    ("~0.3", "text"),
    ("0.3 ± 0.1", "text"),
    ("1e999", "size"),
    ("1e-999", "size"),
    ("١٢", "text"),
    ("9" * 100, "text"),
]


@pytest.mark.parametrize(("text", "reason"), REFUSED)
def test_what_cannot_be_read_is_refused_with_a_reason(text: str, reason: str):
    assert parse_cell(text) == Cell("refused", token=text, reason=reason)


def test_a_flag_leaves_the_value():
    cell = parse_cell("0.3*")
    assert (cell.kind, cell.number, cell.reason) == ("value", Decimal("0.3"), "flagged")


@pytest.mark.property
@given(st.text() | st.text(alphabet="0123456789.,<>-+eE*' \u202f%/"))
def test_no_text_is_too_strange(text: str):
    for decimal in (None, ".", ","):
        cell = parse_cell(text, decimal=decimal)
        assert cell.kind in ("value", "below", "above", "missing", "refused")
        assert (cell.kind == "refused") <= bool(cell.reason)
        if cell.kind == "value":
            assert cell.number is not None
            assert math.isfinite(float(cell.number))
        else:
            assert cell.kind in ("below", "above") or cell.number is None


@pytest.mark.property
@given(st.floats(allow_nan=False, allow_infinity=False))
def test_the_text_of_a_float_gives_the_float(value: float):
    number = parse_cell(repr(value), decimal=".").number
    assert number is not None
    assert float(number) == value


@pytest.mark.property
@given(st.decimals(min_value=-(10**6), max_value=10**6, places=3))
def test_the_decimal_mark_does_not_change_the_number(value: Decimal):
    written = f"{value:f}"
    assert parse_cell(written, decimal=".").number == value
    assert parse_cell(written.replace(".", ","), decimal=",").number == value
    grouped = f"{value:,f}"
    assert parse_cell(grouped, decimal=".").number == value
    swapped = grouped.translate(str.maketrans(".,", ",."))
    assert parse_cell(swapped, decimal=",").number == value


def test_a_file_settles_its_marks_beyond_doubt_or_not_at_all():
    assert marks_of(["0,45"]).settle(",") == ","
    assert marks_of(["0.45"]).settle(".") == "."
    assert marks_of([]).settle(".") == "."
    assert marks_of([]).settle(",") is None
    assert marks_of(["0.45"]).settle(",") is None  # thousands, or a slip of the keyboard
    assert marks_of(["0.45", "1,234.5"]).settle(",") == "."
    assert marks_of(["0,45"]).settle(".") is None
    assert marks_of(["0,45", "1.234.567"]).settle(".") == ","
    assert marks_of(["0,45", "0.45"]).settle(",") is None
    assert marks_of(["1,234"]).settle(",") is None  # does not prove itself


def test_a_lone_mark_is_found():
    assert lone_mark("1,234") == lone_mark("<1,234*") == ","
    assert lone_mark("1.234") == "."
    assert lone_mark("0,123") == lone_mark("12,34") == lone_mark("week 1,234") == ""


def test_units_have_one_micro_sign_and_no_brackets():
    assert normal_unit("[\u03bcg/L]") == normal_unit(" \u00b5g/L ") == "\u00b5g/L"


@pytest.mark.parametrize(
    ("text", "expected"),
    [("mg/L", True), ("(pg/mL)", True), ("\u03bcg/g", True), ("10^9/L", True), ("%", True),
     ("mg/24 h", True), ("N/A", False), ("week 0", False), ("12", False), ("", False),
     ("1/2", False), ("diet", False)],
)  # fmt: skip
def test_units_are_told_from_words(text: str, expected: bool):
    assert looks_like_unit(text) is expected
