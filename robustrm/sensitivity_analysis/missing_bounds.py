"""Missing values at either end of the ranks: how far P can go whatever they were."""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from robustrm._format import counted, declared, p_range
from robustrm.analysis import ALL_OCCASIONS, offered, stream
from robustrm.methods.additive import AdditiveProblem, NullOptions
from robustrm.methods.follow_up import declared_pairs
from robustrm.methods.null_distribution import problem_of
from robustrm.methods.registry import in_sentence
from robustrm.methods.registry import method as registered
from robustrm.plan import Plan
from robustrm.sensitivity_analysis.missing_rows import empty_row, role_of
from robustrm.table import OccasionTable
from robustrm.ties import Floats

MOST_PLACEMENTS = 1_000
"""Placements of single values that are looked at; with more, those of an occasion go together."""
MOST_LAWS = 24
"""Null distributions that are computed for them."""

ENDS = "each missing value at one of its two ends"
TOGETHER = "the missing values of an occasion at one end together"
NOTHING_ASKED = "none on the gaps"


@dataclass(frozen=True, slots=True)
class Bounds:
    """Lowest and highest P of one test over the placements of the missing values.

    Parameters
    ----------
    label : str
        What is compared.
    pair : tuple of str or None
        The occasions; None for all of them.
    method, role : str
        As in a row of an analysis.
    n, n_placed : int
        Subjects, and those of them with a value that is placed.
    low, high : float
        Lowest and highest p value.
    placements : int
        Placements that differ.
    how : str
        What is placed.
    """

    label: str
    pair: tuple[str, str] | None
    method: str
    role: str
    n: int
    n_placed: int
    low: float
    high: float
    placements: int
    how: str = ENDS

    def row(self, scale: str) -> dict[str, Any]:
        """Return the unrounded row of the frame."""
        first, second = self.pair or (None, None)
        return {
            **empty_row(),
            "label": self.label,
            "first": first,
            "second": second,
            "subjects_used": f"everybody with a value, {self.how}",
            "method": self.method,
            "estimand": _ESTIMANDS[self.method],
            "scale": scale,
            "role": self.role,
            "n": self.n,
            "adjust": "none",
            "p_low": self.low,
            "p_high": self.high,
            "placements": self.placements,
            "assumption": NOTHING_ASKED,
        }


_ESTIMANDS = {
    "signed_rank": "consistency of direction, by ranks of the sizes",
    "sign_test": "probability of a fall",
    "friedman": "consistency of the rank order of the occasions within subjects",
}


def rank_bounds(table: OccasionTable, plan: Plan, root: int) -> list[Bounds]:
    """Return lowest and highest P of the pairs by signs and signed ranks, and of all occasions.

    `table` is on the scale of the plan. Somebody without any value is not placed.
    """
    kept = [s for s, row in zip(table.subjects, table.missing, strict=True) if not row.all()]
    used = table.select(subjects=kept) if kept else table
    found: list[Bounds] = []
    for first, second in declared_pairs(table, plan.contrasts, "contrasts"):
        if used.select(occasions=(first, second)).missing.any():
            found.extend(_of_pair(used, plan, root, (first, second)))
    if used.missing.any() and used.n_occasions > 2:
        found.append(_of_all(used, plan, root))
    return found


# ── two occasions ─────────────────────────────────────────────────────────────────────────


def _of_pair(
    table: OccasionTable, plan: Plan, root: int, pair: tuple[str, str]
) -> Iterator[Bounds]:
    """Yield the bounds of one pair.

    A missing difference is a rise or a fall of the largest size, so that all that matters is how
    many of them rise.
    """
    known = table.pair(*pair)
    n_placed = table.n_subjects - known.n_subjects
    codes = known.order_codes()
    gaps, _ = known.substitute(plan.substitute).paired(*pair)
    steps = {
        "signed_rank": gaps.sizes * gaps.signs,  # codes of the sizes: their ranks are the same
        "sign_test": np.sign(codes[:, 1] - codes[:, 0]),
    }
    for name, changes in steps.items():
        end = float(np.abs(changes).max(initial=0)) + 1
        p_values = [
            _p_of_changes(
                [*changes.tolist(), *[end] * up, *[-end] * (n_placed - up)], name, plan, root
            )
            for up in range(n_placed + 1)
        ]
        yield Bounds(
            label=f"{pair[1]} vs {pair[0]}",
            pair=pair,
            method=name,
            role=role_of(plan, name),
            n=table.n_subjects,
            n_placed=n_placed,
            low=min(p_values),
            high=max(p_values),
            placements=len(p_values),
        )


def _p_of_changes(changes: Sequence[float], name: str, plan: Plan, root: int) -> float:
    table = OccasionTable.from_array([[0.0, c] for c in changes], occasions=("first", "second"))
    given = offered(plan, name, (plan.alpha,), root)
    taken = {key: given[key] for key in ("alternative", "zeros") if key in given}
    problem = problem_of(table, name, first="first", second="second", **taken)
    return _p_of(problem, plan, root)


def _p_of(problem: AdditiveProblem, plan: Plan, root: int) -> float:
    options = NullOptions(
        draws=plan.stages[:1], thresholds=(plan.alpha,), rng=stream(root, "missing at the ends")
    )
    return problem.tail(options).tail.p_value


# ── all occasions ─────────────────────────────────────────────────────────────────────────

Ends = tuple[bool, ...]  # of the missing cells of one subject: True where highest


def _of_all(table: OccasionTable, plan: Plan, root: int) -> Bounds:
    """Return the bounds of Friedman's test.

    Subjects who lack the same occasions and have the same ties add the same to the rank sums,
    wherever their missing cells go: it is enough to count how many of them go where.
    """
    codes = table.recensored().order_codes()
    groups = _alike(codes)
    how = ENDS
    placed: Iterator[Floats] = _placed_singly(codes, groups)
    if _count(groups) > MOST_PLACEMENTS:
        how, placed = TOGETHER, _placed_together(codes)
    laws, count = _by_law(placed, table.occasions)
    if len(laws) > MOST_LAWS and how == ENDS:
        how = TOGETHER
        laws, count = _by_law(_placed_together(codes), table.occasions)
    extremes = [problem for law in laws.values() for problem in _ends_of(law)]
    p_values = [_p_of(problem, plan, root) for problem in extremes]
    return Bounds(
        label=ALL_OCCASIONS,
        pair=None,
        method="friedman",
        role="sensitivity" if plan.omnibus == "friedman" else "supplementary",
        n=table.n_subjects,
        n_placed=int(table.missing.any(axis=1).sum()),
        low=min(p_values),
        high=max(p_values),
        placements=count,
        how=how,
    )


def _alike(codes: Floats) -> list[tuple[list[int], int]]:
    """Return subjects in groups of one pattern and the same ties, with their number of gaps."""
    found: dict[tuple[Any, ...], list[int]] = {}
    for i, row in enumerate(codes):
        gaps = np.isnan(row)
        _, counts = np.unique(row[~gaps], return_counts=True)
        if gaps.any():
            found.setdefault((tuple(gaps.tolist()), tuple(counts.tolist())), []).append(i)
    return [(members, sum(key[0])) for key, members in found.items()]


def _count(groups: Sequence[tuple[list[int], int]]) -> int:
    """Count the placements: of m subjects with q gaps, how many go to each of 2^q places."""
    return math.prod(
        math.comb(len(members) + 2**gaps - 1, len(members)) for members, gaps in groups
    )


def _placed_singly(codes: Floats, groups: Sequence[tuple[list[int], int]]) -> Iterator[Floats]:
    choices = []
    for members, gaps in groups:
        places = list(itertools.product((False, True), repeat=gaps))
        choices.append(itertools.combinations_with_replacement(places, len(members)))
    for chosen in itertools.product(*choices):
        filled = codes.copy()
        for (members, _), ends in zip(groups, chosen, strict=True):
            for i, end in zip(members, ends, strict=True):
                filled[i, np.isnan(codes[i])] = _at(codes, end)
        yield filled


def _placed_together(codes: Floats) -> Iterator[Floats]:
    gaps = np.isnan(codes)
    columns = np.flatnonzero(gaps.any(axis=0)).tolist()
    free = columns if 2 ** len(columns) <= MOST_PLACEMENTS else columns[:1]
    for chosen in itertools.product((False, True), repeat=len(free)):
        ends = dict(zip(free, chosen, strict=True))
        row = _at(codes, tuple(ends.get(j, chosen[0]) for j in range(codes.shape[1])))
        yield np.where(gaps, row, codes)


def _at(codes: Floats, end: Ends) -> Floats:
    """Return codes below or above everything measured."""
    return np.where(end, np.nanmax(codes) + 1, np.nanmin(codes) - 1)


def _by_law(
    placed: Iterator[Floats], occasions: Sequence[str]
) -> tuple[dict[Any, list[AdditiveProblem]], int]:
    """Keep, for every null distribution that occurs, the smallest and the largest statistic.

    Within one null distribution P falls as the statistic rises, so the others cannot matter.
    """
    laws: dict[Any, list[AdditiveProblem]] = {}
    count = 0
    for cells in placed:
        count += 1
        problem = problem_of(OccasionTable.from_array(cells, occasions=occasions), "friedman")
        law = tuple(sorted(tuple(sorted(row)) for row in problem.scores.tolist()))
        laws[law] = _ends_of([*laws.get(law, []), problem])
    return laws, count


def _ends_of(problems: Sequence[AdditiveProblem]) -> list[AdditiveProblem]:
    ordered = sorted(problems, key=lambda problem: problem.observed_statistic)
    return [ordered[0], ordered[-1]] if len(ordered) > 1 else ordered


# ── in words ──────────────────────────────────────────────────────────────────────────────


def bounds_sentences(bounds: Sequence[Bounds], alpha: float) -> list[str]:
    """Say how far P goes, and whether it can cross the level."""
    sentences = []
    by_label: dict[str, dict[str, Bounds]] = {}
    for found in bounds:
        by_label.setdefault(found.label, {})[found.method] = found
    for label, tests in by_label.items():
        known = next(iter(tests.values()))
        told = "; ".join(_range_words(found, alpha) for found in tests.values())
        where = "All occasions" if known.pair is None else label
        before = "" if known.pair is None else " before adjustment"
        sentences.append(
            f"{where}, {known.how}, lowest or highest ({counted(known.n_placed, 'subject')} of "
            f"{known.n} with a gap): from the best to the worst ranks, P{before} is {told}."
        )
    return sentences


def _range_words(found: Bounds, alpha: float) -> str:
    title = in_sentence(registered(found.method).title)
    sides = frozenset({bool(found.low <= alpha), bool(found.high <= alpha)})
    level = declared(alpha)
    where = {
        frozenset({True}): f"at or below {level} throughout",
        frozenset({False}): f"above {level} throughout",
    }.get(sides, f"on both sides of {level}")
    span = p_range(found.low, found.high).removeprefix("P ").removeprefix("= ")
    return f"{span} by the {title} ({where})"
