"""A plan in words: the statistics section of an analysis plan, and when it was written."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from robustrm._format import declared, level_text, listing, number, percent
from robustrm.methods.adjusting import TITLES
from robustrm.methods.registry import in_sentence
from robustrm.methods.registry import method as registered
from robustrm.plan import Plan
from robustrm.report.sentences import FAMILIES, SUBSTITUTES, ZEROS

_MISSING = {
    "available": "Each comparison uses all subjects who have both of its occasions; tests over all "
    "occasions use those with every occasion.",
    "complete": "Every comparison and test uses the subjects with every occasion.",
}
_PURPOSES = {
    "exploratory": "The study is exploratory: estimates with intervals come first, and P values "
    "are labelled exploratory.",
    "confirmatory": "The study is confirmatory.",
}
_DESIGNS = {
    "single-arm": "There is one arm without a control group: a change is not attributed to any "
    "intervention.",
    "randomised-order": "The order of the conditions is randomised.",
}


def statement(plan: Plan) -> str:
    """Return the plan as the statistics section of an analysis plan, a paragraph a topic.

    Parameters
    ----------
    plan : Plan
        A plan, before or after there are data.

    Returns
    -------
    str
        Paragraphs with their topic in front, ready for a protocol; no number comes from data.
    """
    found = plan.to_dict()
    paragraphs = [
        ("Marker and occasions", _measured(found)),
        ("Design and purpose", f"{_DESIGNS[plan.design]} {_PURPOSES[plan.purpose]}"),
        ("Scale and target", _scale(plan)),
        ("Primary analysis", _primary(plan)),
        ("Overall test", _overall(plan)),
        ("Beside the primary analysis", _beside(plan)),
        ("Values beyond a limit", _limits(plan)),
        ("Missing visits", f"{_MISSING[plan.missing]} No value is filled in."),
        ("Outliers", "No value is removed as an outlier."),
        ("Relevant change", _margin(plan)),
        ("Sensitivity", _sensitivity(plan)),
        ("Open to bias", _asked(plan)),
        ("Random draws", _draws(plan)),
        ("This plan", " ".join([order_of_writing(found), *_amended(found)])),
    ]
    return "\n\n".join(f"{topic}. {text}" for topic, text in paragraphs if text) + "\n"


def order_of_writing(plan: Mapping[str, Any]) -> str:
    """Say what the plan says of when it was written: its word, and no proof."""
    when = f"on {plan['created']}" if plan["created"] else "at a time that it does not give"
    if plan["data_digest"]:
        data = f"with a data file at hand (SHA-256 {plan['data_digest']})"
    else:
        data = "without data"
    return f"By its own word the plan was written {when}, {data}; that is no proof."


def origin(document: Mapping[str, Any]) -> list[str]:
    """Say where the plan of a report comes from: advice and its reasons, or the file's word."""
    advice = document["advice"]
    if advice is None:
        return [order_of_writing(document["plan"]), *_amended(document["plan"])]
    return [
        "No plan was given. The tests were advised without looking at which value belongs to "
        "which occasion, so the choice of the exact overall test keeps its level.",
        *advice["reasons"],
        advice["record"],
    ]


def _amended(plan: Mapping[str, Any]) -> Iterator[str]:
    if plan["amendments"]:
        yield f"Amendments: {'; '.join(plan['amendments'])}."


def _measured(plan: Mapping[str, Any]) -> str:
    marker = plan["marker"] or "The marker"
    unit = f" ({plan['unit']})" if plan["unit"] else ""
    if plan["occasions"]:
        where = f"on {len(plan['occasions'])} occasions: {listing(plan['occasions'], 20)}"
    else:
        where = "on several occasions"
    limits = "".join(
        f" The {side} limit is {_limit(plan[f'{side}_limit'], plan['occasions'])}."
        for side in ("lower", "upper")
        if plan[f"{side}_limit"] is not None
    )
    return f"{marker}{unit} is measured in the same subjects {where}.{limits}"


def _limit(limit: float | list[float | None], occasions: list[str]) -> str:
    if not isinstance(limit, list):
        return f"{declared(limit)} on every occasion"
    names = occasions or [f"occasion {place}" for place in range(1, len(limit) + 1)]
    told = ("none" if value is None else declared(value) for value in limit)
    return ", ".join(f"{value} ({name})" for value, name in zip(told, names, strict=True))


def _scale(plan: Plan) -> str:
    target = f" The target of estimation is {plan.estimand}." if plan.estimand else ""
    if plan.used_scale == "log":
        return f"Values are compared as ratios, on the log scale.{target}"
    return f"Values are compared as differences, on the raw scale.{target}"


def _primary(plan: Plan) -> str:
    family = plan.contrasts if isinstance(plan.contrasts, str) else "named"
    sides = "two-sided" if plan.sides == 2 else f"one-sided, {plan.direction}"
    rule = f", {ZEROS[plan.zeros]}" if plan.pair == "signed_rank" else ""
    adjusted = (
        "P values are not adjusted"
        if plan.adjust == "none"
        else f"P values are adjusted over the comparisons ({TITLES[plan.adjust]})"
    )
    whose = "each" if plan.intervals == "separate" else "together"
    named = () if isinstance(plan.contrasts, str) else plan.contrasts
    pairs = f" ({'; '.join(map(' to '.join, named))})" if named else ""
    return (
        f"Planned is the comparison of {FAMILIES[family]}{pairs} by the "
        f"{in_sentence(registered(plan.pair).title)} ({sides}{rule}). {adjusted}, at level "
        f"{percent(plan.alpha)}. Estimates have {level_text(plan.level)} intervals, which hold "
        f"their level {whose}. The comparisons are made whatever the overall test says."
    )


def _overall(plan: Plan) -> str:
    entry = registered(plan.omnibus)
    return (
        f"The {in_sentence(entry.title)} over all occasions supports the comparisons. Its null "
        f"hypothesis: {entry.null}."
    )


def _beside(plan: Plan) -> str:
    titles = list(dict.fromkeys(in_sentence(registered(name).title) for name in plan.companions))
    others = f", and the {listing(titles, 20)}, each under its own estimand" if titles else ""
    return (
        "Within-subject analysis of variance and paired t tests on the raw and the log scale"
        f"{others}. None of them replaces the primary analysis."
    )


def _limits(plan: Plan) -> str:
    return (
        "Values beyond a limit are ranked as equal, beyond all measured values, at the limit that "
        f"all cells share. Where a size is needed, {SUBSTITUTES[plan.substitute]} enters for a "
        "value below the limit, and the range over other substitutes is shown."
    )


def _margin(plan: Plan) -> str:
    if plan.margin is None:
        return "No margin of relevant change is declared."
    margin = number(plan.margin)
    within = f"A difference within ±{margin}"
    if plan.used_scale == "log":
        within = f"A ratio between 1/{margin} and {margin}"
    return f"{within} counts as no relevant change ({plan.margin_reason})."


def _sensitivity(plan: Plan) -> str:
    grid = plan.grid
    tests = listing([in_sentence(registered(name).title) for name in grid.test], 20)
    return (
        "Whether the conclusion holds is asked under other assumptions: beside the parametric "
        "results, without each person in turn, over what values beyond a limit may have been, and "
        "under other handling of missed visits. Specifications are declared over scale "
        f"({listing(grid.scale)}) and test ({tests}); they have one joint P value by a permutation "
        "test, and none of them replaces the primary analysis."
    )


def _asked(plan: Plan) -> str:
    answers = {None: "not stated", True: "yes", False: "no"}
    return (
        f"People were selected on a high value of the marker: {answers[plan.selected]}. Each "
        f"occasion is assayed in a run of its own: {answers[plan.own_runs]}."
    )


def _draws(plan: Plan) -> str:
    seed = "recorded with the results" if plan.seed is None else str(plan.seed)
    stages = listing([f"{stage:,}" for stage in plan.stages], 9)
    return (
        "Null distributions are exact where the work allows. Otherwise random arrangements are "
        f"drawn in stages ({stages}) until P is resolved against the levels in use; bootstrap "
        f"intervals take {plan.bootstrap_draws:,} resamples. Root of the draws: {seed}."
    )
