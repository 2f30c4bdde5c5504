"""Numbers into text: what is rounded, how, and what is never printed."""

from __future__ import annotations

import math
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from robustrm._format import (
    Style,
    aligned,
    bounded,
    capital,
    counted,
    declared,
    fixed,
    interval_phrase,
    level_text,
    listing,
    number,
    p_cell,
    p_phrase,
    p_range,
    percent,
    restyled,
    span,
    statistic_phrase,
    width,
)


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0.0, "0"), (1.0, "1.00"), (0.7123, "0.712"), (-3.14159, "−3.14"), (123456.0, "123456"),
        (1e-4, "0.000100"), (1.5e-7, "1.50e−07"), (2.5e7, "2.50e+07"), (None, "–"),
        (math.nan, "–"), (math.inf, "∞"), (-math.inf, "−∞"),
    ],
)  # fmt: skip
def test_number(value: float | None, text: str):
    assert number(value) == text


@given(st.floats(1e-4, 1e5))
def test_a_number_is_within_half_a_digit(value: float):
    shown = number(value)
    assert float(shown) == pytest.approx(value, rel=5.01e-3)


@pytest.mark.parametrize("style", ["medical", "apa"])
@given(p=st.floats(5e-324, 1.0))
def test_p_is_never_zero(style: Style, p: float):
    text = p_cell(p, style)
    assert re.fullmatch(r"< 0?\.001|0?\.\d{3}|1\.000", text)
    assert float(text.removeprefix("< ")) > 0


@pytest.mark.parametrize(
    ("p", "medical", "apa"),
    [
        (0.000999, "< 0.001", "< .001"), (0.001, "0.001", ".001"), (0.0132, "0.013", ".013"),
        (1.0, "1.000", "1.000"), (None, "–", "–"), (math.nan, "–", "–"),
        # exact p values of sign tests end in a half: 1/16, 3/16
        (0.0625, "0.063", ".063"), (0.1875, "0.188", ".188"),
    ],
)  # fmt: skip
def test_p_cell(p: float | None, medical: str, apa: str):
    assert p_cell(p) == medical
    assert p_cell(p, "apa") == apa


def test_p_phrases():
    assert p_phrase(0.0132) == "P = 0.013"
    assert p_phrase(1e-9, "apa") == "p < .001"
    assert p_range(0.006, 0.008) == "P = 0.006 to 0.008"
    assert p_range(0.006, 0.006, "apa") == "p = .006"


def test_restyled_moves_every_p_and_nothing_else():
    text = "P = 0.013, W = 0.500, P < 0.001, P = 1.000, MAP = 0.2"
    assert restyled(text, "apa") == "p = .013, W = 0.500, p < .001, p = 1.000, MAP = 0.2"
    assert restyled(text, "medical") == text


@pytest.mark.parametrize(
    ("value", "medical", "apa"),
    [(0.714, "0.71", ".71"), (-0.5, "−0.50", "−.50"), (1.0, "1.00", "1.00"), (None, "–", "–")],
)
def test_bounded(value: float | None, medical: str, apa: str):
    assert bounded(value) == medical
    assert bounded(value, "apa") == apa


def test_statistics_carry_their_degrees_of_freedom():
    assert statistic_phrase("F", (3, 36), 4.123) == "F(3, 36) = 4.12"
    assert statistic_phrase("F", (1.6234, 17.857), 4.123) == "F(1.62, 17.86) = 4.12"
    assert statistic_phrase("T⁺", (), 91.0) == "T⁺ = 91.00"
    assert statistic_phrase("t", (11.0,), -2.5) == "t(11) = −2.50"


def test_intervals():
    assert span(0.52, 0.934) == "0.520 to 0.934"
    assert span(None, 0.934) == "not estimable"
    assert interval_phrase(0.95, 0.52, 0.934) == "95% CI 0.520 to 0.934"
    assert interval_phrase(0.96875, 0.52, 0.934, "apa") == "96.9% CI [0.520, 0.934]"
    assert interval_phrase(0.95, None, None) == "interval not estimable"


def test_small_pieces():
    assert fixed(-1.005, 1) == "−1.0"
    assert declared(0.3) == "0.3"
    assert declared(None) == "–"
    assert percent(0.0825) == "8%"
    assert level_text(0.975) == "97.5%"
    assert capital("week 0") == "Week 0"
    assert counted(1, "subject") == "1 subject"
    assert counted(0, "fish", "fish") == "0 fish"
    assert listing([]) == ""
    assert listing(list("abcdefghij"), limit=3) == "a, b, c and 7 more"


def test_columns_align_whatever_the_script():
    lines = aligned(["label", "n", "why"], [["第0週", "12", "in"], ["e\u0301", "3", "out"]],
                    words=(0, 2)).splitlines()  # fmt: skip
    # the number column is right-aligned: every row has the same width up to its end
    ends = [width(line[: line.index(cell) + len(cell)]) for line, cell in
            zip([lines[0], *lines[2:]], ["n", "12", "3"], strict=True)]  # fmt: skip
    assert len(set(ends)) == 1
    assert lines[1] == "─────  ──  ───"
