"""Colours, ticks and labels."""

from __future__ import annotations

import itertools
import math

import pytest
from hypothesis import given
from hypothesis import strategies as st
from matplotlib.colors import to_rgb

from robustrm.figures import style
from robustrm.figures.labels import axis_text, one_line, tick_text, wrapped

pytestmark = pytest.mark.figure


def lightness(colour: str) -> float:
    """CIE L* (0 black, 100 white) of an sRGB colour, IEC 61966-2-1 and CIE 15."""
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in to_rgb(colour)]
    y = 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]
    return 116 * y ** (1 / 3) - 16 if y > 216 / 24389 else y * 24389 / 27


def test_lightness_of_black_white_and_middle_grey():
    # L* of #777777 is 50 (value from memory)
    assert lightness("#000000") == 0
    assert lightness("#FFFFFF") == pytest.approx(100)
    assert lightness("#777777") == pytest.approx(50, abs=0.1)


def test_colours_are_distinct_in_grey():
    colours = (style.INK, style.SUBJECT, style.ACCENT, style.QUIET, style.BAND)
    for one, other in itertools.combinations(colours, 2):
        assert abs(lightness(one) - lightness(other)) >= 10, (one, other)


@pytest.mark.parametrize(
    ("low", "high"), [(0.5, 2), (0.95, 1.04), (1e-3, 1e4), (3, 4), (0.02, 900), (1, 1e9)]
)
def test_a_log_axis_has_a_few_ticks_in_view(low: float, high: float):
    positions = style.round_positions(low, high)
    assert 2 <= len(positions) <= 8
    assert all(low <= position <= high for position in positions)
    assert positions == sorted(set(positions))


def test_one_is_a_tick_whenever_ratios_lie_about_it():
    assert 1.0 in style.round_positions(0.4, 1.3)
    assert 1.0 in style.round_positions(0.9, 1.1)


@given(st.text(max_size=200), st.integers(1, 40), st.integers(1, 3))
@pytest.mark.property
def test_any_label_fits_and_starts_no_formula(text: str, width: int, lines: int):
    drawn = wrapped(text, width, lines=lines)
    shown = drawn.replace(r"\$", "$").split("\n")
    assert len(shown) <= lines
    assert all(len(line) <= width for line in shown)
    assert drawn.count("$") == drawn.count(r"\$")


@given(st.text(max_size=100))
@pytest.mark.property
def test_a_line_holds_no_control_character(text: str):
    assert one_line(text).isprintable()


def test_a_label_that_fits_is_not_changed():
    assert wrapped("week 12", 10) == "week 12"


def test_the_two_ends_of_a_long_label_stay():
    label = wrapped("visit 1 of the open phase, morning", 12)
    assert label.startswith("visit")
    assert label.endswith("morning")


def test_a_bracket_that_does_not_fit_goes_to_a_line_of_its_own():
    label = ("faecal calprotectin", "µg/g", "log axis")
    assert axis_text(36, *label) == "faecal calprotectin (µg/g, log axis)"
    assert axis_text(30, *label) == "faecal calprotectin\n(µg/g, log axis)"


@pytest.mark.parametrize("value", [0.001, 0.25, 1.0, 7.5, 200.0, 30000.0, -4.0])
def test_a_tick_says_its_value(value: float):
    assert math.isclose(float(tick_text(value).replace("−", "-")), value)
