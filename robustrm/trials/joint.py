"""Level of the joint test of a specification grid: how often its p value is at most .05.

Six cells with exchangeable occasions, in each a grid of twelve declared branches: two scales and
pulled-in outliers at two sizes and two laws, substitutes for values below a limit, rules for
missing visits, and six kinds of statistics on one scale. The joint p value is that of the
sensitivity analysis, from a table of cells as a study has it. Beside it stand what it is not: the
median of the p values taken for a p value, and the smallest of them.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from robustrm.kernels.null.joint import joint_test
from robustrm.plan import GridChoices
from robustrm.sensitivity_analysis.branches import branches
from robustrm.sensitivity_analysis.grid_tables import sources
from robustrm.sensitivity_analysis.specifications import specified, statistics
from robustrm.simulation import BLOCK, Design, draw_block, stream
from robustrm.table import OccasionTable
from robustrm.trials.level import ALPHA, Run, standard_error
from robustrm.trials.p_values import Progress

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

DRAWS = 199
JOINT, MEDIAN, SMALLEST = "joint", "median", "smallest"
READINGS = (JOINT, MEDIAN, SMALLEST)

_USUAL = {"trim": (0.1,), "substitute": ("half",), "missing": ("complete",), "draws": DRAWS}
_MIXED = GridChoices(test=("aligned_ranks", "mean_permutation", "winsorized_permutation"), **_USUAL)  # type: ignore[arg-type]  # keys of a grid
_LIMITED = GridChoices(
    test=("aligned_ranks", "mean_permutation"),
    missing=("complete",),
    outliers=("kept",),
    draws=DRAWS,
)
_GAPPED = GridChoices(
    scale=("log",), test=_MIXED.test, trim=(0.1,), substitute=("half",), draws=DRAWS
)
_KINDS = GridChoices(
    scale=("log",),
    test=("friedman", "quade", "aligned_ranks", "trimmed_anova", "rank_anova", "hotelling"),
    trim=(0.2,),
    substitute=("half",),
    missing=("complete",),
    draws=DRAWS,
)


@dataclass(frozen=True, slots=True)
class Cell:
    """One cell: how tables are drawn, which share of the cells is missing, and the grid."""

    about: str
    design: Design
    choices: GridChoices
    missing: float = 0.0

    @property
    def name(self) -> str:
        """What tells the cell from all others."""
        return f"{self.about}, {self.design.key}"


@dataclass(frozen=True, slots=True)
class JointRow:
    """How often one reading of the grid is at most .05 in one cell.

    `different` is the mean number of specifications that differ, of `declared` branches.
    """

    about: str
    errors: str
    n: int
    k: int
    below_limit: float
    missing: float
    declared: int
    different: float
    reading: str
    asked: bool
    datasets: int
    draws: int
    seed: int
    rejections: int
    rate: float
    limit: float | None
    holds: bool | None


def cells() -> list[Cell]:
    """Return the cells."""

    def design(n: int, k: int, errors: str = "lognormal", limit: float = 0.0) -> Design:
        return Design(n=n, k=k, errors=errors, between_sd=0.8, within_sd=0.5, limit=limit)  # type: ignore[arg-type]  # one of ERRORS

    return [
        Cell("scales, tests and outliers", design(14, 3), _MIXED),
        Cell("scales, tests and outliers", design(8, 4), _MIXED),
        Cell("scales, tests and outliers", design(14, 3, "log-t3"), _MIXED),
        Cell("scales, tests and substitutes", design(14, 3, limit=0.3), _LIMITED),
        Cell("tests, missing rules and outliers", design(14, 3), _GAPPED, missing=0.1),
        Cell("kinds of statistics and outliers", design(14, 3), _KINDS),
    ]


def gaps_of(cell: Cell, seed: int) -> Bools:
    """Return which cells are missing, (n, k): the same ones in every data set."""
    n, k = cell.design.n, cell.design.k
    found = np.zeros(n * k, dtype=bool)
    rng = stream(seed, f"missing: {cell.name}")
    found[rng.choice(n * k, round(cell.missing * n * k), replace=False)] = True
    return found.reshape(n, k)


def table_of(values: Floats, cell: Cell, gaps: Bools) -> OccasionTable:
    """Return drawn values (n, k) as a table; what was set to the limit lies below it."""
    occasions = [f"visit {j}" for j in range(values.shape[1])]
    held = np.where(gaps, np.nan, values)
    if not cell.design.limit:
        return OccasionTable.from_array(held, occasions=occasions)
    limit = float(values.min())
    return OccasionTable.from_array(
        held, occasions=occasions, below=held == limit, lower_limit=limit
    )


def readings(table: OccasionTable, choices: GridChoices, rng: np.random.Generator) -> Floats:
    """Return the joint p value, the median and the smallest one, and how many differ, (4,)."""
    source = sources({None: table})
    found, _ = specified(source, tuple(branches(choices)))
    joint = joint_test(statistics(source, [each.what for each in found], choices.draws, rng))
    return np.array([joint.p_value, joint.median, joint.p_values.min(), len(found)])


def cell_rows(cell: Cell, run: Run, *, progress: Progress | None = None) -> list[JointRow]:
    """Simulate one cell: one row a reading."""
    gaps = gaps_of(cell, run.seed)
    choices = GridChoices(**{**cell.choices.to_dict(), "draws": run.draws})
    found: list[Floats] = []
    for block in range(math.ceil(run.datasets / BLOCK)):
        size = min(BLOCK, run.datasets - block * BLOCK)
        rng = stream(run.seed, f"joint: {cell.name}", block)
        drawn = draw_block(cell.design, block, seed=run.seed)[:size]
        found += [readings(table_of(values, cell, gaps), choices, rng) for values in drawn]
        if progress is not None:
            progress(len(found), run.datasets)
    return [_row(cell, run, name, np.array(found)) for name in READINGS]


def _row(cell: Cell, run: Run, reading: str, found: Floats) -> JointRow:
    # a share of whole counts, so that .05 itself is compared without rounding
    hits = int(np.count_nonzero(found[:, READINGS.index(reading)] <= ALPHA + 1e-12))
    asked = reading == JOINT
    limit = round(ALPHA + 3 * standard_error(run.datasets), 5) if asked else None
    rate = hits / run.datasets
    return JointRow(
        about=cell.about,
        errors=cell.design.errors,
        n=cell.design.n,
        k=cell.design.k,
        below_limit=cell.design.limit,
        missing=cell.missing,
        declared=len(list(branches(cell.choices))),
        different=round(float(found[:, -1].mean()), 3),
        reading=reading,
        asked=asked,
        datasets=run.datasets,
        draws=run.draws,
        seed=run.seed,
        rejections=hits,
        rate=rate,
        limit=limit,
        holds=None if limit is None else rate <= limit,
    )


def joint_table(run: Run, *, progress: Progress | None = None) -> list[JointRow]:
    """Simulate all cells.

    Parameters
    ----------
    run : Run
        How much is simulated.
    progress : callable, optional
        Called with (data sets done, data sets).

    Returns
    -------
    list of JointRow
    """
    every = cells()
    rows: list[JointRow] = []
    for place, cell in enumerate(every):

        def told(done: int, _: int, before: int = place * run.datasets) -> None:
            if progress is not None:
                progress(before + done, len(every) * run.datasets)

        rows += cell_rows(cell, run, progress=told)
    return rows


def worst(rows: Sequence[JointRow], reading: str) -> JointRow:
    """Return the row of a reading with the highest rate."""
    return max((row for row in rows if row.reading == reading), key=lambda row: row.rate)
