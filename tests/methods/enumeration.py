"""Brute enumeration: the statistic of every arrangement of a table, nothing merged or fixed.

A missing cell is None and stays where it is. The arrangement that was observed comes first.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Iterable, Sequence
from typing import Any

import numpy as np
import pytest
from hypothesis import strategies as st

import robustrm as rm
from tests.methods.tables import share, tables

Row = Sequence[Any]
Arrange = Callable[[Row], list[Row]]
# Sums of the score vectors (m, k) to statistics (m,).
Form = Callable[[np.ndarray], np.ndarray]

both_scales = pytest.mark.parametrize("scale", ["raw", "log"])

UP_TO_SIX = tables(st.integers(1, 6), st.integers(2, 3), most=6)
FOUR_BY_FOUR = tables(st.integers(1, 4), st.just(4), most=6)
TABLES = st.one_of(UP_TO_SIX, FOUR_BY_FOUR)
# Small enough to compute the whole statistic anew for every arrangement.
SMALL = st.one_of(
    tables(st.integers(1, 4), st.integers(2, 3), most=5),
    tables(st.integers(1, 2), st.just(4), most=5),
)

# Five subjects on four occasions, 7,962,624 arrangements: many ties, a few, and a subject that
# does not change.
FIVE_BY_FOUR: dict[str, list[list[int]]] = {
    "many ties": [[1, 2, 2, 3], [3, 3, 1, 2], [2, 1, 1, 1], [3, 2, 3, 3], [1, 1, 2, 3]],
    "few ties": [[19, 7, 12, 5], [8, 8, 3, 6], [41, 17, 22, 17], [6, 9, 4, 3], [14, 11, 13, 2]],
    "one constant": [[5, 9, 3, 4], [7, 7, 7, 7], [12, 3, 6, 8], [2, 6, 1, 9], [10, 4, 4, 5]],
}
five_by_four = pytest.mark.parametrize("name", FIVE_BY_FOUR)


def orders(row: Row) -> list[Row]:
    """Every order of a row's cells over the places that are not missing."""
    places = [j for j, cell in enumerate(row) if cell is not None]
    arrangements: list[Row] = []
    for cells in itertools.permutations([row[j] for j in places]):
        arranged = list(row)
        for j, cell in zip(places, cells, strict=True):
            arranged[j] = cell
        arrangements.append(arranged)
    return arrangements


def mirrored(row: Row) -> list[Row]:
    """Return a row and its mirror image."""
    return [list(row), [-cell for cell in row]]


def values_by_definition(
    rows: Sequence[Row], statistic: Callable[[list[Row]], Any], arrange: Arrange = orders
) -> np.ndarray:
    """Compute the whole statistic anew for every arrangement of the rows."""
    found = [statistic(list(chosen)) for chosen in itertools.product(*map(arrange, rows))]
    return np.array([float(value) for value in found])


def values_by_sums(scores: Sequence[Row], form: Form, arrange: Arrange = orders) -> np.ndarray:
    """Compute the statistic from the sums of every arrangement of the scores."""
    first, *others = (_vectors(arrange(row)) for row in scores)
    sums = np.zeros((1, first.shape[1]))
    for vectors in others:
        sums = (sums[:, None] + vectors[None]).reshape(-1, vectors.shape[1])
    return np.concatenate([form(vector + sums) for vector in first])


def _vectors(arrangements: Iterable[Row]) -> np.ndarray:
    return np.array([[0 if cell is None else cell for cell in row] for row in arrangements], float)


def spread(sums: np.ndarray) -> np.ndarray:
    """T, the sum of squared deviations of the occasions' sums from their mean."""
    return ((sums - sums.mean(axis=1, keepdims=True)) ** 2).sum(axis=1)


def share_at_least(values: np.ndarray, value: float) -> float:
    """Share of the arrangements with a statistic of `value` or more, rounding forgiven."""
    return share(int((values >= value - _rounding(values)).sum()), values.size)


def share_at_most(values: np.ndarray, value: float) -> float:
    """Share of the arrangements with a statistic of `value` or less, rounding forgiven."""
    return share(int((values <= value + _rounding(values)).sum()), values.size)


def _rounding(values: np.ndarray) -> float:
    return 1e-9 * float(np.abs(values[np.isfinite(values)]).max(initial=0.0))


def check_upper(result: rm.TestResult, values: np.ndarray) -> None:
    """Compare with a statistic of which large values count."""
    assert result.null == "exact"
    assert result.arrangements == values.size
    assert result.p_value == pytest.approx(share_at_least(values, values[0]), rel=1e-12)
    smallest = share_at_least(values, values.max())
    assert result.details["smallest_p"] == pytest.approx(smallest, rel=1e-12)


def tail(values: np.ndarray, value: float, alternative: str) -> float:
    """p of a statistic with two tails: the tail that counts, or twice the smaller one."""
    upper, lower = share_at_least(values, value), share_at_most(values, value)
    twice = min(1.0, 2 * min(upper, lower))
    return {"greater": upper, "less": lower, "two-sided": twice}[alternative]


def check_tails(result: rm.TestResult, values: np.ndarray) -> None:
    """Compare with a statistic that has two tails."""
    assert result.null == "exact"
    assert result.arrangements == values.size
    assert result.alternative is not None
    found = tail(values, values[0], result.alternative)
    assert result.p_value == pytest.approx(found, rel=1e-12)
    extremes = (values.min(), values.max())
    smallest = min(tail(values, value, result.alternative) for value in extremes)
    assert result.details["smallest_p"] == pytest.approx(smallest, rel=1e-12)


def anova_f(values: np.ndarray) -> tuple[float, float, tuple[float, float]]:
    """F, its p and its degrees of freedom by the within-subject ANOVA of statsmodels."""
    import pandas as pd
    from statsmodels.stats.anova import AnovaRM

    n, k = values.shape
    frame = pd.DataFrame(
        {
            "subject": np.repeat(range(n), k),
            "occasion": np.tile(range(k), n),
            "value": values.ravel(),
        }
    )
    row = AnovaRM(frame, "value", "subject", within=["occasion"]).fit().anova_table.iloc[0]
    return row["F Value"], row["Pr > F"], (row["Num DF"], row["Den DF"])


def share_of_variation(rows: Sequence[Row]) -> float:
    """Share of the variation within subjects that lies between the occasions, in plain loops.

    With r this share, F = (n − 1) r / (1 − r): both rise together.
    """
    n, k = len(rows), len(rows[0])
    centred = [[cell - sum(row) / k for cell in row] for row in rows]
    whole = sum(cell**2 for row in centred for cell in row)
    between = sum(sum(row[j] for row in centred) ** 2 / n for j in range(k))
    return between / whole if whole > 1e-20 else 0.0
