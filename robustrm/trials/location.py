"""Equal trimmed means, unequal spread: how often the overall tests reject at .05.

y = spread · (x − c) with x = (a + e)/√2, or exp of it, a the subject's level and e the error, both
standard normal, c the 20% trimmed mean of the law of x or of exp(x), and spread 1, 1, 2, 4. Trimmed
means are equal throughout. Means are equal where x is normal and differ where it is lognormal.

Limits are set for the rates that a test of location should hold; other rates are shown only.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from robustrm.simulation import Design, Errors
from robustrm.trials.level import ALPHA, Row, Run, rate_row
from robustrm.trials.p_values import BOOTSTRAP, PERMUTED, Progress, needs_draws, p_values

TABLE = "location"
LAWS: tuple[Errors, ...] = ("normal", "lognormal")
SUBJECTS = (10, 20)
STRETCH = (1.0, 1.0, 2.0, 4.0)
# The cell on which the trimmed means are judged has this many times the data sets.
JUDGED, TIMES = ("lognormal", 10), 5


@dataclass(frozen=True, slots=True)
class Null:
    """The null hypothesis of a test in words, and under which laws the design lies inside it."""

    words: str
    laws: tuple[str, ...] = ()


_EXCHANGEABLE = Null("exchangeable occasions")
NULLS: dict[str, Null] = {
    "trimmed_anova": Null("equal trimmed means (approximate)", LAWS),
    BOOTSTRAP: Null("equal trimmed means (approximate)", LAWS),
    "hotelling": Null("equal means, normal contrasts", ("normal",)),
    "anova": Null("equal means, normal contrasts (approximate)", ("normal",)),
    "row_flip": Null("contrasts symmetric about zero", ("normal",)),
    "rank_anova": Null("equal marginal distributions (approximate)"),
    **dict.fromkeys(PERMUTED, _EXCHANGEABLE),
}
# What a rate may reach, by law, subjects and test.
LIMITS: dict[tuple[str, int, str], float] = {
    (*JUDGED, "trimmed_anova"): 0.085,
    (*JUDGED, BOOTSTRAP): 0.075,
    ("normal", 10, "hotelling"): 0.065,
    ("normal", 20, "hotelling"): 0.065,
}


def cells() -> list[Design]:
    """Return the designs of the table."""
    sd = math.sqrt(0.5)
    return [
        Design(n=n, k=len(STRETCH), errors=law, between_sd=sd, within_sd=sd, stretch=STRETCH)
        for law in LAWS
        for n in SUBJECTS
    ]


def datasets_of(design: Design, run: Run) -> int:
    """Return how many data sets a cell has."""
    return run.datasets * (TIMES if (design.errors, design.n) == JUDGED else 1)


def location_rows(design: Design, run: Run, *, progress: Progress | None = None) -> list[Row]:
    """Simulate one cell: one row a test."""
    here = replace(run, datasets=datasets_of(design, run))
    found = p_values(
        design, list(NULLS), here.datasets, draws=run.draws, seed=run.seed, progress=progress
    )
    rows = []
    for (test, null), column in zip(NULLS.items(), found.T, strict=True):
        limit = LIMITS.get((design.errors, design.n, test))
        row = rate_row(
            TABLE,
            "level",
            design,
            test,
            here if needs_draws(test, design) else replace(here, draws=0),
            rejections=int(np.count_nonzero(column <= ALPHA)),
            inside=design.errors in null.laws,
            asked=limit is not None,
        )
        holds = None if limit is None else row.rate <= limit
        rows.append(replace(row, limit=limit, holds=holds))
    return rows


def location_table(run: Run, *, progress: Progress | None = None) -> list[Row]:
    """Simulate the whole table.

    Parameters
    ----------
    run : Run
        How much is simulated; the cell that is judged has five times the data sets.
    progress : callable, optional
        Called with (data sets done, data sets).

    Returns
    -------
    list of Row
    """
    designs = cells()
    sizes = [datasets_of(design, run) for design in designs]
    rows: list[Row] = []
    for place, design in enumerate(designs):
        before = sum(sizes[:place])

        def told(done: int, _: int, before: int = before) -> None:
            if progress is not None:
                progress(before + done, sum(sizes))

        rows += location_rows(design, run, progress=told)
    return rows
