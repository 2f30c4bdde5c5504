"""The Skillings-Mack test against enumeration, Friedman's and Durbin's tests."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy import stats

import robustrm as rm
from robustrm.results import note_codes
from tests.methods.enumeration import (
    FIVE_BY_FOUR,
    both_scales,
    check_upper,
    five_by_four,
    orders,
    share_at_least,
    values_by_definition,
    values_by_sums,
)
from tests.methods.tables import raw, tables, twice_ranks


def with_gaps(rows):
    """Make a table whose missing cells are None."""
    return raw([[math.nan if cell is None else cell for cell in row] for row in rows])


def block_score(row):
    """√(12/(k_i+1)) (r − (k_i+1)/2) on the occasions of a subject, None elsewhere."""
    cells = [cell for cell in row if cell is not None]
    size = len(cells)
    ranks = iter(twice_ranks(cells))
    factor = math.sqrt(12 / (size + 1)) / 2
    return [None if cell is None else factor * (next(ranks) - (size + 1)) for cell in row]


def filled(row):
    """A row with zero where a cell is missing."""
    return [0.0 if cell is None else cell for cell in row]


def covariance(rows):
    """Covariance of the score sums: for each subject over all orders of its own scores."""
    total = np.zeros((len(rows[0]),) * 2)
    for row in rows:
        vectors = np.array([filled(order) for order in orders(block_score(row))])
        total += np.cov(vectors, rowvar=False, bias=True)
    return total


def statistic(rows):
    """T = A' V⁻ A with the sums A of the scores (Skillings & Mack 1981)."""
    sums = np.sum([filled(block_score(row)) for row in rows], axis=0)
    return float(sums @ np.linalg.pinv(covariance(rows), rcond=1e-10) @ sums)


def form_of(rows):
    """T of many sums at once; the covariance does not depend on the arrangement."""
    inverse = np.linalg.pinv(covariance(rows), rcond=1e-10)
    return lambda sums: ((sums @ inverse) * sums).sum(axis=1)


def is_connected(rows):
    """Whether every occasion can be reached from every other through subjects who have both."""
    reached = {0}
    for _ in range(len(rows[0])):
        for row in rows:
            seen = {j for j, cell in enumerate(row) if cell is not None}
            if seen & reached:
                reached |= seen
    return len(reached) == len(rows[0])


@st.composite
def gappy(draw, n, k, most=5):
    """Rows with ties and some missing cells, two or more cells a subject, connected."""
    rows = draw(tables(n, k, most=most))
    for row in rows:
        for j in draw(st.lists(st.integers(0, len(row) - 1), max_size=2)):
            if sum(cell is not None for cell in row) > 2:
                row[j] = None
    assume(is_connected(rows))
    return rows


ANY = st.one_of(gappy(st.integers(1, 6), st.integers(2, 3)), gappy(st.integers(1, 4), st.just(4)))
FEW = st.one_of(gappy(st.integers(1, 4), st.integers(2, 3)), gappy(st.integers(1, 2), st.just(4)))


@pytest.mark.property
@given(rows=ANY)
def test_p_equals_the_enumeration_of_all_arrangements(rows):
    values = values_by_sums([block_score(row) for row in rows], form_of(rows))
    check_upper(rm.skillings_mack(with_gaps(rows)), values)


@both_scales
@pytest.mark.property
@given(rows=FEW)
def test_p_equals_the_enumeration_of_the_statistic_computed_anew(scale, rows):
    values = values_by_definition(rows, statistic)
    check_upper(rm.skillings_mack(with_gaps(rows).on_scale(scale)), values)


@pytest.mark.slow
@five_by_four
def test_p_equals_the_enumeration_of_five_by_four_with_two_missing_cells(name):
    rows: list[list[int | None]] = [list(row) for row in FIVE_BY_FOUR[name]]
    rows[0][1] = rows[3][2] = None
    values = values_by_sums([block_score(row) for row in rows], form_of(rows))
    check_upper(rm.skillings_mack(with_gaps(rows)), values)


def test_fixing_a_complete_subject_would_give_other_tails_when_cells_are_missing():
    """5 x 3 with two missing cells, 864 arrangements: 122 and 74 of them, not 120 and 66.

    The two values are tails that this table can have; every attainable tail is enumerated.
    """
    rows: list[list[int | None]] = [[None, 1, 2], [1, None, 2], [1, 2, 3], [1, 2, 3], [1, 2, 3]]
    values = values_by_sums([block_score(row) for row in rows], form_of(rows))
    assert values.size == 864
    tails = {round(864 * share_at_least(values, value)) for value in values}
    assert {122, 74} <= tails
    assert not {120, 66} & tails
    found = set()
    for arranged in itertools.product(*map(orders, rows[1:])):
        result = rm.skillings_mack(with_gaps([rows[0], *arranged]))
        found.add(round(864 * result.p_value))
        if len(found) == len(tails):
            break
    assert found == tails


@pytest.mark.property
@given(rows=ANY)
def test_statistic_is_that_of_the_definition_and_its_p_chi_square(rows):
    assume(any(len({cell for cell in row if cell is not None}) > 1 for row in rows))
    result = rm.skillings_mack(with_gaps(rows))
    assert result.statistic == pytest.approx(statistic(rows), rel=1e-9, abs=1e-9)
    (rank,) = result.df
    assert rank == np.linalg.matrix_rank(covariance(rows), tol=1e-8)
    p = stats.chi2.sf(statistic(rows), rank)
    assert result.details["p_chi2"] == pytest.approx(p, rel=1e-8)
    sums = np.sum([filled(block_score(row)) for row in rows], axis=0)
    assert result.details["adjusted_sums"] == pytest.approx(sums.tolist(), rel=1e-10, abs=1e-10)
    assert result.details["n_complete"] == sum(None not in row for row in rows)


@pytest.mark.property
@given(rows=tables(st.integers(1, 8), st.integers(2, 4), most=5))
def test_without_gaps_it_is_friedmans_test_with_its_tie_correction(rows):
    assume(any(len(set(row)) > 1 for row in rows))
    found, friedman = rm.skillings_mack(raw(rows)), rm.friedman(raw(rows))
    if found.df == friedman.df:  # ties may tie two occasions in every subject
        assert found.statistic == pytest.approx(friedman.statistic, rel=1e-9, abs=1e-9)
        assert found.p_value == pytest.approx(friedman.p_value, rel=1e-9)
    else:
        assert found.statistic == pytest.approx(statistic(rows), rel=1e-9, abs=1e-9)


DESIGNS: dict[str, list[tuple[int, ...]]] = {
    # every subject on c of t occasions, every occasion r times, every pair equally often together
    "4 occasions by threes": list(itertools.combinations(range(4), 3)),
    "5 occasions by pairs": list(itertools.combinations(range(5), 2)),
    "6 occasions by threes": [
        (0, 1, 2), (0, 1, 3), (0, 2, 4), (0, 3, 5), (0, 4, 5),
        (1, 2, 5), (1, 3, 4), (1, 4, 5), (2, 3, 4), (2, 3, 5),
    ],
}  # fmt: skip


@pytest.mark.reference
@pytest.mark.parametrize("name", DESIGNS)
@pytest.mark.parametrize("seed", range(4))
def test_on_a_balanced_incomplete_design_without_ties_it_is_durbins_test(name, seed):
    """D = 12 (t−1) / (r t (c−1)(c+1)) Σ_j R_j² − 3 r (t−1)(c+1)/(c−1), Durbin (1951).

    As in Conover (1999), section 5.9, formula written from memory.
    """
    blocks = DESIGNS[name]
    t, c = max(max(block) for block in blocks) + 1, len(blocks[0])
    r = sum(0 in block for block in blocks)
    pairs = [
        sum({a, b} <= set(block) for block in blocks)
        for a, b in itertools.combinations(range(t), 2)
    ]
    assert len(set(pairs)) == 1  # balanced
    rng = np.random.default_rng(seed)
    sums, rows = np.zeros(t), []
    for block in blocks:
        values = rng.permutation(c) + 1
        row = [None] * t
        for j, value in zip(block, values.tolist(), strict=True):
            row[j] = 10 + value
            sums[j] += value
        rows.append(row)
    durbin = 12 * (t - 1) / (r * t * (c - 1) * (c + 1)) * (sums**2).sum()
    durbin -= 3 * r * (t - 1) * (c + 1) / (c - 1)
    result = rm.skillings_mack(with_gaps(rows), draws=99, rng=1)
    assert result.statistic == pytest.approx(durbin, rel=1e-10, abs=1e-10)
    assert result.details["statistic_1981"] == pytest.approx(durbin, rel=1e-10, abs=1e-10)
    assert result.df == (t - 1,)


@pytest.mark.property
@given(rows=ANY)
def test_without_ties_the_covariance_of_the_paper_is_the_conditional_one(rows):
    for row in rows:
        cells = [cell for cell in row if cell is not None]
        assume(len(set(cells)) == len(cells))
    result = rm.skillings_mack(with_gaps(rows))
    assert result.details["statistic_1981"] == pytest.approx(result.statistic, rel=1e-9, abs=1e-9)
    assert result.details["p_1981"] == pytest.approx(result.details["p_chi2"], rel=1e-8)


def test_with_ties_the_statistic_of_the_paper_is_smaller():
    """It divides by the variance of untied ranks, which is larger."""
    rows = [[1, 1, 2, None], [1, 2, 2, 3], [1, 2, 2, 2], [None, 1, 2, 2]]
    result = rm.skillings_mack(with_gaps(rows))
    assert result.details["statistic_1981"] < result.statistic


def test_occasions_that_no_subject_links_are_refused():
    rows = [[1, 2, None, None], [2, 3, None, None], [None, None, 4, 5]]
    with pytest.raises(rm.TooFewError) as refused:
        rm.skillings_mack(with_gaps(rows))
    assert str(refused.value) == (
        "The Skillings-Mack test needs occasions that subjects connect, got groups that no "
        "subject links: week 0 and week 2; week 6 and week 12. Leave out the occasions of the "
        "smaller group."
    )


def test_an_occasion_that_nobody_has_is_refused_too():
    rows = [[1, 2, None], [2, 3, None], [4, 1, None]]
    with pytest.raises(rm.TooFewError, match=r"links: week 0 and week 2; week 6\. Leave out"):
        rm.skillings_mack(with_gaps(rows))


def test_a_table_in_which_nobody_has_two_occasions_is_refused():
    with pytest.raises(rm.TooFewError, match="needs a subject with at least 2 occasions"):
        rm.skillings_mack(with_gaps([[1, None], [None, 2]]))


def test_subjects_with_a_single_occasion_leave_with_a_note():
    rows = [[1, 2, 3], [2, 1, None], [None, None, 4], [None, None, None], [3, 5, 4]]
    result = rm.skillings_mack(with_gaps(rows))
    assert result.subjects == ("S1", "S2", "S5")
    assert note_codes(result.notes) == ("single occasion",)
    assert "S3 and S4 left: fewer than two occasions" in str(result.notes[0])
    kept = rm.skillings_mack(with_gaps([rows[i] for i in (0, 1, 4)]))
    assert (result.statistic, result.p_value) == (kept.statistic, kept.p_value)
    assert not kept.notes


def test_values_are_ranked_at_the_limit_that_all_cells_share():
    values = [[0.4, 0.9, 2.0], [1.0, 0.6, 3.0], [0.7, 0.8, 0.9]]
    below = [[True, False, False], [False] * 3, [False] * 3]
    result = rm.skillings_mack(raw(values, below=below, lower_limit=[0.4, 0.4, 0.85]))
    # at the common limit 0.85 the third subject has 0.7 and 0.8 tied below 0.9
    expected = rm.skillings_mack(raw([[1, 3, 4], [3, 1, 4], [1, 1, 2]]))
    assert result.statistic == pytest.approx(expected.statistic, rel=1e-12)


def test_a_table_without_any_change_has_p_1_and_says_why():
    result = rm.skillings_mack(with_gaps([[7, 7, None], [7, 7, 7]]))
    assert result.p_value == 1
    assert math.isnan(result.statistic)
    assert math.isnan(result.details["p_chi2"])
    assert note_codes(result.notes) == ("all tied",)
