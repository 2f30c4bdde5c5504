"""One permutation test of many statistics of one table together.

The B rearrangements of a table, and the table itself, make B + 1 tables that are equally likely
under the null hypothesis. Every statistic is computed on each of them. Its p value in table b is
the share of the B + 1 tables in which it is at least as large as in b; m_b is the median of these
p values over the statistics, and the joint p value is the share of the tables with m_b <= m_0,
table 0 being the observed one. All of it is a function of one set of tables, so nothing is nested,
and P(joint p <= a) <= a whatever the statistics are and however they depend on one another: under
the null hypothesis m_0 is exchangeable with the other m_b.

Statistics come scaled to [0, 1], so that one absolute tolerance serves them all.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from robustrm.kernels.null.forms import TOLERANCE
from robustrm.kernels.null.tables import Array

Orders = npt.NDArray[np.int64]

# Numbers in the orders that are held at once: 2^18 int64 are 2 MB.
BLOCK = 1 << 18


def rearrangements(
    observed: npt.NDArray[np.bool_],
    draws: int,
    rng: np.random.Generator,
    *,
    block: int | None = None,
) -> Iterator[Orders]:
    """Yield orders of the cells of every subject, the table itself first.

    Parameters
    ----------
    observed : ndarray of bool, shape (n, k)
        Cells that hold a value. They are permuted among themselves; the others stay.
    draws : int
        Rearrangements besides the table itself.
    rng : numpy.random.Generator
        One draw takes n·k numbers, so the block size changes no result.
    block : int, optional
        Tables at once.

    Yields
    ------
    ndarray of int, shape (b, n, k)
        Which cell of its row stands at each place; ``draws + 1`` tables in all.
    """
    n, k = observed.shape
    # the observed cells of a row first, then the missing ones
    places = np.argsort(~observed, axis=-1, kind="stable")
    home = np.argsort(places, axis=-1, kind="stable")[None]
    yield np.broadcast_to(np.arange(k), (1, n, k))
    most = block or max(1, BLOCK // max(n * k, 1))
    for start in range(0, draws, most):
        keys = rng.random((min(most, draws - start), n, k))
        keys[:, ~observed] = 2.0  # sorted last, in their order
        drawn = np.argsort(keys, axis=-1, kind="stable")
        yield np.take_along_axis(drawn, np.broadcast_to(home, drawn.shape), axis=-1)


def rearranged(cells: Array, orders: Orders) -> Array:
    """Return the tables (b, n, k) that the orders make of the cells (n, k)."""
    n, k = cells.shape
    return np.asarray(cells.ravel()[orders + k * np.arange(n)[:, None]])


def at_least(statistics: Array, *, tolerance: float = TOLERANCE) -> Orders:
    """Count the tables in which each statistic is at least as large, (tables, statistics).

    Neighbours in sorted order that differ by no more than the tolerance are equal.
    """
    tables = len(statistics)
    order = np.argsort(statistics, axis=0, kind="stable")
    ascending = np.take_along_axis(statistics, order, axis=0)
    begins = np.ones(statistics.shape, dtype=bool)
    begins[1:] = np.diff(ascending, axis=0) > tolerance
    first = np.where(begins, np.arange(tables)[:, None], 0)
    counts = np.empty(statistics.shape, dtype=np.int64)
    np.put_along_axis(counts, order, tables - np.maximum.accumulate(first, axis=0), axis=0)
    return counts


@dataclass(frozen=True, eq=False)
class Joint:
    """What the tables say together.

    Parameters
    ----------
    p_values : ndarray, shape (statistics,)
        P value of each statistic in the observed table.
    median : float
        Their median.
    hits : int
        Rearranged tables with a median at most that of the observed one.
    draws : int
        Rearranged tables.
    """

    p_values: Array
    median: float
    hits: int
    draws: int

    @property
    def p_value(self) -> float:
        """(hits + 1) / (draws + 1): the share of all tables, the observed one included."""
        return (self.hits + 1) / (self.draws + 1)


def joint_test(statistics: Array, *, tolerance: float = TOLERANCE) -> Joint:
    """Test many statistics together.

    Parameters
    ----------
    statistics : ndarray, shape (tables, statistics)
        Each statistic, large values extreme, in every table; the observed table first.
    tolerance : float
        Below this difference two values of a statistic are equal.

    Returns
    -------
    Joint

    Notes
    -----
    Medians are compared as counts of tables, whole or half numbers, without rounding. That a median
    over specifications is compared with its law under rearranged data follows Simonsohn, Simmons
    and Nelson (2020) Nature Human Behaviour 4:1208-1214, there a median of estimates (from memory).
    """
    counts = at_least(statistics, tolerance=tolerance)
    medians = np.median(counts, axis=1)
    tables = len(statistics)
    return Joint(
        p_values=counts[0] / tables,
        median=float(medians[0]) / tables,
        hits=int(np.count_nonzero(medians[1:] <= medians[0])),
        draws=tables - 1,
    )
