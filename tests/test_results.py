"""What the result classes promise: plain values, text, frames, and that nothing changes them."""

from __future__ import annotations

import dataclasses
import json
import math
import pickle

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import robustrm as rm
from robustrm.results import note_codes, plain
from tests.methods.tables import present, raw

ROWS = [[9.1, 7.2, 6.0], [4.0, 3.1, 2.5], [12.0, 12.5, 8.0], [6.6, 5.0, 5.9], [3.3, 2.1, 2.0]]

VALUES = st.recursive(
    st.one_of(
        st.none(),
        st.booleans(),
        st.text(max_size=4),
        st.floats(),
        st.integers(-(2**70), 2**70),
        st.floats().map(np.float64),
        st.integers(-5, 5).map(np.int64),
    ),
    lambda inner: st.one_of(
        st.lists(inner, max_size=3),
        st.tuples(inner, inner),
        st.dictionaries(st.text(max_size=3), inner, max_size=3),
    ),
    max_leaves=8,
)


def result(**changes) -> rm.TestResult:
    fields = {
        "method": "signed_rank",
        "statistic": 21.0,
        "statistic_name": "T⁺",
        "df": (),
        "p_value": 0.03125,
        "null": "exact",
        "n_subjects": 6,
        "n_occasions": 2,
        "hypothesis": "The differences are symmetric about zero.",
        "estimand": "pseudo-median difference",
        "scale": "raw",
    }
    return rm.TestResult(**{**fields, **changes})


@pytest.mark.property
@given(VALUES)
def test_plain_values_are_strict_json_and_stay_what_they_are(value):
    found = plain(value)
    assert json.loads(json.dumps(found, allow_nan=False)) == found
    assert plain(found) == found


def test_numbers_that_json_cannot_hold():
    assert plain([math.nan, math.inf, -math.inf]) == [None, None, None]
    assert plain(2**53) == 2**53
    assert plain(2**53 + 1) == "9007199254740993"
    assert plain(-(2**60)) == "-1152921504606846976"
    assert plain(np.array([[1, 2]])) == [[1, 2]]
    assert plain(True) is True


def test_many_arrangements_are_text_in_json_and_whole_in_python():
    big = result(arrangements=6**30)
    assert big.arrangements == 6**30
    assert big.to_dict()["arrangements"] == str(6**30)


def test_details_are_a_read_only_copy():
    details = {"t_plus": 21.0}
    made = result(details=details)
    details["t_plus"] = 0.0
    assert made.details["t_plus"] == 21.0
    with pytest.raises(TypeError):
        made.details["t_plus"] = 0.0  # type: ignore[index]  # a read-only view
    assert pickle.loads(pickle.dumps(made)) == made


def test_only_follow_ups_are_iterable():
    table = raw(ROWS)
    single = rm.friedman(table)
    family = rm.follow_up(table)
    for value in (
        single,
        family.comparisons[0],
        rm.signed_rank(table, "week 0", "week 2").estimate,
    ):
        with pytest.raises(TypeError, match="not iterable"):
            list(value)  # type: ignore[call-overload]  # it has no order to be remembered
    assert len(list(family)) == len(family) == 2


@pytest.mark.parametrize("name", ["Estimate", "TestResult", "Comparison", "FollowUps", "Note"])
def test_result_classes_are_frozen(name):
    kind = getattr(rm, name)
    assert kind.__dataclass_params__.frozen


def test_a_result_prints_n_statistic_p_and_hypothesis():
    lines = str(result(notes=(rm.Note("zeros", "One is zero.", "It counts."),))).splitlines()
    assert lines[0].split() == ["test", "n", "×", "k", "statistic", "df", "P", "null"]
    assert lines[2].split() == [
        "signed_rank",
        "6",
        "×",
        "2",
        "T⁺",
        "=",
        "21.00",
        "–",
        "0.031",
        "exact",
    ]
    assert lines[3] == "Null hypothesis: The differences are symmetric about zero."
    assert lines[4] == "Note: One is zero. It counts."


@pytest.mark.parametrize("p", [1e-300, 4e-9, 0.00099])
def test_a_small_p_is_never_printed_as_zero(p):
    assert "< 0.001" in str(result(p_value=p))
    assert result(p_value=p).to_dict()["p_value"] == p


def test_an_estimate_prints_its_level_or_that_there_is_no_interval():
    with_interval = rm.Estimate("shift", -4.1, -9.3, -0.35, 0.9521, "exact", "µg/L")
    without = dataclasses.replace(with_interval, low=None, high=None, level=None)
    assert str(with_interval) == "shift −4.10 µg/L (95.2% interval −9.30 to −0.350)"
    assert str(without) == "shift −4.10 µg/L (interval not estimable)"


@pytest.mark.parametrize("value", [-2.0, 0.0, 0.3])
def test_only_centre_and_limits_are_back_transformed(value):
    made = rm.Estimate.of_shift(
        ("difference", "ratio"),
        value=value,
        limits=(value - 1, value + 1),
        level=0.95,
        kind="exact",
        unit="mg/L",
        scale="log",
    )
    assert (made.name, made.unit) == ("ratio", None)
    expected = tuple(math.exp(value + step) for step in (0, -1, 1))
    assert (made.value, made.low, made.high) == pytest.approx(expected)


def test_a_ratio_beyond_every_float_is_infinite_not_an_error():
    made = rm.Estimate.of_shift(
        ("d", "r"), value=800.0, limits=None, level=None, kind="exact", unit=None, scale="log"
    )
    assert made.value == math.inf
    assert made.low is None


def test_frames_are_unrounded_with_one_row_a_comparison():
    family = rm.follow_up(raw(ROWS))
    frame = family.to_frame()
    assert frame["p_value"].tolist() == [c.p_value for c in family]
    assert frame["p_adjusted"].tolist() == [c.p_adjusted for c in family]
    assert frame["estimate"].tolist() == [present(c.estimate).value for c in family]
    assert frame["low"].isna().all()  # five differences have no exact 95% interval
    assert present(family.comparisons[0].estimate).to_frame()["value"][0] == frame["estimate"][0]


def test_a_family_is_found_by_pair_and_prints_every_member():
    family = rm.follow_up(raw(ROWS))
    assert family["week 0", "week 6"].label == "week 6 vs week 0"
    with pytest.raises(KeyError):
        family["week 6", "week 0"]
    text = str(family)
    for comparison in family:
        assert comparison.label in text
    assert "P (holm)" in text
    assert "not estimable" in text


def test_a_family_as_plain_values_has_the_numbers_of_each_comparison_on_top():
    family = rm.follow_up(raw(ROWS))
    plain_family = family.to_dict()
    assert json.loads(json.dumps(plain_family, allow_nan=False)) == plain_family
    for entry, comparison in zip(plain_family["comparisons"], family, strict=True):
        assert entry["p_value"] == entry["result"]["p_value"] == comparison.p_value
        assert entry["estimate"]["value"] == present(comparison.estimate).value


def test_note_codes_are_in_order():
    assert note_codes([rm.Note("b", "B."), rm.Note("a", "A.")]) == ("b", "a")
    assert str(rm.Note("a", "Fact.", "", "Do this.")) == "Fact. Do this."
