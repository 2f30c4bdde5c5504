"""The count of pairs of half sums, with and without its short cuts."""

from __future__ import annotations

import math

import numpy as np
import pytest

from robustrm.kernels.null import two_halves
from robustrm.kernels.null.engine import tail
from robustrm.kernels.null.forms import centring
from robustrm.kernels.null.problem import Problem
from robustrm.kernels.null.tables import permutation_tables

SINGLETONS = {3: ((0,), (1,), (2,)), 4: ((0,), (1,), (2,), (3,))}


def real_rows(n, k, *, ties=False):
    """Real scores; with ties some rows hold a value twice, and two rows are alike."""
    rng = np.random.default_rng(100 * n + k)
    rows = rng.standard_gamma(1.5, size=(n, k))
    if ties:
        rows[1, 0], rows[2], rows[3] = rows[1, 1], rows[0], math.pi
    return rows - rows.mean(axis=1, keepdims=True)


@pytest.mark.parametrize("ties", [False, True])
@pytest.mark.parametrize(("n", "k"), [(5, 3), (7, 3), (4, 4)])
def test_folding_and_sorting_leave_the_tail_as_it_is(n, k, ties):
    """The plain way lists every sum of both halves: all k! relabellings of each."""
    rows = real_rows(n, k, ties=ties)
    form, tables = centring(k), permutation_tables(rows)
    problem = Problem(tables, form)
    listed = [table.listed() for table in tables]
    plain = two_halves.folded_halves(listed, 0, SINGLETONS[k], form.projection)
    assert sum(problem.halves[0][1]) < sum(plain[0][1])
    value = float(form.values(rows.sum(axis=0), exact=False))
    for share in (1e-9, 0.3, 1 - 1e-9, 2):
        weight, total = two_halves.upper_tail(*problem.halves, share * value)
        slow, whole = two_halves.upper_tail(*plain, share * value)
        assert weight / total == pytest.approx(slow / whole, rel=1e-14)


@pytest.mark.parametrize("ties", [False, True])
def test_a_pair_counts_by_its_length_and_its_weights(ties):
    first, second = Problem(permutation_tables(real_rows(6, 3, ties=ties)), centring(3)).halves
    lengths = ((first[0][:, None] + second[0][None]) ** 2).sum(axis=2)
    weights = np.multiply.outer(first[1], second[1])
    for floor in np.quantile(lengths, [0.01, 0.4, 0.9, 0.999]) * (1 + 1e-9):
        found = two_halves.upper_tail(first, second, floor)
        assert found == (weights[lengths > floor].sum(), weights.sum())
    assert two_halves.upper_tail(first, second, -math.inf) == (weights.sum(), weights.sum())
    assert two_halves.largest(first, second) == pytest.approx(lengths.max(), rel=1e-12)


@pytest.mark.parametrize("ties", [False, True])
def test_the_number_of_strips_changes_nothing(monkeypatch, ties):
    rows = real_rows(9, 3, ties=ties)
    tables, observed = permutation_tables(rows), rows.sum(axis=0)
    whole = tail(tables, observed, centring(3))
    assert whole.how == "two halves"
    for strips, size in ((1, 1), (5, 7), (64, 3)):
        monkeypatch.setattr(two_halves, "STRIPS", strips)
        monkeypatch.setattr(two_halves, "STRIP", size)
        assert tail(tables, observed, centring(3)) == whole


@pytest.mark.slow
def test_real_scores_are_counted_as_whole_ones_are():
    """Thirteen subjects, 10^10 arrangements: the recursion over whole sums is another way."""
    rows = np.random.default_rng(13).integers(0, 60, size=(13, 3))
    scores = 3.0 * rows - rows.sum(axis=1, keepdims=True)
    whole = tail(permutation_tables(scores), scores.sum(axis=0), centring(3))
    scores *= math.pi / 7
    real = tail(permutation_tables(scores), scores.sum(axis=0), centring(3))
    assert (whole.how, real.how) == ("sorted sums", "two halves")
    assert real.p_value == pytest.approx(whole.p_value, rel=1e-14)
