"""The measured record of the advice: what the advised test found in simulated data like these.

``record.csv`` is made by ``python -m robustrm.trials advice`` and shipped with the package.
"""

from __future__ import annotations

import csv
import functools
import math
from collections.abc import Mapping
from dataclasses import dataclass
from importlib import resources

from robustrm._format import counted
from robustrm.advice.blind import Shape
from robustrm.advice.rule import Facts

ADVISED, RAW, LOG = "advised", "anova, raw", "anova, log"
# Hogg's ratios of the pooled subject-centred values, half way between those of the simulated laws.
HEAVY, SKEWED = 2.85, 1.4


@dataclass(frozen=True, slots=True)
class Measured:
    """One cell of the record in which there was a change to be found.

    Parameters
    ----------
    errors : str
        Law of the errors; they multiply where its name begins with "log".
    n, k : int
        Subjects and occasions.
    limit : float
        Share of the values at a limit.
    change : float
        Change from the first to the last occasion, in within-subject SDs.
    power : mapping
        Share of the data sets in which each test found the change.
    """

    errors: str
    n: int
    k: int
    limit: float
    change: float
    power: Mapping[str, float]


@functools.lru_cache(maxsize=1)
def record() -> tuple[Measured, ...]:
    """Return the exchangeable cells with a change and the base SDs, each with all its tests."""
    text = resources.files("robustrm.advice").joinpath("record.csv").read_text(encoding="utf-8")
    found: dict[tuple[str, ...], dict[str, float]] = {}
    for row in csv.DictReader(text.splitlines()):
        plain = not row["spread"] and row["correlation"] == "exchangeable"
        if plain and float(row["change"]) and not float(row["missing"]) and _has_base_sds(row):
            key = tuple(row[name] for name in ("errors", "n", "k", "limit", "change"))
            found.setdefault(key, {})[row["test"]] = float(row["rate"])
    return tuple(
        Measured(errors, int(n), int(k), float(limit), float(change), power)
        for (errors, n, k, limit, change), power in found.items()
    )


def _has_base_sds(row: Mapping[str, str]) -> bool:
    return math.isclose(float(row["between_sd"]) / float(row["within_sd"]), 1 / 0.6, rel_tol=1e-4)


def likely_law(scale: str, found: Shape | None) -> str:
    """Return the simulated law most like the subject-centred values, told by their tails alone."""
    heavy = found is not None and found.tail_weight > HEAVY
    if scale == "log":
        return "log-t3" if heavy else "lognormal"
    if found is not None and found.tail_balance > SKEWED:
        return "skewed"
    return "t3" if heavy else "normal"


def nearest(facts: Facts) -> Measured:
    """Return the cell most like a study: scale first, then n, k, share at a limit and tails."""
    scale = facts.plan.used_scale
    law = likely_law(scale, facts.figures.shape.get(scale) if facts.figures else None)

    def distance(cell: Measured) -> float:
        return (
            10 * (cell.errors.startswith("log") != (scale == "log"))
            + abs(math.log(cell.n / facts.n_subjects))
            + 0.3 * abs(cell.k - facts.n_occasions)
            + 2 * abs(cell.limit - facts.share_at_limit)
            + 0.2 * (cell.errors != law)
        )

    return min(record(), key=distance)


def record_sentence(facts: Facts) -> str:
    """Say what the advised overall test found in the nearest cell, beside the parametric F."""
    cell = nearest(facts)
    at_limit = f", {cell.limit:.0%} at a limit" if cell.limit else ""
    f_on_logs = f", {_of_100(cell, LOG)} on logs" if LOG in cell.power else ""
    return (
        f"In simulated data most like these ({cell.errors} errors, {counted(cell.n, 'subject')}, "
        f"{counted(cell.k, 'occasion')}{at_limit}; a change of {cell.change:g} within-subject SDs "
        f"from first to last) the advised overall test found {_of_100(cell, ADVISED)} of 100 "
        f"changes, the Greenhouse-Geisser F {_of_100(cell, RAW)} on the values{f_on_logs}."
    )


def _of_100(cell: Measured, test: str) -> str:
    return f"{100 * cell.power[test]:.0f}"
