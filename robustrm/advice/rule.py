"""The rule: a table of conditions, and the choices they lead to.

It sees the blind figures and the plan, never the data. Every choice is a key of the plan.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Collection, Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any

from robustrm._format import counted, fixed, percent
from robustrm.advice.blind import BlindFigures
from robustrm.plan import Plan

MANY_AT_LIMIT = 0.50
"""Share of values at a limit from which most sizes of change are unknown.

Below it aligned ranks find more than ranks within subjects, also with 40% at a limit.
"""


@dataclass(frozen=True, slots=True)
class Facts:
    """What the rule decides by: the plan, and the blind figures where there are data."""

    plan: Plan
    figures: BlindFigures | None
    n_subjects: int
    n_occasions: int

    @property
    def share_at_limit(self) -> float:
        """Share of the values beyond a limit; 0 before there are data."""
        return self.figures.share_at_limit if self.figures else 0.0

    @property
    def has_gaps(self) -> bool:
        """Whether a subject lacks an occasion."""
        return self.figures is not None and self.figures.share_missing > 0


@dataclass(frozen=True, slots=True)
class Rule:
    """One line of the table.

    Parameters
    ----------
    part : str
        What is chosen; of the lines of a part the first that holds decides.
    when : str
        The condition in words.
    holds : callable
        The condition.
    chooses : mapping
        Keys of the plan.
    because : callable
        The reason as a sentence, with the figures behind it.
    """

    part: str
    when: str
    holds: Callable[[Facts], bool]
    chooses: Mapping[str, Any]
    because: Callable[[Facts], str]


def _always(facts: Facts) -> bool:
    return True


def _many_at_limit(facts: Facts) -> bool:
    return facts.share_at_limit >= MANY_AT_LIMIT


RULES: tuple[Rule, ...] = (
    Rule(
        "scale",
        "the plan declares a scale",
        lambda facts: facts.plan.scale is not None,
        {},
        lambda facts: f"Scale: {facts.plan.scale}, as the plan declares.",
    ),
    Rule(
        "scale",
        "the marker is a concentration",
        lambda facts: facts.plan.marker_kind == "concentration",
        {"scale": "log"},
        lambda facts: (
            "Scale: log. A concentration changes by factors, and its logarithms are nearer "
            f"symmetry{_slope_words(facts)}."
        ),
    ),
    Rule(
        "scale",
        "otherwise",
        _always,
        {"scale": "raw"},
        lambda facts: f"Scale: raw. A {facts.plan.marker_kind} is compared by differences.",
    ),
    Rule(
        "overall test",
        f"at least {percent(MANY_AT_LIMIT)} of the values lie beyond a limit",
        _many_at_limit,
        {"omnibus": "friedman"},
        lambda facts: (
            f"Overall test: Friedman. {percent(facts.share_at_limit)} of the values lie beyond a "
            "limit, so most sizes of change are unknown; ranks within a subject need only order."
        ),
    ),
    Rule(
        "overall test",
        "otherwise",
        _always,
        {"omnibus": "aligned_ranks"},
        lambda facts: (
            "Overall test: aligned ranks, by rearranging. They compare changes between subjects "
            f"too, which ranks within {counted(facts.n_occasions, 'occasion')} cannot, and bound "
            f"the weight of an extreme value{_tail_words(facts)}."
        ),
    ),
    Rule(
        "comparisons",
        f"at least {percent(MANY_AT_LIMIT)} of the values lie beyond a limit",
        _many_at_limit,
        {"pair": "sign_test"},
        lambda facts: (
            "Comparisons: sign test with the probability of a fall, which need the direction of a "
            "change and not its size."
        ),
    ),
    Rule(
        "comparisons",
        "otherwise",
        _always,
        {"pair": "signed_rank"},
        lambda facts: (
            "Comparisons: signed-rank test with the Hodges-Lehmann estimate and its exact interval."
        ),
    ),
    Rule(
        "missing visits",
        "a subject lacks an occasion",
        lambda facts: facts.has_gaps,
        {},
        lambda facts: (
            f"Missing visits: {_incomplete(facts)} lack an occasion. The Skillings-Mack test, "
            "which takes their other values, stands beside; each comparison uses all who have both."
        ),
    ),
)

ALTERNATIVES: Mapping[str, str] = MappingProxyType(
    {
        "aligned_ranks": "winsorized_permutation, which estimates means with extremes pulled in",
        "friedman": "skillings_mack where visits are missing",
        "signed_rank": "sign_flip, whose estimate on logs is the ratio of geometric means",
        "sign_test": "signed_rank, with the range of its P over the substitutes",
    }
)


def decided(facts: Facts, keep: Collection[str] = ()) -> tuple[Rule, ...]:
    """Return the line that decides each part, in the order of the table.

    A part whose key is among those to keep is not decided here.
    """
    first: dict[str, Rule] = {}
    for rule in RULES:
        if rule.part not in first and rule.holds(facts):
            first[rule.part] = rule
    return tuple(rule for rule in first.values() if not set(rule.chooses) & set(keep))


def _slope_words(facts: Facts) -> str:
    if facts.figures is None or math.isnan(facts.figures.slope):
        return ""
    return (
        f"; here the spread within subjects grows as the level to the power "
        f"{fixed(facts.figures.slope, 2)} (1: in proportion, 0: not at all)"
    )


def _tail_words(facts: Facts) -> str:
    if facts.figures is None:
        return ""
    scale = facts.plan.used_scale
    found = facts.figures.shape.get(scale)
    if found is None or math.isnan(found.tail_weight):
        return ""
    return (
        f"; the tail weight of the subject-centred values on the {scale} scale is "
        f"{fixed(found.tail_weight, 2)} (normal 2.58)"
    )


def _incomplete(facts: Facts) -> str:
    missing = 0 if facts.figures is None else facts.figures.n_subjects - facts.figures.n_complete
    return f"{missing} of {counted(facts.n_subjects, 'subject')}"
