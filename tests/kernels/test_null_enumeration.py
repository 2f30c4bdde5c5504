"""The engine against brute enumeration of every arrangement of small tables.

Expected values come from `itertools`: all permutations, all sign patterns, nothing merged.
"""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from robustrm.kernels.null.engine import law, smallest_tail, tail
from robustrm.kernels.null.forms import centring, linear, quadratic
from robustrm.kernels.null.tables import permutation_tables, score_table, sign_tables
from robustrm.kernels.null.work import plan_work

pytestmark = pytest.mark.property

# A factor without a short decimal turns whole numbers into real ones, and another way of counting.
SCALES = st.sampled_from([1.0, math.pi / 7])
SIDES = st.sampled_from(["greater", "less", "two-sided"])
BLOCKS = {2: [[0], [1]], 3: [[0, 2], [1]], 4: [[0, 3], [1, 2]]}


def permuted(row, seen, blocks):
    """All arrangements of a row within blocks, missing cells at zero, nothing merged."""
    arrangements = []
    groups = [[j for j in block if seen[j]] for block in blocks]
    for orders in itertools.product(*(itertools.permutations(group) for group in groups)):
        vector = np.zeros(len(row))
        for group, order in zip(groups, orders, strict=True):
            vector[group] = row[list(order)]
        arrangements.append(vector)
    return np.array(arrangements)


def all_sums(arrangements):
    """Sums over every combination of one arrangement a subject."""
    sums = np.zeros((1, arrangements[0].shape[1]))
    for vectors in arrangements:
        sums = (sums[:, None] + vectors[None]).reshape(-1, vectors.shape[1])
    return sums


def share(values, observed, side="greater"):
    """Share of the values at least as extreme as the observed one, by its definition."""
    near = 1e-9 * max(np.abs(values).max(), 1e-300)
    upper, lower = np.mean(values >= observed - near), np.mean(values <= observed + near)
    return {"greater": upper, "less": lower, "two-sided": min(1.0, 2 * min(upper, lower))}[side]


def spread(sums, blocks):
    """Sum over blocks of squared deviations from the block's mean."""
    parts = (sums[:, block] for block in blocks)
    return sum(((part - part.mean(axis=1, keepdims=True)) ** 2).sum(axis=1) for part in parts)


@st.composite
def score_rows(draw, *, missing=False):
    """Whole-number scores with ties, (n, k) up to 4 x 4 and 6 x 3, and a mask of observed cells."""
    k = draw(st.integers(2, 4))
    n = draw(st.integers(1, {2: 6, 3: 6, 4: 4}[k]))
    cell = st.integers(-4, 4)
    rows = draw(st.lists(st.lists(cell, min_size=k, max_size=k), min_size=n, max_size=n))
    seen = np.ones((n, k), dtype=bool)
    if missing:
        holes = draw(st.lists(st.tuples(st.integers(0, n - 1), st.integers(0, k - 1)), max_size=4))
        for hole in holes:
            seen[hole] = False
    return np.where(seen, rows, 0).astype(float), seen


def check_quadratic(tables, form, sums, values, observed_sum):
    result = tail(tables, observed_sum, form)
    observed = values[np.flatnonzero((sums == observed_sum).all(axis=1))[0]]
    assert result.null == "exact"
    assert result.arrangements == len(values)
    assert result.p_value == pytest.approx(share(values, observed), rel=1e-12)
    assert result.log_p == pytest.approx(math.log(share(values, observed)), abs=1e-12)
    best = smallest_tail(tables, form)
    assert best is not None
    assert best.p_value == pytest.approx(share(values, values.max()), rel=1e-12)
    null = law(tables, form)
    assert (null is None) == (plan_work(tables, form).how == "two halves" and not whole(tables))
    if null is not None:
        assert null.probabilities.sum() == pytest.approx(1, rel=1e-12)
        assert null.at_least(observed).p_value == pytest.approx(result.p_value, rel=1e-12)
        np.testing.assert_allclose(null.values, np.unique(values.round(9)), atol=1e-8)


def whole(tables):
    return all((table.listed().vectors % 1 == 0).all() for table in tables)


@given(score_rows(), SCALES, st.booleans())
def test_quadratic_tail_of_complete_rows(data, scale, in_blocks):
    rows, seen = data
    blocks = BLOCKS[rows.shape[1]] if in_blocks else [list(range(rows.shape[1]))]
    rows = rows * scale
    sums = all_sums([permuted(row, mask, blocks) for row, mask in zip(rows, seen, strict=True)])
    form = centring(rows.shape[1], blocks=blocks)
    tables = permutation_tables(rows, blocks=blocks)
    check_quadratic(tables, form, sums, spread(sums, blocks), sums[0])


@given(score_rows(missing=True), SCALES, st.booleans())
def test_quadratic_tail_with_missing_cells(data, scale, in_blocks):
    rows, seen = data
    blocks = BLOCKS[rows.shape[1]] if in_blocks else [list(range(rows.shape[1]))]
    rows = rows * scale
    sums = all_sums([permuted(row, mask, blocks) for row, mask in zip(rows, seen, strict=True)])
    form = centring(rows.shape[1], blocks=blocks)
    tables = permutation_tables(rows, observed=seen, blocks=blocks)
    check_quadratic(tables, form, sums, spread(sums, blocks), sums[0])


@given(score_rows(missing=True), st.sampled_from([[[1, 0, -1]], [[1, -2, 1], [0.5, 0, 0.3]]]))
def test_quadratic_tail_of_any_matrix(data, matrix):
    rows, seen = data
    matrix = np.array(matrix)[:, : rows.shape[1]]
    rows, seen = rows[:, : matrix.shape[1]], seen[:, : matrix.shape[1]]
    blocks = [list(range(rows.shape[1]))]
    sums = all_sums([permuted(row, mask, blocks) for row, mask in zip(rows, seen, strict=True)])
    values = ((sums @ matrix.T) ** 2).sum(axis=1)
    result = tail(permutation_tables(rows, observed=seen), sums[0], quadratic(matrix))
    assert result.p_value == pytest.approx(share(values, values[0]), rel=1e-12)


@given(score_rows(), SCALES)
def test_quadratic_tail_of_mirror_images(data, scale):
    rows = data[0] * scale
    sums = all_sums([np.array([row, -row]) for row in rows])
    blocks = [list(range(rows.shape[1]))]
    form = centring(rows.shape[1])
    check_quadratic(sign_tables(rows), form, sums, spread(sums, blocks), sums[0])


@given(score_rows(missing=True), SCALES, SIDES, st.sampled_from([(1, 2, 3, 4), (2, -1, 0, 1)]))
def test_linear_tail_of_permuted_rows(data, scale, side, coefficients):
    rows, seen = data
    rows, c = rows * scale, np.array(coefficients[: rows.shape[1]])
    blocks = [list(range(rows.shape[1]))]
    sums = all_sums([permuted(row, mask, blocks) for row, mask in zip(rows, seen, strict=True)])
    values, tables, form = sums @ c, permutation_tables(rows, observed=seen), linear(c, side=side)
    result = tail(tables, sums[0], form)
    assert result.how in ("convolution", "sorted halves")
    assert result.p_value == pytest.approx(share(values, values[0], side), rel=1e-12)
    best = smallest_tail(tables, form)
    assert best is not None
    extremes = (values.min(), values.max())
    expected = min(share(values, value, side) for value in extremes)
    assert best.p_value == pytest.approx(expected, rel=1e-12)


@given(
    st.lists(
        st.lists(
            st.tuples(st.integers(-3, 3), st.integers(-3, 3), st.integers(1, 5)),
            min_size=1,
            max_size=4,
        ),
        min_size=1,
        max_size=4,
    ),
    SCALES,
    SIDES,
)
def test_listed_tables_with_multiplicities(subjects, scale, side):
    listed = [np.array([row[:2] for row in rows]) * scale for rows in subjects]
    counts = [[row[2] for row in rows] for rows in subjects]
    tables = [score_table(v, m) for v, m in zip(listed, counts, strict=True)]
    repeated = [np.repeat(v, m, axis=0) for v, m in zip(listed, counts, strict=True)]
    sums = all_sums(repeated)
    result = tail(tables, sums[0], centring(2))
    values = spread(sums, [[0, 1]])
    assert result.p_value == pytest.approx(share(values, values[0]), rel=1e-12)
    assert result.arrangements == len(sums)
    line = sums @ np.array([1, 2])
    result = tail(tables, sums[0], linear([1, 2], side=side))
    assert result.p_value == pytest.approx(share(line, line[0], side), rel=1e-12)


@given(score_rows(), st.randoms(use_true_random=False))
def test_relabelling_the_occasions_changes_nothing(data, random):
    rows, _ = data
    order = list(range(rows.shape[1]))
    random.shuffle(order)
    first = tail(permutation_tables(rows), rows.sum(axis=0), centring(rows.shape[1]))
    again = tail(
        permutation_tables(rows[:, order]), rows[:, order].sum(axis=0), centring(rows.shape[1])
    )
    assert again.p_value == first.p_value
