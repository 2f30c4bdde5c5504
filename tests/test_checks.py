"""The texts of the argument checks: argument, rule, value seen, next step."""

from __future__ import annotations

import math

import numpy as np
import pytest

from robustrm import _checks as checks
from robustrm.errors import ArgumentError


@pytest.mark.parametrize(
    ("check", "message"),
    [
        (
            lambda: checks.check_choice("adjust", "hom", ("holm", "none")),
            "`adjust` must be one of 'holm', 'none', got 'hom'. Did you mean 'holm'?",
        ),
        (
            lambda: checks.check_choice("adjust", "xyz", ("holm", "none")),
            "`adjust` must be one of 'holm', 'none', got 'xyz'.",
        ),
        (
            lambda: checks.check_alternative("two_sided"),
            "`alternative` must be one of 'two-sided', 'greater', 'less', got 'two_sided'. "
            "Did you mean 'two-sided'?",
        ),
        (
            lambda: checks.check_level(95),
            "`level` must be in (0, 1), got 95. Did you mean 0.95?",
        ),
        (lambda: checks.check_level(0), "`level` must be in (0, 1), got 0."),
        (lambda: checks.check_level(-0.5), "`level` must be in (0, 1), got -0.5."),
        (lambda: checks.check_level(math.nan, "target"), "`target` must be in (0, 1), got nan."),
        (lambda: checks.check_level(True), "`level` must be in (0, 1), got True."),
        (
            lambda: checks.check_count("n_subjects", 2.5),
            "`n_subjects` must be a whole number of at least 1, got 2.5.",
        ),
        (
            lambda: checks.check_count("n_subjects", True),
            "`n_subjects` must be a whole number of at least 1, got True.",
        ),
        (
            lambda: checks.check_count("replicates", 1, least=2),
            "`replicates` must be a whole number of at least 2, got 1.",
        ),
        (
            lambda: checks.check_finite("limit", math.inf),
            "`limit` must be a finite number, got inf.",
        ),
        (
            lambda: checks.check_names("occasions", "week 0"),
            "`occasions` must be a list of names, got the single text 'week 0'. Write ['week 0'].",
        ),
        (
            lambda: checks.check_names("occasions", ["a"], least=2),
            "`occasions` must hold at least 2 names, got 1.",
        ),
        (
            lambda: checks.check_names("subjects", ["b", "a", "b"]),
            "`subjects` must not repeat a name, got 'b' twice.",
        ),
        (
            lambda: checks.check_names("subjects", ["a", " "]),
            "`subjects` must not hold an empty name, got ('a', ' ').",
        ),
        (
            lambda: checks.check_member("first", "week 1", ["week 0", "week 12"]),
            "`first` must name one of 'week 0', 'week 12', got 'week 1'. Did you mean 'week 12'?",
        ),
        (
            lambda: checks.check_draws(10),
            "`draws` must be rising whole numbers of at least 99, got 10.",
        ),
        (
            lambda: checks.check_draws([999, 999]),
            "`draws` must be rising whole numbers of at least 99, got [999, 999].",
        ),
        (
            lambda: checks.check_draws((), "stages"),
            "`stages` must be rising whole numbers of at least 99, got ().",
        ),
    ],
    ids=range(20),
)
def test_the_message_is_the_whole_sentence(check, message):
    with pytest.raises(ArgumentError) as caught:
        check()
    assert str(caught.value) == message


def test_what_is_right_passes_unchanged():
    assert checks.check_choice("zeros", "drop", ("pratt", "drop")) == "drop"
    assert checks.check_alternative("less") == "less"
    assert checks.check_level(0.95) == 0.95
    assert checks.check_count("n", 3) == 3
    assert checks.check_finite("limit", 2) == 2.0
    assert checks.check_names("occasions", ["b", "a"]) == ("b", "a")
    assert checks.check_member("first", "a", ["b", "a"]) == "a"
    assert checks.check_draws(None) == checks.STAGES == (9_999, 99_999, 999_999)
    assert checks.check_draws(999) == (999,)
    assert checks.check_draws([99, 999]) == (99, 999)


def test_whole_numbers_of_numpy_count_as_whole():
    assert checks.check_count("n", np.int64(4)) == 4
    assert isinstance(checks.check_count("n", np.int64(4)), int)


def test_the_nearest_option_does_not_depend_on_their_order():
    options = ["lower", "lowest", "upper"]
    assert checks.nearest("lowe", options) == checks.nearest("lowe", reversed(options))
    assert checks.nearest("completely different", options) is None


def test_an_argument_error_is_a_value_error():
    assert issubclass(ArgumentError, ValueError)
