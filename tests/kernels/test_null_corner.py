"""Counting far tails that few arrangements reach, against enumeration and closed forms."""

from __future__ import annotations

import itertools
import math
from typing import Any

import numpy as np
import pytest

from robustrm.kernels.null import corner
from robustrm.kernels.null.engine import tail
from robustrm.kernels.null.forms import centring, linear, quadratic
from robustrm.kernels.null.problem import Problem
from robustrm.kernels.null.tables import permutation_tables, score_table, sign_tables


def enumerated(tables, form):
    """Statistic of every arrangement, one by one."""
    rows = [table.listed() for table in tables]
    every = [np.repeat(row.vectors, row.weights.astype(int), axis=0) for row in rows]
    sums = np.array([np.sum(chosen, axis=0) for chosen in itertools.product(*every)])
    return form.values(sums, exact=False)


def permuted(n, k, *, seed=1, **options):
    rng = np.random.default_rng(seed)
    scores = rng.lognormal(0, 0.8, size=(n, k)) + np.linspace(0, 1, k)
    seen = options.get("observed")
    return permutation_tables(np.where(seen, scores, 0) if seen is not None else scores, **options)


MISSING = np.array([[1, 1, 1], [1, 0, 1], [1, 1, 1], [0, 1, 1], [1, 1, 1], [1, 1, 0]], bool)
TABLES: dict[str, Any] = {
    "values": (permuted(5, 3), centring(3)),
    "ranks": (permutation_tables(np.tile([0.0, 2, 4], (6, 1))), centring(3)),
    "ties": (
        permutation_tables(np.array([[0, 1.5, 1.5], [0, 0, 3], [1, 2, 0], [3, 3, 0]])),
        centring(3),
    ),
    "four": (permuted(3, 4), centring(4)),
    "missing": (permuted(6, 3, observed=MISSING), centring(3)),
    "blocks": (
        permuted(4, 5, blocks=[[0, 1, 2], [3, 4]]),
        centring(5, blocks=[[0, 1, 2], [3, 4]]),
    ),
    "mirrored": (sign_tables(np.random.default_rng(2).normal(size=(9, 4))), centring(4)),
    "another form": (permuted(5, 3), quadratic(np.array([[2.0, 1, 0], [0, 1, -1]]))),
    "weights": (
        [score_table(np.array([[0.0, 1], [1, 0], [3, 1]]), [1, 2, 5]) for _ in range(5)],
        quadratic(np.eye(2)),
    ),
    "line": (sign_tables(np.random.default_rng(3).lognormal(size=10)), linear(1)),
    "trend": (permuted(3, 4), linear([1.0, 2, 4, 9])),
}


@pytest.mark.parametrize("name", TABLES)
@pytest.mark.parametrize("share", [0.0, 0.01, 0.1, 0.5, 1.0])
def test_the_count_is_that_of_all_arrangements(name, share):
    tables, form = TABLES[name]
    every = np.sort(enumerated(tables, form))[::-1]
    value = every[min(int(share * len(every)), len(every) - 1)]
    low = value - 1e-9 * np.abs(every).max()
    found = corner.log_share(Problem(tuple(tables), form), low)
    assert found is not None
    assert math.exp(found) == pytest.approx((every >= low).mean(), rel=1e-10)


@pytest.mark.parametrize("name", ["line", "trend"])
def test_small_values_of_a_line(name):
    tables, form = TABLES[name]
    every = np.sort(enumerated(tables, form))
    high = every[len(every) // 20] + 1e-9
    found = corner.log_share(Problem(tuple(tables), form), -high, side=-1)
    assert found is not None
    assert math.exp(found) == pytest.approx((every <= high).mean(), rel=1e-10)


def test_beyond_the_largest_value_there_is_nothing():
    tables, form = TABLES["values"]
    most = enumerated(tables, form).max()
    assert corner.log_share(Problem(tuple(tables), form), 1.001 * most) == -math.inf


@pytest.mark.parametrize(("n", "k"), [(20, 3), (30, 4), (12, 5), (8, 6)])
def test_all_subjects_ranked_alike(n, k):
    """k! of the (k!)^n arrangements (Friedman 1937), whatever the number of subjects."""
    scores = np.tile(np.arange(k) * 2.0, (n, 1))
    found = tail(
        permutation_tables(scores), scores.sum(axis=0), centring(k), null="importance sampling"
    )
    assert (found.null, found.how, found.draws) == ("exact", "corner", None)
    assert found.log_p == pytest.approx((1 - n) * math.log(math.factorial(k)), rel=1e-12)


def test_all_differences_of_one_sign():
    """2 of the 2^n sign patterns, two-sided."""
    differences = np.random.default_rng(1).lognormal(size=200)
    tables = sign_tables(differences)
    for null in ("importance sampling", "saddlepoint"):
        found = tail(tables, differences.sum(), linear(1), null=null)
        assert (found.null, found.how) == ("exact", "corner")
        assert found.log_p == pytest.approx(-199 * math.log(2), rel=1e-12)


def test_a_crowded_tail_is_left_to_others():
    tables = permuted(30, 3)
    observed = np.array([-3.0, 0.0, 3.0])
    low = float(centring(3).values(observed, exact=False))
    assert corner.log_share(Problem(tuple(tables), centring(3)), low) is None


@pytest.mark.parametrize("side", ["greater", "less", "two-sided"])
@pytest.mark.parametrize("turned", [1, -1])
def test_asymmetric_lines_count_the_side_that_is_asked(side, turned):
    tables = [score_table([[0.0], [turned * 1.0], [turned * 9.0]], [6, 3, 1]) for _ in range(12)]
    for observed in turned * np.array([108.0, 90.0, 45.0, 20.0, 3.0, 0.0]):
        form = linear(1, side=side)
        exact = tail(tables, observed, form, null="exact").p_value
        found = tail(tables, observed, form, null="importance sampling", draws=20_000, rng=1)
        assert found.p_value == pytest.approx(exact, rel=1e-10 if found.null == "exact" else 0.1)
