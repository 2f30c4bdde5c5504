"""The record of the advice: level and power of the advised test and of what else is done.

A base cell, each factor varied alone, named pairs of factors, the exchangeable null, equal centres
that are not exchangeable, and the cells in which regret is measured: a declared fraction of all
combinations. The change is linear over the occasions, so many within-subject SDs from the first to
the last. Tests other than "anova, raw" are made on the scale that the plan takes: logarithms for a
marker whose errors multiply, the values themselves otherwise.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from robustrm.advice.rule import MANY_AT_LIMIT
from robustrm.methods.registry import method as registered
from robustrm.simulation import BLOCK, Design, Errors, draw_block, stream
from robustrm.table import OccasionTable
from robustrm.trials import habits
from robustrm.trials.level import ALPHA, SPREAD
from robustrm.trials.p_values import Progress, anova_p, p_values_of

Floats = NDArray[np.float64]

DRAWS = 499
ADVISED = "advised"
RAW, LOG = "anova, raw", "anova, log"
GAPS = "skillings_mack"
# Tests that hold their level where occasions are exchangeable: what regret is measured against.
LEVEL_HOLDING = (
    "friedman", "quade", "aligned_ranks", "normal_scores", "mean_permutation",
    "winsorized_permutation", "row_flip",
)  # fmt: skip
PLAIN = (*LEVEL_HOLDING, "trimmed_anova", "rank_anova", "hotelling")
CHANGE = 1.1
WITHIN, BETWEEN = 0.6, 1.0
LAWS: tuple[Errors, ...] = ("normal", "t3", "contaminated", "skewed", "lognormal", "log-t3")
MOST_CELLS = 150
REGRET_TIMES = 5


@dataclass(frozen=True, slots=True)
class Cell:
    """One cell of the grid.

    Parameters
    ----------
    group : str
        "factor", "pair", "null", "not exchangeable" or "regret".
    design : Design
        How values are drawn, the change included.
    change : float
        Within-subject SDs from the first occasion to the last.
    missing : float
        Share of the cells that are missing, the same ones in every data set.
    """

    group: str
    design: Design
    change: float = 0.0
    missing: float = 0.0

    @property
    def name(self) -> str:
        """What tells the cell from all others of its group."""
        return f"{self.design.key}, missing={self.missing:g}"


@dataclass(frozen=True, slots=True)
class GridRow:
    """How often one test rejects at .05 in one cell."""

    group: str
    errors: str
    n: int
    k: int
    within_sd: float
    between_sd: float
    limit: float
    missing: float
    correlation: str
    spread: str
    change: float
    test: str
    datasets: int
    draws: int
    seed: int
    rejections: int
    rate: float


# ── the cells ─────────────────────────────────────────────────────────────────────────────────


def base(n: int = 14, k: int = 3, errors: Errors = "lognormal", **fields: object) -> Design:
    """Return the base design, or one that differs from it in the fields named.

    SDs are those of the error's own scale: of logarithms where errors multiply. Elsewhere they are
    in units of the within-subject SD, so that the proportion of the two is kept.
    """
    multiplies = errors.startswith("log")
    unit = 1.0 if multiplies else 1 / WITHIN
    design = Design(n=n, k=k, errors=errors, within_sd=WITHIN * unit, between_sd=BETWEEN * unit)
    return replace(design, **fields)  # type: ignore[arg-type]  # fields of Design


def changed(design: Design, change: float = CHANGE) -> Design:
    """Return the design with a linear change of so many within-subject SDs."""
    steps = np.linspace(0, change * design.within_sd, design.k)
    return replace(design, shift=tuple(float(step) for step in steps))


def cells() -> list[Cell]:
    """Return all cells, at most `MOST_CELLS`."""
    found = [*_factor_cells(), *_pair_cells(), *_null_cells(), *_not_exchangeable_cells()]
    return [*found, *regret_cells()]


def _factors() -> list[tuple[Design, float]]:
    """Return the base and every factor varied alone, with the share missing."""
    spread = SPREAD[3]
    designs = [
        base(),
        *(base(n=n) for n in (6, 8, 10, 20, 30)),
        *(base(k=k) for k in (4, 5)),
        *(base(errors=errors) for errors in LAWS if errors != "lognormal"),
        base(between_sd=0.3),
        *(base(within_sd=sd) for sd in (0.3, 1.0)),
        *(base(limit=share) for share in (0.2, 0.4)),
        *(base(rho=rho) for rho in (0.4, 0.7)),
        base(slope_sd=0.5 * WITHIN),
        base(spread=spread),
    ]
    return [*((design, 0.0) for design in designs), (base(), 0.1)]


def _factor_cells() -> list[Cell]:
    powered = [Cell("factor", changed(d), CHANGE, missing) for d, missing in _factors()]
    # what the null grid does not hold already
    silent = [(base(between_sd=0.3), 0.0), (base(limit=0.2), 0.0), (base(limit=0.4), 0.0)]
    silent += [(base(k=5), 0.0), (base(n=30), 0.0), (base(), 0.1)]
    return powered + [Cell("factor", design, missing=missing) for design, missing in silent]


def _pair_cells() -> list[Cell]:
    others: tuple[Errors, ...] = ("normal", "t3", "contaminated", "skewed", "log-t3")
    designs = [base(n=n, errors=errors) for n in (6, 20) for errors in others]
    designs += [base(k=4, errors=errors) for errors in others]
    designs += [base(n=n, k=4) for n in (6, 10, 20)]
    designs += [
        base(k=4, limit=0.4),
        base(n=8, limit=0.4),
        base(errors="log-t3", limit=0.4),
        base(k=5, rho=0.7),
        base(k=5, slope_sd=0.5 * WITHIN),
        base(k=4, spread=SPREAD[4]),
    ]
    return [Cell("pair", changed(design), CHANGE) for design in designs]


def _null_cells() -> list[Cell]:
    return [
        Cell("null", base(n=n, k=k, errors=errors))
        for errors in LAWS
        for n in (6, 10, 20)
        for k in (3, 4)
    ]


def _not_exchangeable_cells() -> list[Cell]:
    spreads = {**SPREAD, 5: (1.0, 1.0, 1.0, 2.0, 4.0)}
    found = []
    for k in (3, 4, 5):
        for n in (8, 14):
            found += [base(n=n, k=k, rho=0.4), base(n=n, k=k, rho=0.7)]
            found += [base(n=n, k=k, slope_sd=0.5 * WITHIN), base(n=n, k=k, spread=spreads[k])]
    return [Cell("not exchangeable", design) for design in found]


def regret_cells() -> list[Cell]:
    """Return the cells in which regret is measured."""
    return [
        Cell("regret", changed(base(n=n, k=k, errors=errors)), CHANGE)
        for errors in LAWS
        for n in (8, 14)
        for k in (3, 4)
    ]


# ── the tests ─────────────────────────────────────────────────────────────────────────────────


def multiplies(design: Design) -> bool:
    """Whether the marker is positive with errors that multiply: a concentration, taken on logs."""
    return design.errors.startswith("log")


def tests_of(cell: Cell) -> tuple[str, ...]:
    """Return the tests that are measured in a cell, in the order of the columns."""
    parametric = (RAW, LOG) if multiplies(cell.design) else (RAW,)
    gaps = (GAPS,) if cell.missing else ()
    return (ADVISED, *PLAIN, *parametric, *gaps, habits.PRETEST, habits.SMALLEST)


def advised_test(cell: Cell) -> str:
    """Return the overall test that the rule takes: only the share at a limit decides it."""
    return "friedman" if cell.design.limit >= MANY_AT_LIMIT else "aligned_ranks"


@functools.lru_cache(maxsize=8)
def _gaps(cell: Cell, seed: int) -> NDArray[np.bool_]:
    """Return which cells are missing, (n, k): the same ones in every data set of the cell."""
    n, k = cell.design.n, cell.design.k
    rng = stream(seed, f"missing: {cell.name}")
    found = np.zeros(n * k, bool)
    found[rng.choice(n * k, round(cell.missing * n * k), replace=False)] = True
    return found.reshape(n, k)


def cell_p(cell: Cell, block: int, size: int, *, draws: int, seed: int) -> Floats:
    """Give the p value of every test of `tests_of` on the data sets of one block, (size, tests)."""
    design = cell.design
    drawn = draw_block(design, block, seed=seed)[:size]
    gaps = _gaps(cell, seed)
    raw = drawn[:, ~gaps.any(axis=1)]
    used = np.log(raw) if multiplies(design) else raw
    plain = p_values_of(
        used,
        PLAIN,
        draws=draws,
        permutations=stream(seed, f"permutations: {cell.name}", block),
        mirrors=stream(seed, f"mirrors: {cell.name}", block),
        resamples=stream(seed, f"resamples: {cell.name}", block),
        tied=design.limit > 0,
    )
    found = dict(zip(PLAIN, plain.T, strict=True))
    found[RAW] = anova_p(raw)
    if multiplies(design):
        found[LOG] = anova_p(used)
    if cell.missing:
        rng = stream(seed, f"gaps: {cell.name}", block)
        found[GAPS] = np.array([_with_gaps(each, gaps, draws, rng) for each in drawn])
    found[habits.PRETEST] = habits.pretest_p(raw, found[RAW], found["friedman"])
    found[habits.SMALLEST] = habits.smallest_p(found)
    found[ADVISED] = found[advised_test(cell)]
    return np.stack([found[test] for test in tests_of(cell)], axis=1)


def _with_gaps(
    values: Floats, gaps: NDArray[np.bool_], draws: int, rng: np.random.Generator
) -> float:
    occasions = [str(j) for j in range(values.shape[1])]
    table = OccasionTable.from_array(np.where(gaps, np.nan, values), occasions=occasions)
    test = registered(GAPS).load()
    return test(table, null="monte carlo", draws=draws, rng=rng).p_value


# ── the run ───────────────────────────────────────────────────────────────────────────────────


def datasets_of(cell: Cell, datasets: int) -> int:
    """Return how many data sets a cell has: five times as many where regret is measured."""
    return datasets * (REGRET_TIMES if cell.group == "regret" else 1)


def rejected(
    cell: Cell, datasets: int, *, draws: int, seed: int, progress: Progress | None = None
) -> NDArray[np.bool_]:
    """Say which tests reject at .05 in which data sets, (datasets, tests)."""
    found = []
    for block in range(math.ceil(datasets / BLOCK)):
        size = min(BLOCK, datasets - block * BLOCK)
        found.append(cell_p(cell, block, size, draws=draws, seed=seed) <= ALPHA)
        if progress is not None:
            progress(block * BLOCK + size, datasets)
    return np.concatenate(found)


def cell_rows(
    cell: Cell, datasets: int, *, draws: int, seed: int, progress: Progress | None = None
) -> list[GridRow]:
    """Simulate one cell: one row a test, and in a regret cell one row for the regret."""
    hits = rejected(cell, datasets, draws=draws, seed=seed, progress=progress)
    design = cell.design

    def row(test: str, rejections: int, rate: float) -> GridRow:
        return GridRow(
            group=cell.group,
            errors=design.errors,
            n=design.n,
            k=design.k,
            within_sd=round(design.within_sd, 6),
            between_sd=round(design.between_sd, 6),
            limit=design.limit,
            missing=cell.missing,
            correlation=design.correlation,
            spread=":".join(f"{value:g}" for value in design.spread),
            change=cell.change,
            test=test,
            datasets=datasets,
            draws=draws,
            seed=seed,
            rejections=rejections,
            rate=rate,
        )

    rows = [
        row(test, int(column.sum()), float(column.mean()))
        for test, column in zip(tests_of(cell), hits.T, strict=True)
    ]
    if cell.group == "regret":
        rows.append(row("regret", 0, regret(hits, tests_of(cell))))
    return rows


def regret(hits: NDArray[np.bool_], tests: Sequence[str]) -> float:
    """Return the power that the advised test lacks against the best test that holds its level.

    The best is chosen on one half of the data sets and measured on the other, both ways round, so
    that luck in choosing does not count.
    """
    advised = tests.index(ADVISED)
    others = [tests.index(test) for test in LEVEL_HOLDING]
    halves = np.array_split(hits, 2)
    lacks = []
    for choosing, measuring in (halves, halves[::-1]):
        best = others[int(choosing[:, others].mean(axis=0).argmax())]
        lacks.append(float(measuring[:, best].mean() - measuring[:, advised].mean()))
    return float(np.mean(lacks))


def grid_table(
    datasets: int, *, draws: int = DRAWS, seed: int, progress: Progress | None = None
) -> list[GridRow]:
    """Simulate the whole grid.

    Parameters
    ----------
    datasets : int
        Data sets a cell; five times as many where regret is measured.
    draws : int, default 499
        Rearrangements of each data set.
    seed : int
        Root of all streams.
    progress : callable, optional
        Called with (data sets done, data sets).

    Returns
    -------
    list of GridRow
    """
    every = cells()
    sizes = [datasets_of(cell, datasets) for cell in every]
    rows: list[GridRow] = []
    for place, (cell, size) in enumerate(zip(every, sizes, strict=True)):
        before = sum(sizes[:place])

        def told(done: int, _: int, before: int = before) -> None:
            if progress is not None:
                progress(before + done, sum(sizes))

        rows += cell_rows(cell, size, draws=draws, seed=seed, progress=told)
    return rows
