"""What a plan says of the options of a method: the same for an analysis and for every repeat."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any
from zlib import crc32

import numpy as np

from robustrm.methods.follow_up import follow_up
from robustrm.methods.registry import method as registered
from robustrm.plan import Plan
from robustrm.results import FollowUps, TestResult
from robustrm.table import OccasionTable


def stream(root: int, name: str, block: int = 0) -> np.random.SeedSequence:
    """Return the random stream of one method: adding a method never changes another's."""
    return np.random.SeedSequence(root, spawn_key=(crc32(name.encode()), block))


def thresholds(table: OccasionTable, plan: Plan) -> tuple[float, ...]:
    """Return the levels that a p value of the family is compared with, step-down ones too."""
    k = table.n_occasions
    sizes = {"first": k - 1, "successive": k - 1, "all": k * (k - 1) // 2}
    m = sizes[plan.contrasts] if isinstance(plan.contrasts, str) else len(plan.contrasts)
    return tuple(plan.alpha / i for i in range(1, m + 1))


def offered(plan: Plan, name: str, levels: Sequence[float], root: int) -> dict[str, Any]:
    """Return what the plan says of the options that a method takes.

    `levels` are those that its p value is held against.
    """
    entry = registered(name)
    options = {
        "alternative": plan.alternative,
        "zeros": plan.zeros,
        "substitute": plan.substitute,
        "trim": plan.trim,
        "winsorize": plan.winsorize,
        "level": plan.level,
        # where draws approach a p value by stages, the method takes the levels it is held against
        "draws": plan.stages if "thresholds" in entry.options else plan.bootstrap_draws,
        "thresholds": levels,
        "rng": stream(root, name),
    }
    return {key: value for key, value in options.items() if key in entry.options}


def family_of(
    table: OccasionTable, plan: Plan, name: str, adjust: str | None, root: int, **options: Any
) -> FollowUps:
    """Return the planned contrasts by one method, on the scale of the table.

    Parameters
    ----------
    table : OccasionTable
        The data on the scale of the comparison.
    plan : Plan
        Contrasts, intervals, level and options of the methods.
    name : str
        Method of a pair, or of a whole family.
    adjust : str or None
        Adjustment; None takes that of a method of a whole family.
    root : int
        Root of the random streams.
    **options
        In place of what the plan says, of the options that the method takes.
    """
    scored = "sign_flip" if adjust == "closed" else name
    given = {**offered(plan, scored, thresholds(table, plan), root), **options}
    null = given.pop("null", "auto")
    return follow_up(
        table,
        method=name,
        family=plan.contrasts,
        adjust=adjust,
        intervals=plan.intervals,
        level=plan.level,
        null=null,
        rng=stream(root, name),
        options={k: v for k, v in given.items() if k not in ("level", "rng")},
    )


def overall(table: OccasionTable, plan: Plan, name: str, root: int, **options: Any) -> TestResult:
    """Return an overall test with the options of the plan, and others in their place."""
    given = {**offered(plan, name, (plan.alpha,), root), **options}
    return registered(name).load()(table, **given)
