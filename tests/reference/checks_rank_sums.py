"""What Nemenyi's and Conover's comparisons find for the published cases of Friedman's test."""

from __future__ import annotations

import functools
import itertools
from collections.abc import Iterator
from typing import Any

from scipy import special

import robustrm as rm
from tests.reference.cases import Check, case
from tests.reference.checks_omnibus import table_of

# Printed from a studentized range that was itself rounded: off in their last digit.
FROM_THREE_DECIMALS = {("q05", "3"), ("q05", "7"), ("q10", "5")}


@functools.cache
def family(name: str, method: str, level: float = 0.95) -> rm.FollowUps:
    """All pairs of a case."""
    return rm.follow_up(table_of(name), method=method, family="all", level=level)


@functools.cache
def balanced(k: int, level: float) -> rm.FollowUps:
    """All pairs of k occasions with equal rank sums: every cyclic order, ten times."""
    rows = [[(i + j) % k + 1 for j in range(k)] for i in range(k)] * 10
    labels = [f"occasion {j + 1}" for j in range(k)]
    table = rm.OccasionTable.from_array(rows, occasions=labels)
    return rm.follow_up(table, method="nemenyi", family="all", level=level)


def reach(found: rm.FollowUps) -> float:
    """Half the width of the intervals: the difference of mean ranks that is just at the level.

    Read off the smallest difference, whose limits are not cut at those of a mean rank.
    """
    estimate = min((c.estimate for c in found if c.estimate), key=lambda e: abs(e.value))
    assert estimate.high is not None
    return estimate.high - estimate.value


def cut(name: str, level: float) -> float:
    """Difference of rank sums at which Nemenyi's adjusted p is one minus the level."""
    found = family(name, "nemenyi", level)
    return reach(found) * next(iter(found)).result.n_subjects


def q(found: rm.FollowUps) -> float:
    """The same difference in standard errors."""
    return reach(found) / float(next(iter(found)).result.details["standard_error"])


def matrix(name: str, method: str, column: str) -> list[list[float]]:
    """P values of a family as a symmetric matrix, 1 on its diagonal."""
    found = family(name, method)
    places = {label: j for j, label in enumerate(table_of(name).occasions)}
    result = [[1.0] * len(places) for _ in places]
    for c in found:
        i, j = places[c.first], places[c.second]
        result[i][j] = result[j][i] = getattr(c, column)
    return result


def by_pair(name: str, what: str) -> dict[str, float]:
    """Sizes of t, or p, of Conover's comparisons by "1-2" and so on."""
    k = table_of(name).n_occasions
    keys = [f"{i}-{j}" for i, j in itertools.combinations(range(1, k + 1), 2)]
    found = [abs(c.result.statistic) if what == "t" else c.p_value for c in family(name, "conover")]
    return dict(zip(keys, found, strict=True))


def least_difference(name: str, what: str) -> Any:
    """Standard error of a difference of rank sums, its df, and t(0.975) standard errors."""
    result = next(iter(family(name, "conover"))).result
    se = result.details["standard_error"] * result.n_subjects
    (df,) = result.df
    return {"se": se, "df": df, "lsd": float(special.stdtrit(df, 0.975)) * se}[what]


def _nemenyi() -> Iterator[Check]:
    rounding, classifiers = "friedman_hw_rounding", "friedman_demsar"
    for section in ("published", "recomputed"):
        for digits, level in (("05", 0.95), ("01", 0.99)):
            find = functools.partial(cut, rounding, level)
            yield Check(rounding, f"{section}.nemenyi_cut_{digits}", find)
        yield Check(classifiers, f"{section}.q05", lambda: q(family(classifiers, "nemenyi")))
        yield Check(classifiers, f"{section}.CD05", lambda: reach(family(classifiers, "nemenyi")))
        for column, level in (("q05", 0.95), ("q10", 0.90)):
            for k in case("nemenyi_q_table").at(f"{section}.{column}"):
                if section == "published" and (column, k) in FROM_THREE_DECIMALS:
                    continue
                find = functools.partial(lambda k, level: q(balanced(int(k), level)), k, level)
                yield Check("nemenyi_q_table", f"{section}.{column}/{k}", find)
    find_matrix = functools.partial(matrix, rounding, "nemenyi", "p_adjusted")
    yield Check(rounding, "recomputed.nemenyi_p_scikit_posthocs", find_matrix)
    yield Check(rounding, "recomputed.abs_rank_sum_differences", _differences)


def _differences() -> dict[str, float]:
    found = family("friedman_hw_rounding", "nemenyi")
    sizes = [abs(c.estimate.value) * c.result.n_subjects for c in found if c.estimate]
    return dict(zip(("1-2", "1-3", "2-3"), sizes, strict=True))


def _conover() -> Iterator[Check]:
    name = "friedman_conover_grass"
    for what in ("t", "p"):
        yield Check(name, f"recomputed.conover/{what}", functools.partial(by_pair, name, what))
    for what in ("se", "df", "lsd"):
        find = functools.partial(least_difference, name, what)
        yield Check(name, f"recomputed.conover/{what}", find)
    find_matrix = functools.partial(matrix, name, "conover", "p_value")
    yield Check(name, "recomputed.conover_p_scikit_posthocs", find_matrix)


CHECKS = (*_nemenyi(), *_conover())
