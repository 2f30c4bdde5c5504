"""What the limits do to a conclusion, in words."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence

from robustrm._format import counted, declared, number, number_range, percent
from robustrm.methods.adjusting import TITLES
from robustrm.methods.registry import method as registered
from robustrm.plan import Plan
from robustrm.results import TestResult
from robustrm.sensitivity_analysis.likelihood import LikelihoodContrast
from robustrm.sensitivity_analysis.limits_entering import Counts
from robustrm.sensitivity_analysis.limits_orders import Bounds
from robustrm.sensitivity_analysis.limits_substitutes import EACH, MULTIPLE, ONE, Range
from robustrm.sensitivity_analysis.reading import ADJUSTING, p_range_words, the


def counts_sentence(counts: Counts) -> str:
    """Say what lies beyond the common limits of a comparison, and what they gave up."""
    shares = []
    if counts.n_below:
        shares.append(f"{counted(counts.n_below, 'value')} below {declared(counts.common_lower)}")
    if counts.n_above:
        shares.append(f"{counted(counts.n_above, 'value')} above {declared(counts.common_upper)}")
    gave = ""
    if counts.n_given_up:
        given = counted(counts.n_given_up, "measured value")
        gave = f", {given} given up to have one limit for all occasions compared"
    text = f"{counts.label} (n = {counts.n}): {' and '.join(shares)}{gave}."
    if counts.mostly_beyond and counts.pair is not None:
        text += (
            " More than half of an occasion lies beyond, so counts stand in place of a shift: "
            f"{counts.fell} fell, {counts.rose} rose, {counts.unchanged} did not change, "
            f"{counts.unknown} unknown."
        )
    return text


def range_sentence(found: Range, plan: Plan) -> str:
    """Say how far a comparison moves, whether its reading holds, and where it changes."""
    row = found.planned
    who = f"{row.label}, {the(row.title)} ({row.result.scale} scale, n = {row.result.n_subjects})"
    return f"{who}: {_over(found)} {_moves(found, plan)}; {_reading(found, plan)}."


def _over(found: Range) -> str:
    if found.varied == MULTIPLE:
        return "with values above the limit entered at 1 to 10 times it"
    if found.varied == EACH:
        return "with a substitute of its own for each occasion, from 1% of the limit to the limit,"
    return "over substitutes from 1% of the limit to the limit"


def _moves(found: Range, plan: Plan) -> str:
    estimate = found.planned.result.estimate
    words = []
    if estimate is not None and not math.isnan(found.estimate[0]):
        unit = f" {estimate.unit}" if estimate.unit else ""
        words.append(f"the {estimate.name} is {number_range(*found.estimate)}{unit}")
    adjust = found.planned.adjust
    if adjust in ADJUSTING and not math.isnan(found.p_adjusted[0]):
        words.append(f"{p_range_words(found.p_adjusted, plan.alpha)} after {TITLES[adjust]}")
    elif not math.isnan(found.p[0]):
        words.append(p_range_words(found.p, plan.alpha))
    return ", ".join(words) or "nothing is estimable"


def _reading(found: Range, plan: Plan) -> str:
    level = declared(plan.alpha)
    if not found.changes:
        has_estimate = found.planned.result.estimate is not None
        stays = f"P stays on its side of {level}"
        return f"{stays} and the direction holds" if has_estimate else stays
    what = {
        "direction": "the direction turns",
        "P": f"P crosses {level}",
        "direction and P": f"P crosses {level} and the direction turns",
    }[found.changes]
    places = [
        _place(found, share)
        for share in (found.changes_below, found.changes_above)
        if not math.isnan(share)
    ]
    where = f", first at {' and at '.join(places)}" if places else ""
    drawn = " (P drawn at random: the place is approximate)" if found.unresolved else ""
    return f"the reading depends on it: {what}{where}{drawn}"


def _place(found: Range, share: float) -> str:
    return (
        f"{number(share)} times the limit"
        if found.varied == MULTIPLE
        else (f"{percent(share, 1)} of the limit")
    )


def bounds_sentence(
    label: str, planned: TestResult, varied: str, bounds: Bounds, plan: Plan, changes: str
) -> str:
    """Say between which ends P lies whatever is not known."""
    level = declared(plan.alpha)
    title = the(registered(planned.method).title)
    head = f"{label}, {title} (n = {planned.n_subjects}): over {varied}"
    moved = ""
    if bounds.estimate is not None:
        moved = f"the {planned.estimand} is {number_range(*bounds.estimate)} and "
    p = p_range_words(bounds.p, plan.alpha)
    if not bounds.n_open:
        return f"{head} nothing is open: {moved}{p}."
    side = "both sides" if "P" in changes else "one side"
    turned = "; the direction is open" if "direction" in changes else ""
    before = " before adjustment" if planned.n_occasions == 2 else ""
    return (
        f"{head} ({counted(bounds.n_open, 'subject')} open) {moved}{p}{before}, "
        f"on {side} of {level}{turned}."
    )


def likelihood_sentence(contrast: LikelihoodContrast) -> str:
    """Give the estimate that needs no substitute."""
    return (
        f"{contrast.label}, likelihood of all values under normal logs, without a substitute "
        f"(n = {contrast.n_subjects}): {contrast.estimate}."
    )


def closing(ranges: Sequence[Range], plan: Plan) -> Iterator[str]:
    """Say of the planned comparisons together whether they depend on the substitutes."""
    planned = [found for found in ranges if found.planned.role == "primary"]
    if not planned:
        yield "No planned comparison depends on the size of a value beyond a limit."
        return
    level = declared(plan.alpha)
    for varied, what in (
        (ONE, "With one substitute for all values below"),
        (EACH, "With a substitute of its own for each occasion"),
        (MULTIPLE, "With values above the limit entered at 1 to 10 times it"),
    ):
        these = [found for found in planned if found.varied == varied]
        moved = [found.planned.label for found in these if found.changes]
        if moved:
            yield f"{what} the reading changes for {'; '.join(moved)}."
        elif these:
            same = "every planned comparison that it touches reads the same"
            yield f"{what} {same}: the direction, and the side of {level} on which P lies."
