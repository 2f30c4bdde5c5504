"""The planned contrasts and the overall test with other choices of subjects, side by side."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from robustrm._format import capital, counted, declared, listing, number, p_cell, p_phrase
from robustrm.analysis import ALL_OCCASIONS, Row, family_of, overall
from robustrm.errors import TooFewError
from robustrm.methods.adjusting import TITLES
from robustrm.methods.registry import P_ADJUSTMENTS, in_sentence
from robustrm.methods.registry import method as registered
from robustrm.plan import Plan
from robustrm.records.natural import natural_key
from robustrm.results import Estimate, Note, Role, TestResult
from robustrm.sensitivity_analysis.likelihood import likelihood_contrasts
from robustrm.sensitivity_analysis.reading import (
    DIRECTIONS,
    Reading,
    direction_of,
    estimate_words,
    parts,
    side_words,
)
from robustrm.table import OccasionTable

ROW_COLUMNS = (
    "label", "first", "second", "subjects_used", "method", "estimand", "scale", "role", "n",
    "estimate", "low", "high", "level", "p", "p_adjusted", "adjust", "p_low", "p_high",
    "placements", "assumption",
)  # fmt: skip

COMPLETE = "complete cases"
AVAILABLE = "all available pairs"
LIKELIHOOD = "likelihood under missing at random"
TWO_OR_MORE = "subjects with two or more occasions"

UNRELATED = "gaps have nothing to do with the values, measured or missing"
AT_RANDOM = "gaps may go with measured values, not with the missing ones; a normal model"


@dataclass(frozen=True, slots=True)
class Compared:
    """One contrast with one choice of subjects.

    Parameters
    ----------
    first, second : str
        Occasions.
    used : str
        Which subjects enter.
    method, estimand, scale, role : str
        As in a row of an analysis.
    n : int
        Subjects behind it.
    estimate : Estimate or None
        Estimate with its interval.
    p, p_adjusted : float
        p value alone, and over its family; NaN where there is none.
    adjust : str
        Adjustment over the family.
    assumption : str
        What it asks of the gaps.
    subjects : tuple of str
        Identifiers, where they are known.
    """

    first: str
    second: str
    used: str
    method: str
    estimand: str
    scale: str
    role: str
    n: int
    estimate: Estimate | None
    p: float
    p_adjusted: float
    adjust: str
    assumption: str
    subjects: tuple[str, ...] = ()

    @property
    def label(self) -> str:
        """The pair in words, later occasion first."""
        return f"{self.second} vs {self.first}"

    def reading(self, alpha: float) -> Reading:
        """Return how it reads at a level."""
        after = math.nan if self.adjust == "none" else self.p_adjusted
        return reading_at(direction_of(self.estimate), self.p, after, alpha)

    @property
    def is_tested(self) -> bool:
        """Whether there is a p value."""
        return not math.isnan(self.p)

    def row(self) -> dict[str, Any]:
        """Return the unrounded row of the frame."""
        e = self.estimate
        fields = {name: getattr(self, name) for name in ROW_COLUMNS if hasattr(self, name)}
        return {
            **empty_row(),
            **fields,
            "subjects_used": self.used,
            "estimate": math.nan if e is None else e.value,
            "low": math.nan if e is None else _or_nan(e.low),
            "high": math.nan if e is None else _or_nan(e.high),
            "level": math.nan if e is None else _or_nan(e.level),
        }


def empty_row() -> dict[str, Any]:
    """Return a row of the frame with nothing in it."""
    words = ("label", "first", "second", "subjects_used", "method", "estimand", "scale", "role",
             "adjust", "assumption")  # fmt: skip
    return {name: None if name in words else math.nan for name in ROW_COLUMNS}


def _or_nan(value: float | None) -> float:
    return math.nan if value is None else value


def reading_at(direction: int | None, p: float, p_adjusted: float, alpha: float) -> Reading:
    """Return a reading of numbers that do not stand in a row of an analysis."""
    sides = (None if math.isnan(value) else value <= alpha for value in (p, p_adjusted))
    return Reading(direction, *sides)


def pair_method(plan: Plan) -> tuple[str, str]:
    """Return method and adjustment by which a pair can be read alone.

    Those of the plan where its test takes one pair at a time. A test of the whole family at
    once takes complete rows only, and nothing could be compared with available pairs: then the
    sign flip where the plan has it, else the signed-rank test, with Holm's adjustment.
    """
    alone = registered(plan.pair).kind == "pair"
    if alone and plan.adjust in P_ADJUSTMENTS:
        return plan.pair, plan.adjust
    return (plan.pair if alone else "signed_rank"), "holm"


def is_planned(plan: Plan) -> bool:
    """Say whether the planned contrasts are read one pair at a time."""
    return pair_method(plan) == (plan.pair, plan.adjust)


def contrasts(table: OccasionTable, plan: Plan, root: int, used: str) -> list[Compared]:
    """Return the planned contrasts of the complete cases, or of all available pairs.

    `table` is on the scale of the plan.
    """
    name, adjust = pair_method(plan)
    kept = table.complete() if used == COMPLETE else table
    role = role_of(plan, name)
    if role == "sensitivity" and is_planned(plan):
        planned = COMPLETE if plan.missing == "complete" else AVAILABLE
        role = "primary" if used == planned else role
    return [
        Compared(
            first=c.first,
            second=c.second,
            used=used,
            method=name,
            estimand=c.result.estimand,
            scale=c.result.scale,
            role=role,
            n=c.result.n_subjects,
            estimate=c.estimate,
            p=c.p_value,
            p_adjusted=c.p_adjusted,
            adjust=adjust,
            assumption=UNRELATED,
            subjects=c.result.subjects,
        )
        for c in family_of(kept, plan, name, adjust, root)
    ]


def role_of(plan: Plan, name: str) -> Role:
    """Return the role of a contrast by one method beside the planned ones."""
    return "sensitivity" if name == plan.pair else "supplementary"


def likelihood_rows(table: OccasionTable, plan: Plan) -> tuple[list[Compared], list[Note]]:
    """Return the contrasts by the likelihood of all measured values, and what it notes.

    `table` is on the raw scale.
    """
    found = likelihood_contrasts(table, plan)
    rows = [
        Compared(
            first=c.first,
            second=c.second,
            used=LIKELIHOOD,
            method="likelihood",
            estimand=c.estimand,
            scale=c.scale,
            role=c.role,
            n=c.n_subjects,
            estimate=c.estimate,
            p=c.p_value,
            p_adjusted=c.p_adjusted,
            adjust=c.adjust,
            assumption=AT_RANDOM,
        )
        for c in found
    ]
    return rows, list(dict.fromkeys(note for c in found for note in c.notes))


# ── all occasions ─────────────────────────────────────────────────────────────────────────


def overall_rows(table: OccasionTable, plan: Plan, root: int) -> tuple[list[Row], list[Note]]:
    """Return the overall tests: planned, by ranks on complete rows, and on incomplete ones."""
    rows: list[Row] = []
    notes: list[Note] = []
    for name in dict.fromkeys((plan.omnibus, "friedman", "skillings_mack")):
        role: Role = "supporting" if name == plan.omnibus else "supplementary"
        if name == "skillings_mack" and plan.omnibus == "friedman":
            role = "sensitivity"  # the same statistic where nobody lacks an occasion
        try:
            rows.append(Row(role, ALL_OCCASIONS, overall(table, plan, name, root)))
        except TooFewError as error:
            notes.append(Note("no overall test", str(error)))
    return rows, notes


def overall_row(row: Row) -> dict[str, Any]:
    """Return the unrounded row of an overall test for the frame."""
    r = row.result
    return {
        **empty_row(),
        "label": row.label,
        "subjects_used": TWO_OR_MORE if r.method == "skillings_mack" else COMPLETE,
        "method": r.method,
        "estimand": r.estimand,
        "scale": r.scale,
        "role": row.role,
        "n": r.n_subjects,
        "p": r.p_value,
        "assumption": UNRELATED,
    }


def overall_sentences(rows: Sequence[Row], alpha: float) -> list[str]:
    """Compare Friedman's test on complete cases with the test for incomplete ones."""
    found = {row.result.method: row.result for row in rows}
    whole, gaps = found.get("friedman"), found.get("skillings_mack")
    if whole is None or gaps is None:
        told = [f"{_test_words(r)} alone could be made over all occasions" for r in found.values()]
        return [f"{sentence}." for sentence in told[:1]]
    one, other = (reading_at(None, r.p_value, math.nan, alpha) for r in (whole, gaps))
    both = f"{_test_words(whole)} on complete cases and {_test_words(gaps)} on everybody with two "
    both += "or more occasions"
    if parts(one, other):
        return [f"All occasions: {both} lie on different sides of {declared(alpha)}."]
    return [f"All occasions: {both} read alike, P {side_words(one, alpha)}."]


def _test_words(result: TestResult) -> str:
    title = in_sentence(registered(result.method).title)
    return f"the {title} (n = {result.n_subjects}; {p_phrase(result.p_value)})"


# ── what differs, and with whom ───────────────────────────────────────────────────────────


def contrast_sentences(
    table: OccasionTable, plan: Plan, root: int, rows: Sequence[Compared]
) -> list[str]:
    """Say for every contrast whether the choices of subjects read alike, and who parts them."""
    sentences = []
    for label in dict.fromkeys(row.label for row in rows):
        own = [row for row in rows if row.label == label]
        told = [(row, row.reading(plan.alpha)) for row in own]
        parted = {
            part for i, (_, a) in enumerate(told) for _, b in told[i + 1 :] for part in parts(a, b)
        }
        if not parted:
            sentences.append(_alike(label, told, plan.alpha))
            continue
        sentences.append(_apart(label, told, plan.alpha))
        sentences.extend(_who(table, plan, root, own))
    return sentences


def _alike(label: str, told: Sequence[tuple[Compared, Reading]], alpha: float) -> str:
    numbers = capital(listing([_numbers(row) for row, _ in told]))
    tested = [reading for row, reading in told if row.is_tested]
    if not tested:
        return f"{label} cannot be tested: {numbers}."
    far = "" if len(tested) == len(told) else ", as far as they are tested"
    return f"{numbers} read alike for {label}{far}: {_reading_words(tested[0], alpha)}."


def _apart(label: str, told: Sequence[tuple[Compared, Reading]], alpha: float) -> str:
    each = [
        f"{_numbers(row)}: {_reading_words(reading, alpha)}" if row.is_tested else _numbers(row)
        for row, reading in told
    ]
    return f"{label} reads differently. {'. '.join(map(capital, each))}."


def _numbers(row: Compared) -> str:
    lead = "the " if row.used == LIKELIHOOD else ""
    size = "no estimate" if row.estimate is None else estimate_words(row.estimate)
    words = p_phrase(row.p) if row.is_tested else "not tested"
    if row.is_tested and row.adjust != "none":
        words += f" ({TITLES[row.adjust]} {p_cell(row.p_adjusted)})"
    return f"{lead}{row.used} (n = {row.n}; {size}, {words})"


def _reading_words(reading: Reading, alpha: float) -> str:
    return f"{DIRECTIONS[reading.direction]}, P {side_words(reading, alpha)}"


def _who(table: OccasionTable, plan: Plan, root: int, rows: Sequence[Compared]) -> Iterable[str]:
    """Say whom one choice has and the other has not, and which of them alone turns the reading."""
    found = {row.used: row for row in rows}
    whole, pairs = found[COMPLETE], found[AVAILABLE]
    extra = sorted(set(pairs.subjects) - set(whole.subjects), key=natural_key)
    if parts(whole.reading(plan.alpha), pairs.reading(plan.alpha)):
        yield _extra_words(table, plan, pairs, extra)
        more_than_one = extra if len(extra) > 1 else ()
        alone = [s for s in more_than_one if _turns_without(table, plan, root, whole, pairs, s)]
        if alone:
            who = listing(alone)
            yield (
                f"Without {who} {'alone' if len(alone) == 1 else '(each alone)'} the available "
                f"pairs read as the complete cases."
            )
    model = found.get(LIKELIHOOD)
    if model is not None and parts(pairs.reading(plan.alpha), model.reading(plan.alpha)):
        more = model.n - pairs.n
        whom = (
            f"Beside the available pairs it uses {counted(more, 'more subject')} through the "
            "values they have at other occasions"
            if more > 0
            else "It uses the same subjects as the available pairs"
        )
        yield (f"The likelihood is about geometric means under a normal model of the logs. {whom}.")


def _extra_words(table: OccasionTable, plan: Plan, pairs: Compared, extra: Sequence[str]) -> str:
    if not extra:
        return (
            f"For {pairs.label} both rest on the same subjects: P parts through the adjustment "
            "over the other contrasts."
        )
    own = table.select(subjects=extra).pair(pairs.first, pairs.second).substitute(plan.substitute)
    gaps, _ = own.paired(pairs.first, pairs.second)
    sizes = np.exp(gaps.values) if table.scale == "log" else gaps.values
    fell, rose = int((gaps.signs < 0).sum()), int((gaps.signs > 0).sum())
    what = "ratio" if table.scale == "log" else "difference"
    what += "s" if len(extra) > 1 else ""
    shown = listing([number(float(size)) for size in np.sort(sizes).tolist()], limit=12)
    return (
        f"What parts them is {counted(len(extra), 'subject')} with both occasions who "
        f"{'lacks' if len(extra) == 1 else 'lack'} another: {listing(extra, limit=12)} "
        f"({what} {shown}; {fell} fell, {rose} rose)."
    )


def _turns_without(
    table: OccasionTable, plan: Plan, root: int, whole: Compared, pairs: Compared, subject: str
) -> bool:
    """Whether the available pairs without one subject read as the complete cases."""
    kept = table.select(subjects=[s for s in table.subjects if s != subject])
    again = next(c for c in contrasts(kept, plan, root, AVAILABLE) if c.label == pairs.label)
    return not parts(whole.reading(plan.alpha), again.reading(plan.alpha))
