"""Nemenyi's and Conover's comparisons of rank sums: pairs of occasions after Friedman's test.

Methods of a whole family: the ranks are those among all occasions, and p values are adjusted
in one step over all pairs by the studentized range. `follow_up` calls them.
"""

from __future__ import annotations

import functools
import math
import sys
import warnings
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy import special

from robustrm._checks import check_level
from robustrm._format import counted, level_text, number
from robustrm.errors import TooFewError
from robustrm.kernels.scores import rank_scores
from robustrm.methods.additive import EXCHANGEABLE
from robustrm.results import Comparison, Estimate, Note, TestResult
from robustrm.table import OccasionTable
from robustrm.ties import Floats

Pair = tuple[str, str]


def nemenyi(
    table: OccasionTable, pairs: Sequence[Pair], *, level: float = 0.95
) -> tuple[Comparison, ...]:
    """Compare the mean ranks of pairs of occasions, all pairs together, after Nemenyi.

    Parameters
    ----------
    table : OccasionTable
        The rows complete on all occasions are used, at least two. Only the order of a
        subject's own values counts, rank 1 the smallest, so the scale plays no part.
    pairs : sequence of (first, second)
        Declared family; the difference is second − first.
    level : float, default 0.95
        Level that the intervals of all pairs hold together.

    Returns
    -------
    tuple of Comparison
        Statistic z with its normal p value, p adjusted by the studentized range over all
        pairs of occasions, and the difference of mean ranks with its simultaneous interval.
        ``details`` holds ``mean_ranks``, ``standard_error``, ``smallest_p`` and
        ``smallest_p_adjusted``.

    Raises
    ------
    TooFewError
        With fewer than two complete subjects.

    Notes
    -----
    z is the difference of mean ranks divided by √(k(k+1)/(6n)), and the adjusted p is the
    tail of the range of k normal variables at √2·|z|. Both are asymptotic. The variance is that
    of the null hypothesis without ties: with ties, or where other occasions differ, p is too
    large. The ranks are those among all occasions, so the p value of a pair depends on the
    others: an occasion more or less moves it.

    The null hypothesis is that the occasions are exchangeable. Unequal spread or correlation
    can make p small without any shift.

    References
    ----------
    .. [1] Nemenyi, P. (1963). Distribution-free Multiple Comparisons. PhD thesis, Princeton
       University.
    .. [2] Demšar, J. (2006). Statistical comparisons of classifiers over multiple data sets.
       Journal of Machine Learning Research 7, 1-30.

    Examples
    --------
    >>> from robustrm.methods.follow_up import follow_up
    >>> table = OccasionTable.from_array(
    ...     [[91, 72, 60], [40, 31, 25], [120, 125, 80], [66, 50, 59], [33, 21, 20], [75, 60, 44]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ... )
    >>> family = follow_up(table, method="nemenyi", family="all")
    >>> [(c.second, round(c.p_value, 3), round(c.p_adjusted, 3)) for c in family]
    [('week 6', 0.149, 0.319), ('week 12', 0.004, 0.011), ('week 12', 0.149, 0.319)]
    """
    ranked = _Ranked.of(table, "The Nemenyi test", level)
    n, k = ranked.scores.shape
    error = math.sqrt(k * (k + 1) / (6 * n))
    p_adjusted = _library("posthoc_nemenyi_friedman", ranked.scores) if ranked.moves else None
    # the pair's lowest and highest rank of every subject could stand on its two occasions
    farthest = float(np.ptp(ranked.scores, axis=1).sum()) / (2 * n)
    lowest = _normal_p(farthest / error)
    details = {
        "smallest_p": lowest,
        "smallest_p_adjusted": ranked.in_one_step(farthest / error, math.inf, lowest),
    }
    rows = []
    for pair in pairs:
        i, j = ranked.places(pair)
        z = ranked.difference(i, j) / error if ranked.moves else math.nan
        p = _normal_p(z)
        p_all = p if p_adjusted is None else ranked.bounded(p_adjusted[i, j], p)
        result = ranked.result(
            "nemenyi", pair, ("z", z, ()), p, error, notes=ranked.tie_notes(), details=details
        )
        rows.append(Comparison(*pair, result, p_all))
    return tuple(rows)


def conover(
    table: OccasionTable, pairs: Sequence[Pair], *, level: float = 0.95
) -> tuple[Comparison, ...]:
    """Compare the mean ranks of pairs of occasions, all pairs together, after Conover.

    Parameters
    ----------
    table : OccasionTable
        The rows complete on all occasions are used, at least two. Only the order of a
        subject's own values counts, so the scale plays no part.
    pairs : sequence of (first, second)
        Declared family; the difference is second − first.
    level : float, default 0.95
        Level that the intervals of all pairs hold together.

    Returns
    -------
    tuple of Comparison
        Statistic t with its p value on (n−1)(k−1) degrees of freedom, p adjusted by the
        studentized range over all pairs of occasions, and the difference of mean ranks with
        its simultaneous interval. ``details`` holds ``mean_ranks`` and ``standard_error``.

    Raises
    ------
    TooFewError
        With fewer than two complete subjects.

    Notes
    -----
    The squared standard error of a difference of rank sums is
    2(nA − ΣR²)/((n−1)(k−1)), A the sum of the squared ranks and R the rank sums; ties are in
    it. The adjusted p is the tail of the studentized range of k means at √2·|t| on the
    (n−1)(k−1) degrees of freedom of that standard error. Taken at infinitely many, as for a
    known variance, it would reject too often with the few subjects of a pilot.

    When all subjects rank the occasions alike the standard error is zero and t infinite. Then
    p is exact: the probability that they do so by chance, without ties (1/k!)^(n−1). A note
    says where an approximate p is below what any exact one could be.

    The ranks are those among all occasions, so the p value of a pair depends on the others.
    The null hypothesis is that the occasions are exchangeable. Unequal spread or correlation
    can make p small without any shift.

    References
    ----------
    .. [1] Conover, W. J. (1999). Practical Nonparametric Statistics, 3rd ed., section 5.8.
    .. [2] Conover, W. J. and Iman, R. L. (1979). On multiple-comparisons procedures. Technical
       report LA-7677-MS, Los Alamos Scientific Laboratory.

    Examples
    --------
    >>> from robustrm.methods.follow_up import follow_up
    >>> table = OccasionTable.from_array(
    ...     [[91, 72, 60], [40, 31, 25], [120, 125, 80], [66, 50, 59], [33, 21, 20], [75, 60, 44]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ... )
    >>> family = follow_up(table, method="conover", family="all")
    >>> [(c.second, round(c.p_value, 4), round(c.p_adjusted, 4)) for c in family]
    [('week 6', 0.0383, 0.0893), ('week 12', 0.0008, 0.002), ('week 12', 0.0383, 0.0893)]
    """
    ranked = _Ranked.of(table, "The Conover test", level)
    n, k = ranked.scores.shape
    df = (n - 1) * (k - 1)
    # scores are twice the centred ranks, so this is 4(nA − ΣR²), in whole numbers
    rest = float(n * np.square(ranked.scores).sum() - np.square(ranked.sums).sum())
    error = math.sqrt(rest / (2 * df)) / n
    p_each = _library("posthoc_conover_friedman", ranked.scores) if rest else None
    rows = []
    for pair in pairs:
        i, j = ranked.places(pair)
        difference = ranked.difference(i, j)
        if p_each is None:  # all subjects rank alike, or every subject's values are tied
            t = math.copysign(math.inf, difference) if difference else math.nan
            p, p_all = ranked.chance_of_agreement() if difference else (1.0, 1.0)
        else:
            t = difference / error
            p = max(float(p_each[i, j]), sys.float_info.min)
            p_all = ranked.in_one_step(abs(t), df, p)
        result = ranked.result(
            "conover",
            pair,
            ("t", t, (float(df),)),
            p,
            error,
            exact=p_each is None and ranked.moves,
            notes=ranked.agreement_notes(t, p),
        )
        rows.append(Comparison(*pair, result, p_all))
    return tuple(rows)


@dataclass(frozen=True, eq=False)
class _Ranked:
    """Complete rows, ranked within subjects: scores are twice the centred ranks, (n, k)."""

    used: OccasionTable
    scores: Floats
    level: float

    @classmethod
    def of(cls, table: OccasionTable, title: str, level: float) -> _Ranked:
        check_level(level)
        used = table.comparable()
        if used.n_subjects < 2:
            raise TooFewError(
                f"{title} needs at least 2 subjects with all {table.n_occasions} occasions, got "
                f"{used.n_subjects or 'none'}."
            )
        return cls(used, rank_scores(used.order_codes()), level)

    @property
    def sums(self) -> Floats:
        return np.asarray(self.scores.sum(axis=0))

    @property
    def n_pairs(self) -> int:
        """All pairs of occasions, whatever family is declared."""
        return math.comb(self.used.n_occasions, 2)

    @property
    def moves(self) -> bool:
        """Whether any subject has two different values."""
        return bool(self.scores.any())

    @property
    def orders(self) -> list[int]:
        """In how many different orders each subject's ranks can stand, k! without ties."""
        counts = []
        for row in self.scores:
            _, sizes = np.unique(row, return_counts=True)
            same = math.prod(math.factorial(size) for size in sizes.tolist())
            counts.append(math.factorial(len(row)) // same)
        return counts

    def chance_of_agreement(self) -> tuple[float, float]:
        """Return the probability that all subjects rank alike and one pair differs, or any.

        For subjects who all have the ties of the first: whatever the first has, each of the
        others has it with probability one in as many orders as there are.
        """
        n, k = self.scores.shape
        _, sizes = np.unique(self.scores[0], return_counts=True)
        apart = 1 - float((sizes * (sizes - 1)).sum()) / (k * (k - 1))
        alike = self.orders[0] ** -(n - 1.0)
        return max(apart * alike, sys.float_info.min), max(alike, sys.float_info.min)

    def places(self, pair: Pair) -> tuple[int, int]:
        return self.used.column("first", pair[0]), self.used.column("second", pair[1])

    def difference(self, i: int, j: int) -> float:
        """Difference of mean ranks, second − first."""
        return float(self.sums[j] - self.sums[i]) / (2 * self.used.n_subjects)

    def bounded(self, p_adjusted: float, p: float) -> float:
        """Return an adjusted p between the pair's own and Bonferroni's over all pairs.

        Between them it must be; the integral behind it has an absolute error, which is more
        than a small tail.
        """
        return min(max(float(p_adjusted), p), self.n_pairs * p, 1.0)

    def in_one_step(self, size: float, df: float, p: float) -> float:
        """Return the p value of a standardized difference, adjusted over all pairs."""
        from scipy.stats import studentized_range

        with _silence():
            tail = studentized_range.sf(math.sqrt(2) * size, self.used.n_occasions, df)
        return self.bounded(tail, p)

    def result(
        self,
        method: str,
        pair: Pair,
        statistic: tuple[str, float, tuple[float, ...]],
        p: float,
        error: float,
        *,
        exact: bool = False,
        notes: Sequence[Note] = (),
        details: dict[str, Any] | None = None,
    ) -> TestResult:
        symbol, value, df = statistic
        used = self.used
        i, j = self.places(pair)
        middle = (used.n_occasions + 1) / 2
        mean_ranks = self.sums / (2 * used.n_subjects) + middle
        return TestResult(
            method=method,
            statistic=value,
            statistic_name=symbol,
            df=df,
            p_value=p,
            null="exact" if exact else "asymptotic",
            n_subjects=used.n_subjects,
            n_occasions=used.n_occasions,
            hypothesis=EXCHANGEABLE,
            estimand="difference of mean ranks among all occasions",
            scale=used.scale,
            alternative="two-sided",
            arrangements=math.prod(self.orders) if exact else None,
            estimate=self._estimate(self.difference(i, j), error, df),
            subjects=used.ids,
            notes=(*notes, *(() if self.moves else (_ALL_TIED,))),
            details={
                "mean_ranks": (float(mean_ranks[i]), float(mean_ranks[j])),
                "standard_error": error,
                **(details or {}),
            },
        )

    def _estimate(self, difference: float, error: float, df: tuple[float, ...]) -> Estimate:
        k = self.used.n_occasions
        low, high, own = None, None, None
        if error and self.moves:
            q = critical_q(k, self.level, df[0] if df else math.inf) / math.sqrt(2)
            # mean ranks lie in 1 to k, so their differences in 1 − k to k − 1
            low, high = max(difference - q * error, 1 - k), min(difference + q * error, k - 1)
            own = 1 - (2 * float(special.stdtr(df[0], -q)) if df else _normal_p(q))
        return Estimate(
            name="difference of mean ranks",
            value=difference,
            low=low,
            high=high,
            level=own,
            kind="studentized range",
            no_change=0.0,
        )

    def tie_notes(self) -> tuple[Note, ...]:
        """Say that Nemenyi's variance knows no ties."""
        tied = int((np.diff(np.sort(self.scores, axis=1), axis=1) == 0).any(axis=1).sum())
        if not tied or not self.moves:
            return ()
        return (
            Note(
                "ties not in the variance",
                f"{tied} of {counted(self.used.n_subjects, 'subject')} with tied values; the "
                "variance is the one without ties.",
                "P is too large and the interval too wide.",
                "Conover's variance takes the ties into account.",
            ),
        )

    def agreement_notes(self, t: float, p: float) -> tuple[Note, ...]:
        """Say where t is infinite, or where its p is smaller than any exact one could be."""
        n, k = self.scores.shape
        if not self.moves:
            return ()
        if math.isinf(t):
            return (
                Note(
                    "perfect agreement",
                    f"All {n} subjects rank the occasions alike, so the standard error is zero "
                    "and t infinite.",
                    "P is exact: the probability that they do so by chance. No interval is given.",
                ),
            )
        if math.isnan(t):
            return (
                Note(
                    "perfect agreement",
                    f"All {n} subjects rank the occasions alike and tie these two, so t is not "
                    "defined.",
                    "P is 1. No interval is given.",
                ),
            )
        # untied, as many arrangements as orders agree throughout; tied, each has a mirror image
        alike = math.factorial(k) if min(self.orders) == math.factorial(k) else 2
        smallest = math.exp(math.log(alike) - math.fsum(map(math.log, self.orders)))
        if p >= smallest:
            return ()
        return (
            Note(
                "below every exact p",
                f"P by the t distribution is below {number(smallest)}, and no exact P of these "
                "ranks can be.",
                "So far out the approximation fails: read P as small and no more.",
                "Quote an exact test beside it, such as Friedman's.",
            ),
        )


_ALL_TIED = Note(
    "all tied",
    "Every subject has the same value on all occasions, so the statistic is not defined.",
    "All arrangements are alike and P is 1.",
)


@functools.cache
def critical_q(k: int, level: float, df: float = math.inf) -> float:
    """Return the quantile of the studentized range of k means, for √2 standardized differences.

    Examples
    --------
    Harter's table has 3.314 for three means and infinitely many degrees of freedom.

    >>> round(critical_q(3, 0.95), 3)
    3.314
    """
    from scipy.stats import studentized_range

    with _silence():
        return float(studentized_range.ppf(level, k, df))


def family_notes(comparisons: Sequence[Comparison], level: float) -> tuple[Note, ...]:
    """Return what a reader must know of a family compared by rank sums."""
    result = comparisons[0].result
    n, k = result.n_subjects, result.n_occasions
    m = math.comb(k, 2)
    shown = "" if len(comparisons) == m else f", of which the family has {len(comparisons)}"
    notes = []
    if k > 2:
        notes.append(
            Note(
                "all pairs of occasions",
                f"Ranks are those among all {k} occasions, of the {n} subjects who have every "
                f"one, and P is adjusted over all {m} pairs{shown}.",
                "The P of a pair depends on the other occasions, and a smaller family gains "
                "nothing.",
            )
        )
    if m > 1 and any(c.estimate is not None and c.estimate.low is not None for c in comparisons):
        notes.append(
            Note(
                "simultaneous intervals",
                f"The intervals of all {m} pairs hold {level_text(level)} together, "
                "by the studentized range; separate ones are not made.",
                "They agree with the adjusted P; their width is that of exchangeable occasions, "
                "the same for every pair.",
            )
        )
    return tuple(notes)


def _normal_p(z: float) -> float:
    """Return the two-sided normal p; 1 where nothing can move."""
    if math.isnan(z):
        return 1.0
    return max(2 * float(special.ndtr(-abs(z))), sys.float_info.min)


def _library(name: str, scores: Floats) -> Floats:
    """Return the p values that scikit-posthocs finds for every pair of columns, (k, k)."""
    with _silence():
        import pandas as pd
        import scikit_posthocs

        found = getattr(scikit_posthocs, name)(pd.DataFrame(scores))
    columns = range(scores.shape[1])
    return np.asarray(found.loc[columns, columns], dtype=float)


def _silence() -> warnings.catch_warnings[None]:
    """Keep the remarks of a library to itself: what it cannot do is decided before the call."""
    return warnings.catch_warnings(action="ignore")
