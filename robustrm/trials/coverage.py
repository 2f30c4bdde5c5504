"""How often each kind of interval covers its estimand, and how wide it is.

Four laws, four sizes. The first two of four occasions are alike, the third and the last are shifted
by 1/2 and 1 SD of the errors. Differences are symmetric about the shift under the first three laws
and skewed under the lognormal one, whose values are not taken to logs.

A coverage may fall below the stated level c by chance. Where what the interval asks for is given,
its limit is c − z √(c (1 − c) / data sets), z the normal quantile for the number m of such rows,
Φ⁻¹(1 − .05/(2m)). Intervals that promise their level are asked to stay above it.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from robustrm.simulation import BLOCK, Design, Errors
from robustrm.trials.batches import Batch
from robustrm.trials.intervals import KINDS, LAWS, Kind
from robustrm.trials.level import LOG_SDS, Run, z_of
from robustrm.trials.p_values import Progress
from robustrm.trials.tabulating import monte_carlo_interval
from robustrm.trials.truths import truths

Floats = NDArray[np.float64]

SUBJECTS = (8, 12, 20, 40)
# In SDs of the errors; of their logarithms under the lognormal law.
SHIFT = (0.0, 0.0, 0.5, 1.0)


@dataclass(frozen=True, slots=True)
class Coverage:
    """Coverage of one kind of interval in one cell.

    Parameters
    ----------
    errors, n, k, shift
        The design; `shift` as text, occasion by occasion.
    interval, estimand : str
        The kind, and what it is to cover.
    truth : str
        Value of the estimand; of all of them where several are covered together.
    asks, promise : str
        What the interval asks of the data, and what it promises then.
    is_given : bool
        Whether the law gives what the interval asks for.
    stated : float
        Level that the interval states.
    datasets, draws, seed : int
        Data sets, resamples of each (0: none needed), root of the streams.
    covered : int
        How many intervals hold the truth; all of them together where there are several.
    below, above, none : int
        How many lie wholly below or above the truth (both may happen where there are several),
        and how many data sets gave no interval.
    coverage, low, high : float
        Share covered, and its 95% Clopper-Pearson interval.
    median_width : float
        Of the interval, of the last one where there are several.
    limit : float or None
        What the coverage may fall to by chance, where `is_given`.
    asked : bool
        Whether the coverage is asked to stay above its limit.
    reached : bool or None
        Whether it does.
    """

    errors: str
    n: int
    k: int
    shift: str
    interval: str
    estimand: str
    truth: str
    asks: str
    promise: str
    is_given: bool
    stated: float
    datasets: int
    draws: int
    seed: int
    covered: int
    below: int
    above: int
    none: int
    coverage: float
    low: float
    high: float
    median_width: float
    limit: float | None = None
    asked: bool = False
    reached: bool | None = None


def cells() -> list[Design]:
    """Return the designs, law by law."""
    return [_cell(errors, n) for errors, n in itertools.product(LAWS, SUBJECTS)]


def _cell(errors: Errors, n: int) -> Design:
    between, within = LOG_SDS if errors == "lognormal" else (1.0, 1.0)
    return Design(
        n=n,
        k=len(SHIFT),
        errors=errors,
        between_sd=between,
        within_sd=within,
        shift=tuple(within * shift for shift in SHIFT),
    )


def kinds_for(n: int) -> list[Kind]:
    """Return the kinds of interval that so many subjects have."""
    return [kind for kind in KINDS if n >= kind.least]


def limits_of(
    design: Design, run: Run, *, progress: Progress | None = None
) -> dict[tuple[str, str], tuple[Floats, Floats]]:
    """Return the limits (data sets, m) of every kind, by interval and estimand.

    Parameters
    ----------
    design : Design
    run : Run
    progress : callable, optional
        Called with (data sets done, data sets).
    """
    kinds = kinds_for(design.n)
    found: dict[tuple[str, str], list[tuple[Floats, Floats]]] = {
        (kind.name, kind.estimand): [] for kind in kinds
    }
    for block in range(math.ceil(run.datasets / BLOCK)):
        size = min(BLOCK, run.datasets - block * BLOCK)
        batch = Batch.of_block(design, block, size, draws=run.draws, seed=run.seed)
        for kind in kinds:
            found[kind.name, kind.estimand].append(kind.limits(batch))
        if progress is not None:
            progress(block * BLOCK + size, run.datasets)
    return {
        key: (
            np.concatenate([low for low, _ in parts]),
            np.concatenate([high for _, high in parts]),
        )
        for key, parts in found.items()
    }


def coverage_rows(design: Design, run: Run, *, progress: Progress | None = None) -> list[Coverage]:
    """Simulate one cell: one row a kind of interval, no limits yet."""
    limits = limits_of(design, run, progress=progress)
    return [
        _row(kind, design, run, *limits[kind.name, kind.estimand]) for kind in kinds_for(design.n)
    ]


def _row(kind: Kind, design: Design, run: Run, low: Floats, high: Floats) -> Coverage:
    truth = np.array(truths(design)[kind.estimand])
    # what is not there covers nothing: comparisons with NaN are false
    covered = int(np.count_nonzero(((low <= truth) & (truth <= high)).all(axis=1)))
    interval = monte_carlo_interval(covered, run.datasets)
    return Coverage(
        errors=design.errors,
        n=design.n,
        k=design.k,
        shift=":".join(f"{value:g}" for value in design.shift),
        interval=kind.name,
        estimand=kind.estimand,
        truth=", ".join(f"{value:.4g}" for value in truth),
        asks=kind.asks,
        promise=kind.promise,
        is_given=design.errors in kind.laws,
        stated=round(kind.stated(design.n), 6),
        datasets=run.datasets,
        draws=run.draws if kind.is_resampled else 0,
        seed=run.seed,
        covered=covered,
        below=int(np.count_nonzero((high < truth).any(axis=1))),
        above=int(np.count_nonzero((low > truth).any(axis=1))),
        none=int(np.count_nonzero(np.isnan(low + high).any(axis=1))),
        coverage=covered / run.datasets,
        low=round(interval[0], 6),
        high=round(interval[1], 6),
        median_width=float(f"{np.nanmedian(high[:, -1] - low[:, -1]):.6g}"),
    )


def with_limits(rows: Sequence[Coverage]) -> list[Coverage]:
    """Give the rows whose interval has what it asks for their limit, and say whether they hold."""
    z = z_of(sum(row.is_given for row in rows))
    return [_limited(row, z) if row.is_given else row for row in rows]


def _limited(row: Coverage, z: float) -> Coverage:
    error = math.sqrt(row.stated * (1 - row.stated) / row.datasets)
    limit = round(row.stated - z * error, 5)
    asked = row.promise != "approximate"
    return replace(row, limit=limit, asked=asked, reached=row.coverage >= limit)


def coverage_table(run: Run, *, progress: Progress | None = None) -> list[Coverage]:
    """Simulate the whole table.

    Parameters
    ----------
    run : Run
        How much is simulated.
    progress : callable, optional
        Called with (data sets done, data sets).

    Returns
    -------
    list of Coverage
    """
    designs = cells()
    rows: list[Coverage] = []
    for place, design in enumerate(designs):

        def told(done: int, _: int, before: int = place * run.datasets) -> None:
            if progress is not None:
                progress(before + done, len(designs) * run.datasets)

        rows += coverage_rows(design, run, progress=told)
    return with_limits(rows)
