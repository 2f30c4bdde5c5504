"""The level tables: how often tests reject at .05 where there is nothing to find.

A   exchangeable occasions: what every permutation test is exact for
B   equal centres, not exchangeable: serial correlation, subject-specific trends, unequal spread
C   all pairs of occasions: no occasion, or the last one, differs; familywise error and power

A rate may exceed .05 by chance. Its limit is .05 + z √(.05 · .95 / data sets), with z the normal
quantile for the table's number m of rates that are asked to hold, two-sided: Φ⁻¹(1 − .05/(2m)).
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy import special

from robustrm.simulation import Design, Errors
from robustrm.trials.families import CLOSED, FAMILIES, HOLM, adjusted_p_values, all_pairs
from robustrm.trials.p_values import DRAWS, PERMUTED, TESTS, Progress, needs_draws, p_values

ALPHA = 0.05
SUBJECTS = (6, 10, 20)
OCCASIONS = (3, 4)
# SDs of the logarithms: within subjects a coefficient of variation of about one half.
LOG_SDS = (0.8, 0.5)
SPREAD = {3: (1.0, 2.0, 4.0), 4: (1.0, 1.0, 2.0, 4.0)}
SHIFTS = (0.0, 1.0, 3.0)


@dataclass(frozen=True, slots=True)
class Run:
    """How much is simulated: data sets a cell, rearrangements of each, root of all streams."""

    datasets: int
    seed: int
    draws: int = DRAWS


@dataclass(frozen=True, slots=True)
class Row:
    """One rate of one cell of a level table, or of the table of location.

    Parameters
    ----------
    table : str
        "A", "B", "C" or "location".
    measure : {"level", "familywise", "power"}
        Share of data sets in which a true null is rejected, in which any of the family's is, or
        mean share of the differing pairs that are found.
    errors, below_limit, n, k, correlation, spread, shift
        The design; `spread` (of the errors, or of the whole values) and `shift` as text, occasion
        by occasion, empty for equal.
    test : str
        Test, or adjustment and test.
    inside : bool
        Whether the design lies inside the null hypothesis of the test.
    asked : bool
        Whether the rate is asked to stay within the limit.
    datasets, draws, seed : int
        Data sets, rearrangements of each (0: none needed), root of the streams.
    rejections : int
        How often; for power, over all differing pairs.
    rate : float
    limit : float or None
        What the rate may reach by chance; none for power.
    holds : bool or None
        Whether it stays within.
    """

    table: str
    measure: str
    errors: str
    below_limit: float
    n: int
    k: int
    correlation: str
    spread: str
    shift: str
    test: str
    inside: bool
    asked: bool
    datasets: int
    draws: int
    seed: int
    rejections: int
    rate: float
    limit: float | None = None
    holds: bool | None = None


def cells_a() -> list[Design]:
    """Return the designs of table A; the last group has 30% of its cells below a limit."""
    laws: list[tuple[Errors, float]] = [
        ("normal", 0.0), ("t3", 0.0), ("contaminated", 0.0), ("lognormal", 0.0), ("lognormal", 0.3),
    ]  # fmt: skip
    return [
        replace(_design(n, k, errors), limit=limit)
        for (errors, limit), n, k in itertools.product(laws, SUBJECTS, OCCASIONS)
    ]


def cells_b() -> list[Design]:
    """Return the designs of table B: symmetric errors, so that equal means are equal centres."""
    laws: tuple[Errors, ...] = ("normal", "t3")
    found = []
    for errors, n, k in itertools.product(laws, SUBJECTS, OCCASIONS):
        found += [
            Design(n=n, k=k, errors=errors, rho=0.7),
            Design(n=n, k=k, errors=errors, slope_sd=0.5),
            Design(n=n, k=k, errors=errors, spread=SPREAD[k]),
        ]
    return found


def cells_c() -> list[Design]:
    """Return the designs of table C: the last occasion is shifted by 0, 1 or 3 error SD."""
    laws: tuple[Errors, ...] = ("normal", "t3", "lognormal")
    found = []
    for n, k, size in itertools.product(SUBJECTS, OCCASIONS, SHIFTS):
        cells = [_design(n, k, errors) for errors in laws]
        cells.append(Design(n=n, k=k, rho=0.7, slope_sd=0.5))
        for cell in cells:
            last = (*(0.0,) * (k - 1), size * cell.within_sd)
            found.append(replace(cell, shift=last) if size else cell)
    return found


def _design(n: int, k: int, errors: Errors) -> Design:
    """Make an exchangeable design with the usual SDs of its scale."""
    between, within = LOG_SDS if errors.startswith("log") else (1.0, 1.0)
    return Design(n=n, k=k, errors=errors, between_sd=between, within_sd=within)


def is_inside(test: str, design: Design) -> bool:
    """Whether a design with equal centres lies inside the null hypothesis of a test.

    Permutation tests ask for exchangeable occasions; mirroring rows for contrasts symmetric about
    zero; pair tests for a difference symmetric about zero, which either of these gives; the
    parametric tests for normal errors.
    """
    if not design.equal_centres:
        return False
    if test in PERMUTED:
        return design.exchangeable
    if test == "row_flip":
        return design.symmetric
    if test in ("anova", "paired_t"):
        return design.errors == "normal" and not design.limit
    return design.exchangeable or design.symmetric


def is_asked(test: str, design: Design) -> bool:
    """Whether a test is asked to hold: inside its null, the parametric ones if symmetric."""
    parametric = test in ("anova", "paired_t") and design.symmetric and design.equal_centres
    return is_inside(test, design) or parametric


def level_rows(table: str, design: Design, run: Run) -> list[Row]:
    """Simulate one cell of table A or B: one row a test, no limits yet."""
    found = p_values(design, TESTS, run.datasets, draws=run.draws, seed=run.seed)
    return [
        rate_row(
            table,
            "level",
            design,
            test,
            run if needs_draws(test, design) else replace(run, draws=0),
            rejections=int(np.count_nonzero(column <= ALPHA)),
            inside=is_inside(test, design),
            asked=is_asked(test, design),
        )
        for test, column in zip(TESTS, found.T, strict=True)
    ]


def family_rows(design: Design, run: Run) -> list[Row]:
    """Simulate one cell of table C: familywise error and, if an occasion differs, power."""
    found = adjusted_p_values(design, run.datasets, draws=run.draws, seed=run.seed)
    shift = design.shift or (0.0,) * design.k
    alike = np.array([shift[a] == shift[b] for a, b in all_pairs(design.k)])
    rows = []
    for family, rejected in zip(FAMILIES, np.moveaxis(found <= ALPHA, 1, 0), strict=True):
        inside = _family_inside(family, design)
        of_family = replace(run, draws=run.draws if family in CLOSED else 0)
        errors = int(rejected[:, alike].any(axis=1).sum())
        rows.append(
            rate_row("C", "familywise", design, family, of_family,
                     rejections=errors, inside=inside, asked=inside)
        )  # fmt: skip
        if not alike.all():
            hits, pairs = int(rejected[:, ~alike].sum()), int((~alike).sum())
            rows.append(
                rate_row("C", "power", design, family, of_family,
                         rejections=hits, pairs=pairs, inside=inside, asked=False)
            )  # fmt: skip
    return rows


def _family_inside(family: str, design: Design) -> bool:
    # the pairs whose centres are equal are what is asked about: the others may differ at will
    alike = replace(design, shift=())
    return is_inside("signed_rank", alike) if family == HOLM else alike.exchangeable


def rate_row(
    table: str,
    measure: str,
    design: Design,
    test: str,
    run: Run,
    *,
    rejections: int,
    inside: bool,
    asked: bool,
    pairs: int = 1,
) -> Row:
    """Make a row without a limit from the number of rejections."""
    return Row(
        table=table,
        measure=measure,
        errors=design.errors,
        below_limit=design.limit,
        n=design.n,
        k=design.k,
        correlation=design.correlation,
        spread=":".join(f"{value:g}" for value in design.spread or design.stretch),
        shift=":".join(f"{value:g}" for value in design.shift),
        test=test,
        inside=inside,
        asked=asked,
        datasets=run.datasets,
        draws=run.draws,
        seed=run.seed,
        rejections=rejections,
        rate=rejections / (run.datasets * pairs),
    )


def z_of(asked: int) -> float:
    """Return the normal quantile of a limit that is asked of so many rates."""
    return float(special.ndtri(1 - ALPHA / (2 * max(asked, 1))))


def standard_error(datasets: int) -> float:
    """Return the standard error of a rate of .05."""
    return math.sqrt(ALPHA * (1 - ALPHA) / datasets)


def with_limits(rows: Sequence[Row]) -> list[Row]:
    """Give the rows of one table their limit, and say whether they hold."""
    z = z_of(sum(row.asked for row in rows))
    found = []
    for row in rows:
        if row.measure == "power":
            found.append(row)
            continue
        limit = round(ALPHA + z * standard_error(row.datasets), 5)
        found.append(replace(row, limit=limit, holds=row.rate <= limit))
    return found


def mean_level(rows: Sequence[Row]) -> tuple[float, float]:
    """Return the mean of independent rates and what it may reach: .05 + 3 standard errors."""
    mean = sum(row.rate for row in rows) / len(rows)
    return mean, ALPHA + 3 * standard_error(sum(row.datasets for row in rows))


def level_tables(run: Run, *, progress: Progress | None = None) -> list[Row]:
    """Simulate all three tables.

    Parameters
    ----------
    run : Run
        How much is simulated.
    progress : callable, optional
        Called with (cells done, cells).

    Returns
    -------
    list of Row
    """
    jobs = [("A", cell) for cell in cells_a()] + [("B", cell) for cell in cells_b()]
    jobs += [("C", cell) for cell in cells_c()]
    tables: dict[str, list[Row]] = {"A": [], "B": [], "C": []}
    for done, (table, design) in enumerate(jobs, start=1):
        simulated = family_rows(design, run) if table == "C" else level_rows(table, design, run)
        tables[table] += simulated
        if progress is not None:
            progress(done, len(jobs))
    return [row for rows in tables.values() for row in with_limits(rows)]
