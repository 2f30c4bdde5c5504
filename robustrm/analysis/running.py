"""From a plan and a table to an analysis, one function a part of it."""

from __future__ import annotations

import dataclasses
import importlib.metadata
import platform
from collections.abc import Callable, Iterator
from typing import Any

import numpy as np

from robustrm.advice import Advice, advise
from robustrm.analysis.notes import analysis_notes
from robustrm.analysis.options import family_of, overall, stream
from robustrm.analysis.result import ALL_OCCASIONS, Analysis, Inclusion, Row, Skip
from robustrm.errors import ArgumentError, DataError, TooFewError
from robustrm.methods.attainable import attainable_of
from robustrm.methods.effects import effect_sizes
from robustrm.methods.follow_up import declared_pairs
from robustrm.methods.null_distribution import NullDistribution, null_distribution
from robustrm.methods.registry import method as registered
from robustrm.methods.summary import summarize
from robustrm.plan import Plan
from robustrm.results import FollowUps, Role, TestResult, plain
from robustrm.table import OccasionTable

Progress = Callable[[int, int], None]


ROW_FLIP_FROM = 8
"""Below 8 subjects the smallest p of the row flip, 2^(1 − n), is too large to be of use."""


def analyze(
    table: OccasionTable,
    plan: Plan | None = None,
    *,
    advice: Advice | None = None,
    rng: np.random.Generator | int | None = None,
    progress: Progress | None = None,
) -> Analysis:
    """Analyze one marker as planned, with the parametric result beside.

    Parameters
    ----------
    table : OccasionTable
        The data, on the raw scale.
    plan : Plan, optional
        What was fixed beforehand. Without one the plan is that of :func:`advise`, which is blind
        to the occasions; the report says so and gives its reasons.
    advice : Advice, optional
        The advice that `plan` came from, for the report.
    rng : Generator or int, optional
        Root of the random streams of Monte Carlo nulls. Default: the plan's seed, else fresh
        entropy, which is recorded.
    progress : callable, optional
        Called with (done, total) after each step.

    Returns
    -------
    Analysis
        All results with their roles; ``write_report`` makes the report.

    Raises
    ------
    DataError
        When the scale is logarithmic and a value is zero or negative.
    ArgumentError
        When the plan names an occasion that the table does not have.

    Notes
    -----
    The scale follows the plan: a marker declared a concentration is compared as ratios, on
    logs. Nothing in the data changes the scale or the tests. The planned contrasts are
    computed and shown whatever the overall test says.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[91, 72, 60], [40, 31, 25], [120, 125, 80], [66, 50, 59], [33, 21, 20], [75, 60, 44]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ...     marker="ferritin",
    ...     unit="µg/L",
    ... )
    >>> analysis = analyze(table)
    >>> [round(c.estimate.value, 2) for c in analysis.primary]
    [0.78, 0.64]
    >>> analysis.attainable.smallest_p_adjusted, analysis.attainable.reachable
    (0.0625, False)
    """
    _check_kinds(table, plan)
    if plan is None:
        advice = advice or advise(table)
        plan = advice.plan
    settled = plan
    root = _root(settled, rng)
    raw = table.in_natural_order()
    _check_contrasts(raw, settled)
    kept = raw.complete() if settled.missing == "complete" else raw
    scaled = kept.on_scale(settled.used_scale)
    steps = _Steps(progress, total=8)

    primary = _primary(scaled, settled, root)
    steps.done()
    omnibus, skipped = _omnibus(scaled, settled, root)
    steps.done()
    companions, skipped_companions = _companions(scaled, settled, root)
    steps.done()
    null = _null_distribution(scaled, settled, omnibus, root)
    steps.done()
    beside, skipped_beside = _beside(kept, settled, root)
    steps.done()
    effects = effect_sizes(
        scaled,
        primary,
        raw=kept,
        substitute=settled.substitute,
        trim=settled.trim,
        rng=stream(root, "effect sizes"),
        draws=settled.bootstrap_draws,
    )
    steps.done()
    summary = summarize(raw, substitute=settled.substitute)
    steps.done()
    analysis = Analysis(
        plan=settled,
        advice=advice,
        table=raw,
        scale=settled.used_scale,
        attainable=attainable_of(primary),
        primary=primary,
        omnibus=omnibus,
        supplementary=companions,
        beside=beside,
        null_distribution=null,
        effects=effects,
        summary=summary,
        inclusions=(),
        skips=(*skipped, *skipped_companions, *skipped_beside),
        ledger=scaled.ledger,
        notes=analysis_notes(raw, settled, summary),
        record=_record(raw, settled, root),
    )
    steps.done()
    return dataclasses.replace(analysis, inclusions=_inclusions(analysis))


def _check_kinds(table: object, plan: object) -> None:
    if not isinstance(table, OccasionTable) or not isinstance(plan, Plan | None):
        raise ArgumentError(
            f"`table` must be an OccasionTable and `plan` a Plan, got {type(table).__name__} and "
            f"{type(plan).__name__}. Make the table with read_table or OccasionTable.from_wide."
        )


def _check_contrasts(table: OccasionTable, plan: Plan) -> None:
    """Refuse unknown occasions, and pairs that run against time, before anything is computed."""
    if plan.occasions and plan.occasions != table.occasions:
        raise ArgumentError(
            f"The plan has the occasions {', '.join(plan.occasions)}, the table "
            f"{', '.join(table.occasions)}. Read the table with the planned occasions in their "
            "order, or amend the plan."
        )
    for first, second in declared_pairs(table, plan.contrasts, "contrasts"):
        if plan.in_time and table.occasions.index(first) > table.occasions.index(second):
            raise ArgumentError(
                f"`contrasts` must name the earlier occasion first, got {(first, second)!r}. "
                f"Did you mean {(second, first)!r}?"
            )


class _Steps:
    """Counts finished steps for a progress callback."""

    def __init__(self, progress: Progress | None, total: int) -> None:
        self.progress, self.total, self.count = progress, total, 0

    def done(self) -> None:
        self.count += 1
        if self.progress is not None:
            self.progress(self.count, self.total)


def _root(plan: Plan, rng: np.random.Generator | int | None) -> int:
    """Return the 128-bit root of all streams, in the documented order of precedence."""
    if isinstance(rng, np.random.Generator):
        high, low = rng.integers(2**63, size=2).tolist()
        return int(high) << 64 | int(low)
    if rng is not None:
        return int(rng)
    if plan.seed is not None:
        return plan.seed
    entropy = np.random.SeedSequence().entropy
    return entropy if isinstance(entropy, int) else 0


def _primary(table: OccasionTable, plan: Plan, root: int) -> FollowUps:
    family = family_of(table, plan, plan.pair, plan.adjust, root)
    if all(comparison.result.n_subjects == 0 for comparison in family):
        raise TooFewError(
            "No planned comparison has a subject with both of its occasions. Check the ids and "
            "the occasions of the file."
        )
    return family


def _omnibus(
    table: OccasionTable, plan: Plan, root: int
) -> tuple[TestResult | None, tuple[Skip, ...]]:
    entry = registered(plan.omnibus)
    try:
        return overall(table, plan, plan.omnibus, root), ()
    except TooFewError as error:
        return None, (Skip(f"{entry.title} ({table.scale} scale)", str(error)),)


def _companions(
    table: OccasionTable, plan: Plan, root: int
) -> tuple[tuple[Row, ...], tuple[Skip, ...]]:
    """Return what stands beside the planned tests, and what could not be made of it.

    The row flip does not ask for exchangeable occasions, which occasions in time rarely are;
    the Skillings-Mack test takes the subjects who lack an occasion. The companions of the plan
    answer other questions, each with an estimand of its own.
    """
    rows: list[Row] = []
    skips: list[Skip] = []
    for role, name, options in _beside_overall(table, plan):
        try:
            result = overall(table, plan, name, root, **options)
            rows.append(Row(role, ALL_OCCASIONS, result))
        except TooFewError as error:
            skips.append(Skip(f"{registered(name).title} ({table.scale} scale)", str(error)))
    for name in plan.companions:
        if registered(name).kind == "omnibus" or name == plan.pair:
            continue
        try:
            rows.extend(_other_pairs(table, plan, name, root))
        except TooFewError as error:  # a method of a whole family needs complete rows
            skips.append(Skip(f"{registered(name).title} ({table.scale} scale)", str(error)))
    return tuple(rows), tuple(skips)


def _beside_overall(table: OccasionTable, plan: Plan) -> Iterator[tuple[Role, str, dict[str, Any]]]:
    """Yield role, name and options of every test that stands beside the planned overall test."""
    n = table.complete().n_subjects
    if plan.omnibus != "friedman":
        yield "supporting", "friedman", {}  # what readers of the field look for
    if plan.in_time and n >= ROW_FLIP_FROM and plan.omnibus != "row_flip":
        yield "supporting", "row_flip", {}
    if table.missing.any() and plan.omnibus != "skillings_mack":
        yield "supporting", "skillings_mack", {}
    for name in plan.companions:
        if registered(name).kind != "omnibus" or name == plan.omnibus:
            continue
        yield "supplementary", name, {}
        if name == "trimmed_anova":  # one statistic against both of its null distributions
            yield "supplementary", name, {"null": "bootstrap"}


def _other_pairs(table: OccasionTable, plan: Plan, name: str, root: int) -> list[Row]:
    adjust = None if registered(name).kind == "family" else "holm"
    family = family_of(table, plan, name, adjust, root)
    return [Row("supplementary", c.label, c.result, c.p_adjusted, family.adjust) for c in family]


def _null_distribution(
    table: OccasionTable, plan: Plan, omnibus: TestResult | None, root: int
) -> NullDistribution | None:
    if omnibus is None or not registered(plan.omnibus).is_additive:
        return None
    options = {"substitute": plan.substitute}
    taken = {k: v for k, v in options.items() if k in registered(plan.omnibus).options}
    return null_distribution(table, plan.omnibus, rng=stream(root, "null distribution"), **taken)


def _beside(raw: OccasionTable, plan: Plan, root: int) -> tuple[tuple[Row, ...], tuple[Skip, ...]]:
    rows: list[Row] = []
    skips: list[Skip] = []
    for scale in ("raw", "log"):
        role: Role = "sensitivity" if scale == plan.used_scale else "supplementary"
        try:
            table = raw.on_scale(scale)
        except DataError as error:
            reason = error.problems[0].message
            skips.append(Skip(f"parametric results ({scale} scale)", reason))
            continue
        try:
            rows.append(Row(role, ALL_OCCASIONS, overall(table, plan, "anova", root)))
        except TooFewError as error:
            skips.append(Skip(f"{registered('anova').title} ({scale} scale)", str(error)))
        rows.extend(_parametric_pairs(table, role, plan, root))
    return tuple(rows), tuple(skips)


def _parametric_pairs(table: OccasionTable, role: Role, plan: Plan, root: int) -> list[Row]:
    family = family_of(table, plan, "paired_t", "bonferroni", root)
    return [Row(role, c.label, c.result, c.p_adjusted, family.adjust) for c in family]


def _inclusions(analysis: Analysis) -> tuple[Inclusion, ...]:
    """Return the status of every subject in every analysis; included ones add up to its n."""
    table = analysis.table
    result: list[Inclusion] = []
    for row in analysis.rows():
        name = f"{row.title}, {row.result.scale} scale: {row.label}"
        used = set(row.result.subjects)
        result.extend(
            Inclusion(name, subject, subject in used, "" if subject in used else table.reason(i))
            for i, subject in enumerate(table.subjects)
        )
    return tuple(result)


def _record(table: OccasionTable, plan: Plan, root: int) -> dict[str, Any]:
    versions = {name: importlib.metadata.version(name) for name in ("numpy", "scipy", "pandas")}
    return {
        "source": plain(dict(table.source)),
        "plan_digest": plan.digest,
        "seed": str(root),
        "versions": {
            "robustrm": importlib.metadata.version("robustrm"),
            "python": platform.python_version(),
            **versions,
        },
        "platform": platform.platform(),
    }
