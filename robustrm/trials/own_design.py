"""Level and power of the advised test at the design and the blind shape of one study."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any, cast

from robustrm._format import aligned, fixed
from robustrm.advice.record import likely_law
from robustrm.advice.rule import Facts
from robustrm.results import plain
from robustrm.simulation import Design, Errors
from robustrm.trials.grid import (
    ADVISED,
    CHANGE,
    DRAWS,
    LOG,
    RAW,
    Cell,
    GridRow,
    base,
    cell_rows,
    changed,
)
from robustrm.trials.p_values import Progress
from robustrm.trials.tabulating import monte_carlo_interval

SHOWN = (ADVISED, "row_flip", "friedman", LOG, RAW)


@dataclass(frozen=True, slots=True)
class OwnDesign:
    """What was simulated, and how often each test rejected at .05.

    Parameters
    ----------
    design : Design
        Without a change.
    level, power : tuple of GridRow
        Without and with a linear change of 1.1 within-subject SDs.
    """

    design: Design
    level: tuple[GridRow, ...]
    power: tuple[GridRow, ...]

    def to_dict(self) -> dict[str, Any]:
        """Return plain values."""
        result: dict[str, Any] = plain(self)
        return result

    def __str__(self) -> str:
        power = {row.test: row for row in self.power}
        rows = [
            [row.test, _rate(row), _rate(power[row.test])]
            for row in self.level
            if row.test in SHOWN
        ]
        design, one = self.design, self.level[0]
        table = aligned(["test", "no change", f"change of {CHANGE} SDs"], rows)
        return (
            f"Share of {one.datasets} simulated data sets in which P is at most .05 "
            f"({design.errors} errors, n = {design.n}, k = {design.k}, within-subject SD "
            f"{fixed(design.within_sd, 2)}, between {fixed(design.between_sd, 2)}, "
            f"{design.limit:.0%} at a limit; 95% Monte Carlo interval)\n{table}"
        )


def simulate_own_design(
    facts: Facts,
    *,
    datasets: int = 2000,
    draws: int = DRAWS,
    seed: int = 1,
    progress: Progress | None = None,
) -> OwnDesign:
    """Simulate data sets of the size and the blind shape of a study.

    Parameters
    ----------
    facts : Facts
        The plan and the blind figures; without figures the base SDs are taken.
    datasets : int, default 2000
        Data sets without a change, and as many with one.
    draws : int, default 499
        Rearrangements of each data set.
    seed : int, default 1
        Root of all streams.
    progress : callable, optional
        Called with (data sets done, data sets).

    Returns
    -------
    OwnDesign

    Notes
    -----
    Missing visits are not simulated. The SDs are those of the data, which a change between the
    occasions makes larger: the power is that for a change in units of the SD that was seen.
    """
    design = _design_of(facts)
    found: list[tuple[GridRow, ...]] = []
    for cell in (Cell("own", design), Cell("own", changed(design), CHANGE)):
        before = datasets * len(found)

        def told(done: int, _: int, before: int = before) -> None:
            if progress is not None:
                progress(before + done, 2 * datasets)

        rows: Sequence[GridRow] = cell_rows(cell, datasets, draws=draws, seed=seed, progress=told)
        found.append(tuple(rows))
    return OwnDesign(design, *found)


def _design_of(facts: Facts) -> Design:
    scale = facts.plan.used_scale
    shape = facts.figures.shape.get(scale) if facts.figures else None
    law = cast(Errors, likely_law(scale, shape))
    design = base(facts.n_subjects, facts.n_occasions, law, limit=round(facts.share_at_limit, 4))
    if shape is None or not shape.within_sd > 0:
        return design
    return replace(design, within_sd=shape.within_sd, between_sd=shape.between_sd)


def _rate(row: GridRow) -> str:
    low, high = monte_carlo_interval(row.rejections, row.datasets)
    return f"{row.rate:.3f} [{low:.3f}, {high:.3f}]"
