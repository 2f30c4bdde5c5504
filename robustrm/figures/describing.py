"""Alternative texts: what a figure shows, in words and in the numbers of the results."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from robustrm._format import counted, fixed, level_text, listing, number, p_phrase, span
from robustrm.figures.agreement import Panel
from robustrm.figures.changes import changes_of
from robustrm.figures.diagnostics import centred_notes, centred_of, spread_notes, spread_of
from robustrm.figures.labels import one_line, with_unit
from robustrm.figures.symmetry import mirrored_note, mirrored_of
from robustrm.methods.adjusting import TITLES
from robustrm.methods.null_distribution import NullDistribution
from robustrm.methods.summary import OccasionSummary
from robustrm.results import Comparison, Estimate, FollowUps, Scale, TestResult
from robustrm.table import OccasionTable
from robustrm.ties import MERGE


def describe_trajectories(
    table: OccasionTable, summary: Sequence[OccasionSummary] | None = None
) -> str:
    """Say in words what :func:`trajectories` draws; no identifier is named."""
    medians = {s.occasion: s.median for s in summary or ()}
    columns = [
        _occasion_words(table, j, medians.get(occasion))
        for j, occasion in enumerate(table.occasions)
    ]
    gaps = int(table.missing.sum())
    parts = [
        f"Lines of {with_unit(table.marker, table.unit)} over {table.n_occasions} occasions, "
        f"one line a subject, {counted(table.n_subjects, 'subject')}.",
        f"{'; '.join(columns)}.",
    ]
    if table.censored.any():
        parts.append("Values beyond a limit are open symbols at the limit.")
    if gaps:
        parts.append(f"{counted(gaps, 'missing value')} left a gap in the lines.")
    return one_line(" ".join(parts))


def describe_changes(table: OccasionTable, comparison: Comparison) -> str:
    """Say in words what :func:`paired_changes` draws; no identifier is named."""
    changes = changes_of(table, comparison)
    neutral = 1.0 if comparison.result.scale == "log" else 0.0
    counts = {
        "fell": int((changes.values < neutral).sum()),
        "rose": int((changes.values > neutral).sum()),
        "did not change": int((changes.values == neutral).sum()),
        "unknown, both values beyond the limit": changes.n_unknown,
    }
    seen = listing([f"{count} {what}" for what, count in counts.items() if count])
    parts = [
        f"Changes of {table.marker} from {comparison.first} to {comparison.second} in "
        f"{counted(changes.n, 'subject')}: {seen or 'none'}.",
        f"Estimate: {_estimate_words(comparison.estimate)}.",
    ]
    if changes.bounded.any():
        bounded = int(changes.bounded.sum())
        parts.append(f"{counted(bounded, 'change')} only bounded: open symbols.")
    return one_line(" ".join(parts))


def describe_comparisons(follow_ups: FollowUps) -> str:
    """Say in words what :func:`comparisons` draws."""
    rows = [
        f"{c.label}: n = {c.result.n_subjects}, {_estimate_words(c.estimate)}, "
        f"{_p_words(c.p_adjusted)}"
        for c in follow_ups
    ]
    whose = "each" if follow_ups.intervals == "separate" else "together"
    return one_line(
        f"Estimates of {counted(len(follow_ups), 'comparison')} with {follow_ups.intervals} "
        f"intervals ({level_text(follow_ups.level)} {whose}) and P values "
        f"({TITLES[follow_ups.adjust]}). {'; '.join(rows)}."
    )


def describe_agreement(label: str, shown: Sequence[Panel]) -> str:
    """Say in words what :func:`agreement` draws."""
    parts = []
    for name, rows in shown:
        told = [
            f"{row.title} (n = {row.result.n_subjects}) "
            f"{_estimate_words(row.result.estimate)}, {_p_words(row.result.p_value)}"
            for row in rows
        ]
        parts.append(f"{name}: {'; '.join(told)}.")
    return one_line(f"{label} by every method, one panel an estimand. {' '.join(parts)}")


def describe_null(title: str, null: NullDistribution, result: TestResult) -> str:
    """Say in words what :func:`null_law` draws."""
    how = (
        "every arrangement counted"
        if null.null == "exact"
        else f"{counted(len(null.values), 'value')} from 9,999 random arrangements"
    )
    return one_line(
        f"Null distribution of {null.statistic_name} of the {title}, {how}: observed value "
        f"{number(null.observed, 4)}, n = {result.n_subjects}, {p_phrase(result.p_value)}."
    )


def describe_spread_level(table: OccasionTable) -> str:
    """Say in words what :func:`spread_level` draws; no identifier is named."""
    found = spread_of(table)
    head, *left_out = spread_notes(found)
    slope = ""
    if not math.isnan(found.slope):
        slope = f", slope {fixed(found.slope, 2)} (1: in proportion to the level, 0: not at all)"
    parts = [
        f"Spread of {with_unit(table.marker, table.unit)} within subjects against their median, "
        f"one point a subject, blind to the occasions: {head}{slope}.",
        *(f"{line}." for line in left_out),
        _limit_words(int(found.limited.sum()), "subject", "with a value beyond a limit"),
    ]
    return one_line(" ".join(parts))


def describe_centred_quantiles(table: OccasionTable, *, scale: Scale = "log") -> str:
    """Say in words what :func:`centred_quantiles` draws; no identifier is named."""
    found = centred_of(table, scale)
    mean = (
        "divided by their subject's geometric mean"
        if scale == "log"
        else ("less their subject's mean")
    )
    beyond = int((found.below | found.above).sum())
    parts = [
        f"Normal quantile plot of the values of {table.marker} {mean}, pooled, blind to the "
        f"occasions: {', '.join(centred_notes(found))}.",
        _limit_words(beyond, "value", "beyond a limit"),
    ]
    return one_line(" ".join(parts))


def describe_difference_symmetry(
    table: OccasionTable,
    first: str,
    second: str,
    *,
    scale: Scale = "log",
    substitute: str = "half",
) -> str:
    """Say in words what :func:`difference_symmetry` draws; no identifier is named."""
    found = mirrored_of(table, first, second, scale, substitute)
    gaps = found.above - found.below
    gaps[np.abs(gaps) <= MERGE * np.max(found.above + found.below, initial=0.0)] = 0.0
    higher, lower = int((gaps > 0).sum()), int((gaps < 0).sum())
    what, sign = ("ratios", "/") if scale == "log" else ("differences", "−")
    parts = [
        f"Symmetry of the {what} of {table.marker}, {second} {sign} {first}, shown, not used to "
        f"choose: {mirrored_note(found)}.",
        f"Of {counted(gaps.size, 'pair')} of an upper and a lower one, the upper lies further from "
        f"the median in {higher}, the lower in {lower}."
        if gaps.size
        else "",
        _limit_words(int(found.limited.sum()), "pair", "with a value beyond a limit"),
    ]
    return one_line(" ".join(parts))


def _limit_words(count: int, noun: str, what: str) -> str:
    symbols = "open symbol" if count == 1 else "open symbols"
    return f"{counted(count, noun)} {what}: {symbols}." if count else ""


def _occasion_words(table: OccasionTable, j: int, median: float | None) -> str:
    remarks = [f"n = {int((~table.missing[:, j]).sum())}"]
    for flags, side in ((table.below, "below"), (table.above, "above")):
        if flags[:, j].any():
            remarks.append(f"{int(flags[:, j].sum())} {side} a limit")
    middle = "" if median is None else f"median {number(median)}, "
    return f"{table.occasions[j]}: {middle}{', '.join(remarks)}"


def _p_words(p: float) -> str:
    return "not tested" if math.isnan(p) else p_phrase(p)


def _estimate_words(estimate: Estimate | None) -> str:
    if estimate is None:
        return "not estimable"
    unit = f" {estimate.unit}" if estimate.unit else ""
    head = f"{estimate.name} {number(estimate.value)}{unit}"
    if estimate.level is None or estimate.low is None:
        return f"{head}, interval not estimable"
    return f"{head} ({level_text(estimate.level)} interval {span(estimate.low, estimate.high)})"
