"""The rows of the table about limits, and the bounds that need the order of the values alone."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import replace
from typing import Any

from robustrm.analysis import ALL_OCCASIONS, stream
from robustrm.methods.friedman import friedman
from robustrm.methods.sign_test import sign_test
from robustrm.methods.signed_rank import signed_rank
from robustrm.plan import Plan
from robustrm.results import Estimate, TestResult
from robustrm.sensitivity_analysis.likelihood import LikelihoodContrast
from robustrm.sensitivity_analysis.limits_entering import Counts, is_divisible
from robustrm.sensitivity_analysis.limits_orders import (
    Bounds,
    friedman_bounds,
    sign_bounds,
    signed_rank_bounds,
)
from robustrm.sensitivity_analysis.limits_substitutes import Range, changes_words, role_of
from robustrm.sensitivity_analysis.limits_words import bounds_sentence
from robustrm.table import OccasionTable

COLUMNS = (
    "label", "first", "second", "method", "varied", "role", "scale", "estimand", "n", "estimate",
    "low", "high", "level", "unit", "p", "p_adjusted", "adjust", "estimate_lowest",
    "estimate_highest", "p_lowest", "p_highest", "p_adjusted_lowest", "p_adjusted_highest",
    "changes", "changes_below", "changes_above", "n_open",
)  # fmt: skip
ANY_VALUE = "any value beyond its own limit"
ANY_ORDER = "any order"
TIED = "any order, values beyond one limit tied"
LIKELIHOOD = "no substitute"
TOO_MANY_ORDERS = "the open orders are too many to be followed, so no bounds are given."


def bound_rows(
    scaled: OccasionTable, plan: Plan, counts: Sequence[Counts], root: int
) -> Iterator[tuple[dict[str, Any], str]]:
    """Yield rows and sentences of what holds whatever the values beyond their own limits are."""
    for count in counts:
        if count.is_touched and count.pair is not None:
            yield from _pair_bounds(scaled, plan, count.pair, mostly=count.mostly_beyond)
    complete = scaled.complete().by_content()
    if complete.censored.any():
        yield from _overall_bounds(complete, plan, root)


def _pair_bounds(
    scaled: OccasionTable, plan: Plan, names: tuple[str, str], *, mostly: bool
) -> Iterator[tuple[dict[str, Any], str]]:
    pair = scaled.select(occasions=names).complete().by_content()
    found = signed_rank_bounds(pair, alternative=plan.alternative, zeros=plan.zeros)
    if mostly:
        found = replace(found, estimate=None)
    planned = signed_rank(
        scaled,
        *names,
        alternative=plan.alternative,
        zeros=plan.zeros,
        substitute=plan.substitute if is_divisible(pair.recensored()) else "limit",
        level=plan.level,
    )
    yield _bound(planned, names, ANY_VALUE, found, plan)
    planned = sign_test(scaled, *names, alternative=plan.alternative, level=plan.level)
    for what, tied in ((TIED, True), (ANY_ORDER, False)):
        found = sign_bounds(pair, tied=tied, alternative=plan.alternative)
        yield _bound(planned, names, what, found, plan)


def _overall_bounds(
    complete: OccasionTable, plan: Plan, root: int
) -> Iterator[tuple[dict[str, Any], str]]:
    planned = friedman(complete, draws=plan.stages, rng=stream(root, "friedman"))
    for what, tied in ((TIED, True), (ANY_ORDER, False)):
        found = friedman_bounds(complete, tied=tied, rng=stream(root, "friedman"))
        if found is None:
            yield _row(planned, None, what, plan), f"{ALL_OCCASIONS}, {what}: {TOO_MANY_ORDERS}"
        else:
            yield _bound(planned, None, what, found, plan)


def _bound(
    planned: TestResult, pair: tuple[str, str] | None, varied: str, bounds: Bounds, plan: Plan
) -> tuple[dict[str, Any], str]:
    alpha = plan.alpha
    row = _row(planned, pair, varied, plan)
    row |= {
        "p_lowest": bounds.p[0],
        "p_highest": bounds.p[1],
        "changes": changes_words(set(_open(planned, bounds, alpha))),
        "n_open": bounds.n_open,
    }
    if bounds.estimate is not None:
        row |= {"estimate_lowest": bounds.estimate[0], "estimate_highest": bounds.estimate[1]}
    if varied == TIED and not bounds.n_open:  # said once, of every order
        return row, ""
    return row, bounds_sentence(row["label"], planned, varied, bounds, plan, row["changes"])


def _open(planned: TestResult, bounds: Bounds, alpha: float) -> Iterator[str]:
    """Yield what of the reading is not the same at both ends."""
    estimate = planned.estimate
    if estimate is not None and bounds.estimate is not None:
        low, high = bounds.estimate
        if low < estimate.neutral < high:
            yield "direction"
    if (bounds.p[0] <= alpha) != (bounds.p[1] <= alpha):
        yield "p"


def _row(
    planned: TestResult, pair: tuple[str, str] | None, varied: str, plan: Plan
) -> dict[str, Any]:
    """Return a row with the planned result, its ends still empty."""
    label = ALL_OCCASIONS if pair is None else f"{pair[1]} vs {pair[0]}"
    estimate = planned.estimate
    first, second = pair or (None, None)
    return dict.fromkeys(COLUMNS, math.nan) | {
        "label": label,
        "first": first,
        "second": second,
        "method": planned.method,
        "varied": varied,
        "role": role_of(plan, planned.method),
        "scale": planned.scale,
        "estimand": planned.estimand,
        "n": planned.n_subjects,
        "unit": None if estimate is None else estimate.unit,
        "p": planned.p_value,
        "adjust": "none",
        "changes": "",
        **_estimate_fields(estimate),
    }


def _estimate_fields(estimate: Estimate | None) -> dict[str, Any]:
    if estimate is None:
        return {}
    return {
        "estimate": estimate.value,
        "low": estimate.low,
        "high": estimate.high,
        "level": estimate.level,
    }


def range_row(found: Range, plan: Plan) -> dict[str, Any]:
    """Return the row of a range."""
    planned = found.planned
    return _row(planned.result, found.pair, found.varied, plan) | {
        "p_adjusted": math.nan if planned.p_adjusted is None else planned.p_adjusted,
        "adjust": planned.adjust or "none",
        "role": planned.role,
        "estimate_lowest": found.estimate[0],
        "estimate_highest": found.estimate[1],
        "p_lowest": found.p[0],
        "p_highest": found.p[1],
        "p_adjusted_lowest": found.p_adjusted[0],
        "p_adjusted_highest": found.p_adjusted[1],
        "changes": found.changes,
        "changes_below": found.changes_below,
        "changes_above": found.changes_above,
    }


def likelihood_row(contrast: LikelihoodContrast) -> dict[str, Any]:
    """Return the row of a contrast by likelihood."""
    return dict.fromkeys(COLUMNS, math.nan) | {
        "label": contrast.label,
        "first": contrast.first,
        "second": contrast.second,
        "method": "likelihood",
        "varied": LIKELIHOOD,
        "role": contrast.role,
        "scale": contrast.scale,
        "estimand": contrast.estimand,
        "n": contrast.n_subjects,
        "unit": None,
        "p": contrast.p_value,
        "p_adjusted": contrast.p_adjusted,
        "adjust": contrast.adjust,
        "changes": "",
        **_estimate_fields(contrast.estimate),
    }
