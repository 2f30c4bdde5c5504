"""The null distribution of a test on a table, to look at."""

from __future__ import annotations

import inspect
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from robustrm._checks import check_choice
from robustrm.errors import ArgumentError
from robustrm.kernels.null.engine import draws, law
from robustrm.methods.additive import AdditiveProblem, Rng
from robustrm.methods.registry import METHODS
from robustrm.methods.registry import method as registered
from robustrm.ties import Floats

if TYPE_CHECKING:
    import pandas as pd

    from robustrm.table import OccasionTable

DRAWS = 9_999


@dataclass(frozen=True, eq=False)
class NullDistribution:
    """Every value that a statistic can take under its null hypothesis, or draws of it.

    Parameters
    ----------
    method : str
        Name of the test.
    statistic_name : str
        Symbol of the statistic.
    values : array (v,)
        Values of the statistic, ascending.
    weights : array (v,)
        Probabilities (exact), or shares of the draws.
    observed : float
        The statistic of the table as it is.
    null : {"exact", "monte carlo"}
        ``"exact"``: the full law; ``"monte carlo"``: 9,999 random arrangements.
    """

    method: str
    statistic_name: str
    values: Floats
    weights: Floats
    observed: float
    null: Literal["exact", "monte carlo"]

    def __post_init__(self) -> None:
        for array in (self.values, self.weights):
            array.flags.writeable = False

    def to_frame(self) -> pd.DataFrame:
        """Return one row a value with its probability."""
        import pandas as pd

        return pd.DataFrame({"value": self.values, "weight": self.weights})

    def __repr__(self) -> str:
        return (
            f"<NullDistribution {self.method}: {self.values.size} values of "
            f"{self.statistic_name}, {self.null}>"
        )


def null_distribution(
    table: OccasionTable, method: str, *, rng: Rng = None, **options: Any
) -> NullDistribution:
    """Return the null distribution of an additive test on this table.

    Parameters
    ----------
    table : OccasionTable
        The data, on the scale of the test.
    method : str
        Name of a test on the engine; ``robustrm methods`` lists them.
    rng : Generator, SeedSequence, int or None
        Randomness of the draws, where the full law is out of reach.
    **options
        What the test needs: `first` and `second` for two occasions, `order` for a trend, and
        options such as `zeros`.

    Returns
    -------
    NullDistribution
        The full law where the scores are whole numbers and the work budget allows it, else
        9,999 random arrangements, labelled so.

    Raises
    ------
    ArgumentError
        When the method has no null distribution of arrangements, or options are missing.

    Notes
    -----
    The law is that of rearranging this table's own values, ties included, so it differs from
    a tabulated one when there are ties.

    Examples
    --------
    >>> from robustrm.table import OccasionTable
    >>> table = OccasionTable.from_array(
    ...     [[9, 7, 6], [4, 3, 2], [12, 8, 5]], occasions=["week 0", "week 6", "week 12"]
    ... )
    >>> null = null_distribution(table, "friedman")
    >>> null.observed, [round(value, 3) for value in null.values.tolist()]
    (6.0, [0.0, 0.667, 2.0, 2.667, 4.667, 6.0])
    """
    problem = problem_of(table, method, **options)
    full = law(problem.tables, problem.form)
    if full is not None:
        values, weights = problem.statistic(full.values), full.probabilities
    else:
        drawn = draws(problem.tables, problem.form, DRAWS, rng=np.random.default_rng(rng))
        values, counts = np.unique(problem.statistic(drawn), return_counts=True)
        weights = counts / DRAWS
    return NullDistribution(
        method=method,
        statistic_name=problem.symbol,
        values=values,
        weights=weights,
        observed=problem.observed_statistic,
        null="exact" if full is not None else "monte carlo",
    )


def problem_of(table: OccasionTable, method: str, **options: Any) -> AdditiveProblem:
    """Return the additive test called `method` on a table, ready for the engine."""
    names = tuple(entry.name for entry in METHODS if entry.is_additive)
    make = registered(check_choice("method", method, names)).module().problem
    parameters = list(inspect.signature(make).parameters.values())[1:]
    for name in options:
        check_choice(f"options of {method}", name, [p.name for p in parameters])
    needed = [p.name for p in parameters if p.default is p.empty and p.name not in options]
    if needed:
        raise ArgumentError(
            f"`options` of {method} must give {' and '.join(needed)}, got {sorted(options)}."
        )
    found: AdditiveProblem = make(table, **options)
    return found
