"""The table, its ledger and its exact ties: what is equal, what moves, what is written down."""

from __future__ import annotations

import math
from fractions import Fraction
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from robustrm import ties
from robustrm.errors import ArgumentError, DataError
from robustrm.ledger import CellCounts, Ledger, LedgerLine
from robustrm.table import OccasionTable, natural_key

LABELS = ["before", "after"]


def table_of(values, **options) -> OccasionTable:
    labels = [f"w{j}" for j in range(np.shape(values)[1])]
    return OccasionTable.from_array(values, occasions=labels, **options)


# ── making one ────────────────────────────────────────────────────────────────────────


def test_arrays_are_copied_and_read_only():
    values = np.array([[1.0, 2.0], [3.0, 4.0]])
    table = table_of(values)
    values[0, 0] = 99
    assert table.values[0, 0] == 1
    for name in ("values", "below", "above", "lower_limit", "upper_limit", "tokens", "units"):
        with pytest.raises(ValueError, match="read-only"):
            getattr(table, name)[0, 0] = 0


def test_a_matrix_the_wrong_way_round_is_refused():
    with pytest.raises(ArgumentError, match="Transpose it if the subjects are in the columns"):
        OccasionTable.from_array(np.ones((2, 5)), occasions=LABELS)


@pytest.mark.parametrize(
    ("options", "text"),
    [
        ({"values": [[1, math.inf]]}, "`values` must be finite or NaN for missing, got inf"),
        ({"below": [[True]]}, "`below` must have the shape of `values` (1, 2), got (1, 1)."),
        (
            {"below": [[True, True]]},
            "`lower_limit` must be declared when cells lie beyond different limits, got 1.00 and "
            "2.00.",
        ),
        ({"values": [[np.nan, 1]], "below": [[True, False]]}, "A cell must be one of measured,"),
        ({"lower_limit": [1, 2, 3]}, "`lower_limit` must be one number, one an occasion (2)"),
        ({"resolution": -1}, "`resolution` must be a positive number, got -1."),
        ({"subjects": ["a", "b"]}, ""),
    ],
)
def test_inconsistent_arrays_are_refused(options: dict, text: str):
    with pytest.raises(ArgumentError) as caught:
        OccasionTable.from_array(**{"values": [[1.0, 2.0]], "occasions": LABELS, **options})
    assert str(caught.value).startswith(text)


def test_wide_frames_hold_numbers_and_text():
    frame = pd.DataFrame(
        {"id": ["007", "7", "NA"], 0: [1.5, np.nan, 3], 2: ["<0,3", "missed", None]}
    )
    table = OccasionTable.from_wide(frame, subject="id", occasions=["0", "2"])
    assert table.subjects == ("007", "7", "NA")
    np.testing.assert_array_equal(table.values, [[1.5, 0.3], [np.nan, np.nan], [3, np.nan]])
    assert table.tokens.tolist() == [["", ""], ["", "missed"], ["", ""]]
    assert [note.code for note in table.notes] == ["possible duplicate", "decimal"]
    assert table.ledger.of_step("read")[0].what == "6 cells taken from a frame"


@pytest.mark.parametrize(
    "column",
    [
        pd.Series([1, 2], dtype="Int64"),
        pd.Series([1, 2], dtype="float32"),
        pd.Series(["1", "2"], dtype="string"),
        pd.Series([1, 2], dtype="category"),
        pd.Series([1, 2], dtype=object),
    ],
    ids=lambda column: str(column.dtype),
)
def test_every_kind_of_column_is_read(column: pd.Series):
    frame = pd.DataFrame({"id": ["a", "b"], "w0": column, "w1": [0.1, 0.2]})
    table = OccasionTable.from_wide(frame, subject="id", occasions=["w0", "w1"])
    assert table.values.tolist() == [[1, 0.1], [2, 0.2]]
    assert table.step == Fraction(1, 10)


def test_missing_markers_of_pandas_are_missing():
    frame = pd.DataFrame(
        {"id": ["a", "b"], "w0": pd.Series([1, pd.NA], dtype="Int64"), "w1": [pd.NaT, None]}
    )
    table = OccasionTable.from_wide(frame, subject="id", occasions=["w0", "w1"])
    assert np.isnan(table.values).tolist() == [[False, True], [True, True]]


def test_long_frames_need_an_order_and_get_a_proposal():
    frame = pd.DataFrame(
        {"id": ["a"] * 3, "visit": ["week 10", "week 2", "week 0"], "CRP": [1, 2, 3]}
    )
    roles: dict[str, Any] = {"subject": "id", "occasion": "visit", "value": "CRP"}
    with pytest.raises(DataError) as caught:
        OccasionTable.from_long(frame, **roles)
    assert caught.value.problems[0].action.endswith("--order 'week 0,week 2,week 10'")
    table = OccasionTable.from_long(frame, **roles, order=["week 0", "week 2", "week 10"])
    assert table.values.tolist() == [[3, 2, 1]]
    assert table.marker == "CRP"


def test_rows_of_a_frame_are_counted_from_one():
    frame = pd.DataFrame({"id": ["a", "a"], "visit": ["w0", "w0"], "CRP": [1, 4.8]}, index=[7, 9])
    with pytest.raises(DataError, match=r"\(1; 4.8; rows 1, 2\)"):
        OccasionTable.from_long(
            frame, subject="id", occasion="visit", value="CRP", order=["w0", "w1"]
        )


def test_natural_order_counts():
    assert sorted(["T10", "t2", "T1"], key=natural_key) == ["T1", "t2", "T10"]
    assert natural_key("week ²") != natural_key("week 2")  # a superscript is no number


# ── ties ──────────────────────────────────────────────────────────────────────────────


def test_equal_differences_are_tied_where_floats_are_not():
    assert 0.525 - 0.5 != 0.825 - 0.8
    gaps, _ = table_of([[0.5, 0.525], [0.825, 0.8], [0.775, 0.825]]).paired("w0", "w1")
    assert gaps.sizes.tolist() == [1, 1, 2]
    assert gaps.signs.tolist() == [1, -1, 1]
    assert gaps.values.tolist() == [0.025, -0.025, 0.05]


def test_seven_doublings_on_logs_are_one_tied_size():
    first = [0.1, 0.3, 0.7, 1.1, 1.3, 2.9, 10.7]
    table = table_of([[x, round(2 * x, 1)] for x in first]).log()
    gaps, _ = table.paired("w0", "w1")
    assert gaps.sizes.tolist() == [1] * 7
    assert set(gaps.values.tolist()) == {math.log(2)}
    back, _ = table.paired("w1", "w0")
    np.testing.assert_array_equal(back.values, -gaps.values)


def test_a_true_zero_difference_is_told_from_an_unknown_one():
    table = table_of([[0.3, 0.3], [1, 1]], below=[[True, True], [False, False]], lower_limit=0.3)
    gaps, _ = table.paired("w0", "w1")
    assert gaps.sizes.tolist() == [0, 0]
    assert gaps.unknown.tolist() == [True, False]


def test_derived_values_closer_than_1e_10_are_tied():
    # Averages of three replicates, and a difference away from the first two by 1e-14.
    values = np.array([[1.0, 1.1 + 1e-14], [2.0, 2.1], [3.0, 3.2]]) / 3
    gaps = ties.differences_of_floats(values[:, 0], values[:, 1], np.zeros(3, bool))
    assert gaps.sizes.tolist() == [1, 1, 2]
    frame = pd.DataFrame(
        {"id": ["a", "a", "b", "b"], "w0": [0.1, 0.2, 0.4, 0.3], "w1": [0.2, 0.3, 0.4, 0.5]}
    )
    table = OccasionTable.from_wide(frame, subject="id", occasions=["w0", "w1"], replicates="mean")
    assert table.units is None
    assert table.paired("w0", "w1")[0].sizes.tolist() == [1, 1]


def test_merging_does_not_run_along_a_chain():
    chain = np.array([0.0, 0.9, 1.8, 2.7, np.nan])
    np.testing.assert_array_equal(ties.merged(chain, 1.0), [0, 0, 1.8, 1.8, np.nan])


def test_order_codes_tie_what_is_censored():
    table = table_of(
        [[0.3, 0.3, 2.0], [0.30, 5, 20]],
        below=[[True, False, False], [True, False, False]],
        above=[[False, False, False], [False, False, True]],
    )
    assert table.order_codes().tolist() == [[0, 1, 2], [0, 3, 4]]


@pytest.mark.parametrize(
    ("values", "step"),
    [
        ([0.25, 3.0], Fraction(1, 100)),
        ([10.0, 300.0], Fraction(1)),
        ([0.1, 1e17], None),
        ([], None),
    ],
)
def test_the_step_of_floats_is_their_finest_place(values: list[float], step: Fraction | None):
    assert ties.decimal_step(np.array(values)) == step


@pytest.mark.property
@given(st.lists(st.tuples(st.integers(1, 999), st.integers(1, 999)), min_size=1, max_size=12))
def test_sizes_follow_exact_arithmetic(pairs: list[tuple[int, int]]):
    table = table_of([[a / 100, b / 100] for a, b in pairs], resolution=0.01)
    gaps, _ = table.paired("w0", "w1")
    exact = [abs(b - a) for a, b in pairs]
    ranks = {size: code for code, size in enumerate(sorted({e for e in exact if e}), start=1)}
    assert gaps.sizes.tolist() == [ranks.get(e, 0) for e in exact]
    logs, _ = table.log().paired("w0", "w1")
    ratios = [Fraction(max(p), min(p)) for p in pairs]
    places = {ratio: code for code, ratio in enumerate(sorted(set(ratios) - {1}), start=1)}
    assert logs.sizes.tolist() == [places.get(ratio, 0) for ratio in ratios]
    np.testing.assert_allclose(logs.values, np.log([b / a for a, b in pairs]), atol=1e-12)


# ── steps ─────────────────────────────────────────────────────────────────────────────


def test_recensoring_gives_up_what_cannot_be_compared():
    table = table_of(
        [[0.3, 0.5, 0.8], [0.4, 2, 3]],
        below=[[True, False, True], [False, False, False]],
        lower_limit=[0.3, 0.3, 0.8],
    )
    common = table.recensored()
    assert common.below.tolist() == [[True, True, True], [True, False, False]]
    np.testing.assert_array_equal(common.values, [[0.8, 0.8, 0.8], [0.8, 2, 3]])
    assert common.ledger.of_step("recensored")[0].what == (
        "all occasions compared at the common lower limit 0.800: 2 measured values given up"
    )
    assert common.recensored() == common
    np.testing.assert_allclose(table.log().recensored().values, np.log(common.values))


def test_recensoring_works_from_above_too():
    table = table_of(
        [[20, 12], [5, 10]], above=[[True, False], [False, True]], upper_limit=[20, 10]
    ).recensored()
    assert table.above.tolist() == [[True, True], [False, True]]
    np.testing.assert_array_equal(table.values, [[10, 10], [5, 10]])


def test_nothing_to_recensor_is_the_same_table():
    table = table_of([[1, 2], [3, 4]])
    assert table.recensored() is table


@pytest.mark.parametrize(
    ("rule", "value"), [("half", 0.15), ("limit", 0.3), ("root2", 0.3 / 2**0.5)]
)
def test_a_substitute_is_declared_and_stays_marked(rule: str, value: float):
    table = table_of([[0.3, 2], [1, 4]], below=[[True, False], [False, False]])
    raw = table.substitute(rule)
    assert raw.values[0, 0] == pytest.approx(value, rel=1e-15)
    assert raw.below[0, 0]
    assert "1 value below the limit entered as" in raw.ledger.lines[-1].what
    logs = table.log().substitute(rule)
    np.testing.assert_allclose(logs.values, np.log(raw.values), rtol=1e-14)
    assert (raw.units is None) == (rule == "root2")
    if raw.units is not None and raw.resolution is not None:
        multiples = raw.units.astype(float) * raw.resolution
        np.testing.assert_allclose(multiples, raw.values, rtol=1e-14)


def test_an_unknown_rule_is_refused():
    table = table_of([[0.3, 2], [1, 4]], below=[[True, False], [False, False]])
    with pytest.raises(ArgumentError, match="Did you mean 'half'"):
        table.substitute("hlf")


def test_zero_has_no_logarithm_and_the_question_is_asked():
    with pytest.raises(DataError) as caught:
        table_of([[0, 1], [2, -3]], subjects=["P1", "P2"]).log()
    assert len(caught.value.problems) == 2
    assert str(caught.value.problems[0]) == (
        "[not positive] (column 'w0', text '0') subject 'P1' has 0 at 'w0', which has no "
        "logarithm: below a limit, or a true zero? If it lies below a detection limit, write it "
        "as '<limit' (for instance '<0.3') or declare the limit; if it is a true zero, analyze on "
        "the raw scale (--scale raw)."
    )


def test_logs_are_taken_once():
    table = table_of([[1, 2], [3, 4]])
    assert table.log().log() == table.log()
    assert table.on_scale("raw") is table
    np.testing.assert_array_equal(table.log().units, table.units)


def test_content_does_not_depend_on_the_order_of_rows_or_labels():
    values = np.array([[3, 1, np.nan], [1, 2, 3], [1, 2, 2], [0.3, 1, 1.0]])
    below = np.zeros((4, 3), bool)
    below[3, 0] = True
    first = table_of(values, below=below).by_content()
    order = [2, 0, 3, 1]
    second = table_of(values[order], below=below[order], subjects=list("abcd")).by_content()
    for name in ("values", "below", "units", "lower_limit"):
        np.testing.assert_array_equal(getattr(first, name), getattr(second, name))


def test_rows_in_natural_order():
    table = table_of([[1, 2], [3, 4], [5, 6]], subjects=["P10", "P2", "P1"]).in_natural_order()
    assert table.subjects == ("P1", "P2", "P10")
    assert table.values[:, 0].tolist() == [5, 3, 1]


def test_nobody_leaves_without_a_line():
    table = table_of([[1, np.nan], [3, 4]], subjects=["P1", "P2"])
    complete = table.complete()
    assert complete.subjects == ("P2",)
    assert complete.ledger.of_step("complete") == (
        LedgerLine("complete", "P1 left: no value at w1 (missing)", "P1"),
    )


def test_selecting_names_what_is_kept():
    table = table_of([[1, 2, 3], [4, 5, 6]], subjects=["P1", "P2"])
    part = table.select(subjects=["P2"], occasions=["w2", "w0"])
    assert part.values.tolist() == [[6, 4]]
    assert [line.what for line in part.ledger.of_step("select")] == [
        "subjects kept on request: P2",
        "occasions kept on request: w2 and w0",
    ]
    with pytest.raises(ArgumentError, match="`occasions` must name one of"):
        table.select(occasions=["w9"])


def test_two_occasions_must_differ():
    with pytest.raises(ArgumentError, match="`first` and `second` must differ"):
        table_of([[1, 2]]).paired("w0", "w0")


# ── round trips ───────────────────────────────────────────────────────────────────────

CELLS = st.one_of(
    st.integers(31, 5999).map(lambda i: ("value", i / 100)),
    st.just(("below", 0.3)),
    st.just(("above", 60.0)),
    st.just(("missing", math.nan)),
)


@st.composite
def tables(draw: st.DrawFn) -> OccasionTable:
    n, k = draw(st.integers(1, 8)), draw(st.integers(2, 4))
    cells = [[draw(CELLS) for _ in range(k)] for _ in range(n)]
    states = np.array([[state for state, _ in row] for row in cells])
    return table_of(
        [[value for _, value in row] for row in cells],
        subjects=[f"P{i + 1}" for i in range(n)],
        below=states == "below", above=states == "above",
        lower_limit=0.3, upper_limit=60.0, resolution=0.01,
    )  # fmt: skip


def cells_of(table: OccasionTable) -> list:
    names = ("values", "below", "above", "lower_limit", "upper_limit", "units")
    return [getattr(table, name).tolist() for name in names]


@pytest.mark.property
@given(tables())
def test_to_wide_and_back(table: OccasionTable):
    back = OccasionTable.from_wide(
        table.to_wide(), subject="subject", occasions=table.occasions,
        lower_limit=0.3, upper_limit=60.0, resolution=0.01,
    )  # fmt: skip
    assert str(cells_of(back)) == str(cells_of(table))
    assert (back.subjects, back.occasions, back.step) == (
        table.subjects, table.occasions, table.step,
    )  # fmt: skip


@pytest.mark.property
@given(tables())
def test_to_long_keeps_every_cell(table: OccasionTable):
    frame = table.to_long()
    signs = {"below": "<", "above": ">", "missing": "", "value": ""}
    frame["cell"] = [
        token if state == "missing" else f"{signs[state]}{value!r}"
        for state, value, token in zip(frame["state"], frame["value"], frame["token"], strict=True)
    ]
    back = OccasionTable.from_long(
        frame, subject="subject", occasion="occasion", value="cell", order=table.occasions,
        lower_limit=0.3, upper_limit=60.0, resolution=0.01, marker="value",
    )  # fmt: skip
    assert back == table


@pytest.mark.property
@given(tables())
def test_every_step_leaves_the_source_untouched(table: OccasionTable):
    before = str(cells_of(table))
    for step in (table.log(), table.recensored(), table.substitute(), table.by_content()):
        assert step.n_occasions == table.n_occasions
        assert len(step.ledger.lines) >= len(table.ledger.lines)
    assert str(cells_of(table)) == before


def test_equality_is_about_cells_not_history():
    table = table_of([[1, 2], [3, 4]])
    assert table.select(subjects=["S2", "S1"]).select(subjects=["S1", "S2"]) == table
    assert table != table_of([[1, 2], [3, 5]])
    assert table != "table"


def test_a_table_shows_itself():
    table = table_of([[0.3, np.nan]], below=[[True, False]], marker="CRP", unit="mg/L")
    assert repr(table) == (
        "<OccasionTable CRP (mg/L): 1 subject × 2 occasions (w0 and w1), raw scale, 1 missing, "
        "1 below and 0 above a limit>"
    )
    html = table_of([[1, 2]], subjects=["<b>"])._repr_html_()
    assert "&lt;b&gt;" in html
    assert "<b>" not in html


# ── the ledger ────────────────────────────────────────────────────────────────────────


def test_the_ledger_only_grows():
    first = Ledger((LedgerLine("read", "4 cells"),), CellCounts(values=3, missing=1))
    second = first.add(LedgerLine("log", "natural logarithms"))
    assert len(first.lines) == 1
    assert second.counts.read == 4
    assert second.to_dict()["counts"]["read"] == 4
    assert list(second.to_frame()["step"]) == ["read", "log"]
    assert str(second).splitlines() == [
        "4 cells read: 3 values, 0 below and 0 above a limit, 1 missing, 0 refused",
        "  read: 4 cells",
        "  log: natural logarithms",
    ]
    assert Ledger().to_frame().columns.tolist() == [
        "step", "subject", "occasion", "cells", "what",
    ]  # fmt: skip


def test_a_substitute_is_entered_once():
    """Half of half a limit is nobody's rule: the same rule changes nothing, another is refused."""
    table = table_of([[0.3, 0.8], [1.2, 0.9]], below=[[True, False], [False, False]])
    halved = table.substitute("half")
    assert halved.substitute("half") is halved
    assert halved.units is not None
    assert halved.units.tolist() == [[3, 16], [24, 18]]
    with pytest.raises(ArgumentError, match=r"already entered as 0\.5 times the limit"):
        halved.substitute("limit")
