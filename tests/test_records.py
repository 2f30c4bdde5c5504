"""Records become arrays: nothing is lost, averaged or assumed without a word."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from robustrm.cells import parse_cell
from robustrm.errors import ArgumentError, DataError, Problem
from robustrm.records import (
    Arranged,
    Declared,
    Findings,
    Record,
    Written,
    arrange,
    read_cells,
)
from robustrm.results import note_codes

LABELS = ("w0", "w2")


def record(subject: str, occasion: str, text: str, row: int = 1) -> Record:
    return Record(subject, occasion, parse_cell(text), row, occasion, text)


def rows(*cells: tuple[str, ...]) -> list[Record]:
    """Return records from (subject, text at w0, text at w2), in rows 2, 3, ..."""
    return [
        record(subject, label, text, row)
        for row, (subject, *texts) in enumerate(cells, start=2)
        for label, text in zip(LABELS, texts, strict=True)
    ]


def arranged(*cells: tuple[str, ...], **declared) -> Arranged:
    return arrange(rows(*cells), occasions=LABELS, declared=Declared(**declared))


def problems(*cells: tuple[str, ...], **declared) -> list[Problem]:
    with pytest.raises(DataError) as caught:
        arranged(*cells, **declared)
    return list(caught.value.problems)


def test_values_limits_and_gaps_are_three_things():
    table = arranged(("P1", "3.1", "<0.3"), ("P2", "missed", ">20"))
    np.testing.assert_array_equal(table.values, [[3.1, 0.3], [np.nan, 20]])
    assert table.below.tolist() == [[False, True], [False, False]]
    assert table.above.tolist() == [[False, False], [False, True]]
    assert table.tokens.tolist() == [["", ""], ["missed", ""]]


def test_subjects_keep_the_order_of_appearance_and_lost_rows_are_told():
    records = [record("P10", "w0", "1"), record("P2", "w2", "2"), record("P10", "w2", "3")]
    table = arrange(records, occasions=LABELS)
    assert table.subjects == ("P10", "P2")
    assert table.ledger.of_step("absent")[0].what == "1 cell without a row, missing: P2 at w0"
    assert table.ledger.counts.read == 3


def test_reasons_for_missing_are_counted_apart():
    table = arranged(("P1", "missed", "haemolysed"), ("P2", "missed", ""))
    assert [line.what for line in table.ledger.of_step("missing")] == [
        "2 cells written 'missed': P1 at w0 and P2 at w0",
        "1 cell written 'haemolysed': P1 at w2",
        "1 cell left empty: P2 at w2",
    ]


# ── replicates ────────────────────────────────────────────────────────────────────────


def test_an_undeclared_duplicate_names_subject_occasion_values_and_rows():
    (found,) = problems(("P7", "1.2", ""), ("P8", "1", "2"), ("P7", "4.8", ""))[:1]
    assert found.code == "duplicate"
    assert str(found) == (
        "[duplicate] (row 4, column 'w0', text '4.8') 'P7' has 2 values at 'w0' (1.2; 4.8; "
        "rows 2, 4). Not averaged. Declare them as replicates (--replicates mean or --replicates "
        "geometric), or delete the wrong row."
    )


def test_declared_replicates_become_one_value_and_n_stays():
    table = arranged(("P1", "1.0", "4"), ("P1", "1.5", "6"), ("P2", "2", "3"), replicates="mean")
    np.testing.assert_array_equal(table.values, [[1.25, 5], [2, 3]])
    assert table.subjects == ("P1", "P2")
    # SD of two values is their distance over the square root of two.
    assert table.replicates[0].cv == pytest.approx(0.5 / math.sqrt(2) / 1.25)
    assert table.units is None
    assert table.step is None
    assert note_codes(table.notes) == ("replicates",)
    assert "2 of 2 sets of replicates exceed a CV of 20%" in str(table.notes[0])


def test_the_geometric_mean_has_the_log_normal_cv():
    table = arranged(("P1", "1", "3"), ("P1", "4", "3"), replicates="geometric")
    np.testing.assert_allclose(table.values, [[2, 3]], rtol=1e-15)
    variance = math.log(4) ** 2 / 2
    assert table.replicates[0].cv == pytest.approx(math.sqrt(math.exp(variance) - 1))
    assert table.replicates[1].cv == 0


def test_a_missing_replicate_does_not_enter_the_mean():
    table = arranged(("P1", "1", "lost"), ("P1", "NA", "missed"), replicates="mean")
    np.testing.assert_array_equal(table.values, [[1, np.nan]])
    assert table.tokens[0, 1] == "lost; missed"
    assert table.units is not None  # nothing was averaged
    assert table.ledger.counts.missing == 3


def test_replicates_all_beyond_a_limit_stay_beyond_the_outermost():
    table = arranged(
        ("P1", "<0.3", ">20"), ("P1", "<0.8", ">30"), replicates="mean", lower_limit=0.3,
        upper_limit=20,
    )  # fmt: skip
    assert table.values.tolist() == [[0.8, 20.0]]
    assert table.below[0, 0]
    assert table.above[0, 1]


def test_measured_and_censored_replicates_have_no_mean():
    (found,) = problems(("P1", "<0.3", "1"), ("P1", "0.4", "2"), replicates="mean")
    assert found.code == "replicates"
    assert "partly measured and partly beyond a limit (<0.3; 0.4; rows 2, 3)" in found.message


def test_zero_has_no_geometric_mean():
    (found,) = problems(("P1", "0", "1"), ("P1", "0.4", "2"), replicates="geometric")
    assert "every value must be positive" in found.message


# ── limits ────────────────────────────────────────────────────────────────────────────


def test_the_only_limit_written_applies_to_every_cell_and_the_ledger_says_so():
    table = arranged(("P1", "<0.3", "1"), ("P2", "ND", "missed"))
    np.testing.assert_array_equal(table.lower_limit, np.full((2, 2), 0.3))
    assert np.isnan(table.upper_limit).all()
    assert table.values[1, 0] == 0.3
    assert table.ledger.of_step("limits")[0].what == (
        "lower limit 0.3 is the only one written (1 cell) and none was declared: taken to have "
        "applied to every cell"
    )


def test_two_limits_undeclared_are_refused_with_the_option():
    (found,) = problems(("P1", "<0.3", "<0.8"), ("P2", "1", "2"))
    assert found.code == "limits"
    assert found.message.startswith("lower limits 0.3 and 0.8 are written, and none is declared.")
    assert found.action.endswith("--lower-limit 0.3,0.8")


def test_a_declared_limit_wins_and_a_cell_keeps_its_own():
    table = arranged(("P1", "<0.3", "<0.8"), ("P2", "1", "2"), lower_limit=[0.3, 0.5])
    np.testing.assert_array_equal(table.lower_limit, [[0.3, 0.8], [0.3, 0.5]])
    assert table.values.tolist() == [[0.3, 0.8], [1, 2]]
    assert "1 cell kept a lower limit other than the declared one: P1 at w2 (<0.8)" in str(
        table.ledger
    )


def test_limits_by_name_leave_other_occasions_without_one():
    table = arranged(("P1", "1", "2"), lower_limit={"w2": 0.5})
    np.testing.assert_array_equal(table.lower_limit, [[np.nan, 0.5]])


@pytest.mark.parametrize("text", ["ND", "<LOD"])
def test_a_word_needs_a_declared_limit(text: str):
    (found,) = problems(("P1", text, "1"), ("P2", "1", "2"))
    assert f"{text!r} of P1 at w0 lies below a limit that is written nowhere" in found.message
    assert "--lower-limit NUMBER" in found.action
    assert arranged(("P1", text, "1"), lower_limit=0.3).values[0, 0] == 0.3


def test_a_measured_value_below_the_limit_is_kept_and_noted():
    table = arranged(("P1", "0.2", "1"), lower_limit=0.3)
    assert table.values[0, 0] == 0.2
    assert not table.below.any()
    assert "1 measured value below the lower limit: P1 at w0 (0.2)." in str(table.notes[0])


@pytest.mark.parametrize(
    ("declared", "text"),
    [
        ({"lower_limit": 0}, "`lower_limit` must be a positive number, got 0."),
        ({"upper_limit": "20"}, "`upper_limit` must be a positive number, got '20'."),
        ({"lower_limit": [0.1]}, "`lower_limit` must be one number or one an occasion (2), got 1"),
        ({"lower_limit": {"w3": 0.1}}, "`lower_limit` must name occasions, got 'w3'."),
        (
            {"lower_limit": 3, "upper_limit": 2},
            "`lower_limit` must be below `upper_limit`, got 3 and 2.",
        ),
        ({"replicates": "median"}, "`replicates` must be one of 'mean', 'geometric'"),
        ({"decimal": ";"}, "`decimal` must be one of '.', ','"),
        ({"resolution": 0}, "`resolution` must be a positive number, got 0."),
        ({"resolution": 10}, "`resolution` must not round a positive value to zero, got 10"),
    ],
)
def test_an_option_that_breaks_its_rule_is_an_argument_error(declared: dict, text: str):
    with pytest.raises(ArgumentError) as caught:
        arranged(("P1", "1", "2"), **declared)
    assert str(caught.value).startswith(text)


# ── the reporting step ────────────────────────────────────────────────────────────────


@pytest.mark.parametrize(
    ("texts", "step"),
    [
        (("0.10", "2"), Fraction(1, 100)),
        (("3", "20"), Fraction(1)),
        (("<0.30", "2.5"), Fraction(1, 100)),
        (("1e-3", "2"), Fraction(1, 1000)),
    ],
)
def test_the_step_is_the_finest_place_written(texts: tuple[str, str], step: Fraction):
    table = arranged(("P1", *texts))
    assert table.step == step
    assert table.units is not None
    np.testing.assert_allclose(table.units.astype(float) * float(step), table.values, rtol=1e-12)


def test_a_declared_limit_counts_for_the_step():
    np.testing.assert_array_equal(arranged(("P1", "ND", "0.5"), lower_limit=0.25).units, [[25, 50]])


def test_a_declared_step_that_does_not_divide_is_told():
    table = arranged(("P1", "0.31", "0.5"), resolution=0.1)
    assert table.values[0, 0] == 0.3
    np.testing.assert_array_equal(table.units, [[3, 5]])
    assert table.ledger.of_step("resolution")[0].what == (
        "1 value rounded to the declared reporting step 0.1"
    )


def test_a_limit_off_the_step_is_never_rounded():
    """`<0.25` with a declared step of 0.1 stays 0.25: the step becomes 0.05."""
    table = arranged(("P1", "0.3", "<0.25"), resolution=0.1)
    assert table.values.tolist() == [[0.3, 0.25]]
    assert table.step == Fraction(1, 20)
    np.testing.assert_array_equal(table.units, [[6, 5]])


# ── what stops ────────────────────────────────────────────────────────────────────────


def test_everything_is_said_at_once_with_what_was_found_before():
    found = Findings(problems=[Problem("arm", "two arms.", "Choose one.")])
    with pytest.raises(DataError) as caught:
        arrange(rows(("P1", "see note", "1"), ("P1", "2", "ND")), occasions=LABELS, found=found)
    codes = [problem.code for problem in caught.value.problems]
    assert codes == ["arm", "unreadable", "duplicate", "duplicate"]


@pytest.mark.parametrize("code", ["-99", "-9", "999", "9999"])
def test_a_code_for_missing_far_outside_stops(code: str):
    (found,) = problems(("P1", "1.2", "3"), ("P2", code, "2"))
    assert found.code == "missing code"
    assert (found.row, found.column) == (3, "w0")
    assert "the other values lie between 1.2 and 3." in found.message


@pytest.mark.parametrize(
    "texts", [("-99", "-3"), ("999", "850"), ("-99.0", "5"), ("999.0", "5"), ("99", "10")]
)
def test_a_number_that_may_be_real_is_read(texts: tuple[str, str]):
    assert arranged(("P1", *texts)).values[0].tolist() == [float(text) for text in texts]


def test_many_unreadable_cells_are_counted_not_listed():
    cells = [(f"P{i}", "text", "1") for i in range(130)]
    found = problems(*cells)
    assert len(found) == 101
    assert found[-1].message == "30 more cells cannot be read."


def test_no_rows_is_a_problem():
    with pytest.raises(DataError, match="there is no row with data"):
        arrange([], occasions=LABELS)


# ── marks settled by the other cells ──────────────────────────────────────────────────


def written(*texts: str) -> list[Written]:
    return [Written(f"P{i}", "w0", text, row=i) for i, text in enumerate(texts, start=2)]


def test_the_other_cells_settle_a_lone_comma_and_a_note_shows_it():
    records, notes, used = read_cells(written("0,45", "1,234"))
    assert [str(r.cell.number) for r in records] == ["0.45", "1.234"]
    assert used == ","
    assert str(notes[0]) == (
        "Numbers read with a decimal comma: '0,45' as 0.45 and '1,234' as 1.234."
    )


def test_a_lone_comma_among_decimal_points_stops_with_an_example():
    records, _, _ = read_cells(written("0.45", "1,234"))
    with pytest.raises(DataError) as caught:
        arrange(records, occasions=LABELS)
    (found,) = caught.value.problems
    assert found.message == "'1,234' of P3 at w0 can be read as 1.234 or 1234 (1 cell like it)."
    assert found.action == "Say which mark is the decimal one: --decimal , or --decimal ."


def test_numbers_that_are_numbers_in_the_file_are_never_in_doubt():
    records, _, _ = read_cells([Written("P1", "w0", "1.234", number=True), *written("0,45")])
    assert str(records[0].cell.number) == "1.234"


def test_both_marks_in_one_file_are_read_number_by_number_and_noted():
    records, notes, used = read_cells(written("0,45", "0.5"))
    assert [str(r.cell.number) for r in records] == ["0.45", "0.5"]
    assert used == "mixed"
    assert "Decimal points and decimal commas both occur" in str(notes[0])


@pytest.mark.parametrize(
    ("text", "code", "words"),
    [
        ("0.3*", "flagged", "1 value with a mark beside the number kept as measured: P2 at w0"),
        ("ND", "limit words", "A word such as 'ND' can also mean 'not done'."),
        ("0", "zero", "1 value written as 0: P2 at w0 (0)."),
    ],
)
def test_what_is_odd_is_noted(text: str, code: str, words: str):
    _, notes, _ = read_cells(written(text))
    assert note_codes(notes) == (code,)
    assert words in str(notes[0])


# ── conservation ──────────────────────────────────────────────────────────────────────

TEXTS = st.one_of(
    st.decimals(min_value="0.01", max_value="50", places=2).map(str),
    st.sampled_from(["<0.30", "ND", ">60", "missed", "haemolysed", "", "NA", "0.30*"]),
)


@pytest.mark.property
@given(
    st.lists(st.tuples(TEXTS, TEXTS), min_size=1, max_size=12),
    st.sampled_from([None, "mean", "geometric"]),
)
def test_no_cell_is_lost(cells: list[tuple[str, str]], replicates):
    table = arranged(
        *[(f"P{i}", *texts) for i, texts in enumerate(cells)],
        replicates=replicates, lower_limit=0.3, upper_limit=60,
    )  # fmt: skip
    counts = table.ledger.counts
    assert counts.read == 2 * len(cells) == table.values.size
    assert counts.refused == 0
    assert counts.below == table.below.sum()
    assert counts.above == table.above.sum()
    assert counts.missing == np.isnan(table.values).sum()
    assert sum(line.cells for line in table.ledger.of_step("missing")) == counts.missing


@pytest.mark.property
@given(st.lists(st.tuples(TEXTS, TEXTS), min_size=1, max_size=8), st.randoms())
def test_shuffled_records_fill_the_same_cells(cells: list[tuple[str, str]], random):
    records = rows(*[(f"P{i}", *texts) for i, texts in enumerate(cells)])
    declared = Declared(lower_limit=0.3, upper_limit=60)
    first = arrange(records, occasions=LABELS, declared=declared)
    random.shuffle(records)
    second = arrange(records, occasions=LABELS, declared=declared)
    rows_of_second = [second.subjects.index(subject) for subject in first.subjects]
    for name in ("values", "below", "above", "lower_limit", "upper_limit", "tokens"):
        np.testing.assert_array_equal(getattr(first, name), getattr(second, name)[rows_of_second])
