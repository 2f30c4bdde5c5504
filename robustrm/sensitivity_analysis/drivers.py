"""What brings two rows that disagree together: found by making both again, one change at a time.

Every candidate is tried, and all that hold are told. None is a proof of a reason: each is a change
with which the disagreement is gone.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from typing import Literal

from robustrm._format import declared, listing, percent
from robustrm.analysis import ALL_OCCASIONS, Row
from robustrm.methods.adjusting import TITLES
from robustrm.methods.registry import P_ADJUSTMENTS
from robustrm.methods.signed_rank import FRACTIONS
from robustrm.results import Scale
from robustrm.sensitivity_analysis.reading import (
    DIRECTIONS,
    Reading,
    alike,
    estimate_words,
    is_resolved,
    p_against,
    p_range_words,
    p_words,
    parts,
    reading_of,
    side_words,
    the,
)
from robustrm.sensitivity_analysis.repeats import Outcome, Recipe, Repeats
from robustrm.table.limits import SUBSTITUTES

Kind = Literal[
    "scale",
    "one subject",
    "any subject",
    "limit value",
    "who is in it",
    "adjustment",
    "another estimand",
    "other assumptions",
]


@dataclass(frozen=True, slots=True)
class Driver:
    """One change with which two rows read alike, or why there is none.

    Parameters
    ----------
    kind : str
        What was changed; ``"another estimand"`` or ``"other assumptions"`` where no change
        brought the rows together.
    sentence : str
        The change and the numbers after it.
    subjects : tuple of str
        Who was left out: each alone for ``"one subject"`` (at most half of all) and ``"any
        subject"`` (more), all at once for ``"who is in it"``.
    scales : tuple of str
        Scales on which one of the methods reads as the other row.
    fractions : tuple of float
        Shares of the limit that bring the rows together.
    p_values : tuple of (float, float)
        Unadjusted P of the planned and of the other row after each change.
    """

    kind: Kind
    sentence: str
    subjects: tuple[str, ...] = ()
    scales: tuple[Scale, ...] = ()
    fractions: tuple[float, ...] = ()
    p_values: tuple[tuple[float, float], ...] = ()


@dataclass(frozen=True, slots=True)
class Pair:
    """The planned row and one beside it that reads otherwise.

    `parted` is what the two readings part in.
    """

    planned: Row
    other: Row
    alpha: float

    @property
    def rows(self) -> tuple[Row, Row]:
        """Both rows, the planned one first."""
        return self.planned, self.other

    @property
    def recipes(self) -> tuple[Recipe, Recipe]:
        """How both rows were made."""
        return Recipe.of(self.planned), Recipe.of(self.other)

    @property
    def parted(self) -> tuple[str, ...]:
        """In what the two readings part."""
        return parts(*(reading_of(row, self.alpha) for row in self.rows))


Met = tuple[Row, Row]


def drivers_of(pair: Pair, repeats: Repeats) -> tuple[Driver, ...]:
    """Return every change that brings the rows together, else what the rows are about."""
    found = [driver for find in _CANDIDATES if (driver := find(pair, repeats)) is not None]
    return tuple(found) or (_neither(pair, repeats),)


# ── the candidates ────────────────────────────────────────────────────────────────────────


def _scale(pair: Pair, repeats: Repeats) -> Driver | None:
    """Set one method on the scale of the other row, and the other way about."""
    planned, other = pair.rows
    if planned.result.scale == other.result.scale:
        return None
    told, scales, p_values = [], [], []
    for place, (row, beside) in enumerate(((planned, other), (other, planned))):
        scale = beside.result.scale
        made = repeats.outcome(pair.recipes[place], scale=scale)
        moved = None if made is None else made.rows[row.label]
        if moved is None or not _are_alike(pair, (moved, beside)):
            continue
        told.append(
            f"on the {scale} scale {the(row.title)} gives {p_words(moved, pair.alpha)} and "
            f"reads as {the(beside.title)} does"
        )
        scales.append(scale)
        both = (moved, beside) if place == 0 else (beside, moved)
        p_values.append((both[0].result.p_value, both[1].result.p_value))
    if not told:
        return None
    return Driver(
        "scale", f"Scale: {'; '.join(told)}.", scales=tuple(scales), p_values=tuple(p_values)
    )


def _one_subject(pair: Pair, repeats: Repeats) -> Driver | None:
    """Name those without whom the rows read alike, where they are at most half of all."""
    ids, groups = _without_one(pair, repeats)
    few = [group for group in groups if 2 * len(group) <= len(ids)]
    if not few:
        return None
    told = []
    for group in few:
        share = f" ({len(group)} of {len(ids)} subjects)" if len(group) > 1 else ""
        together = _together_words(pair, list(group.values()))
        told.append(f"with {_anyone(list(group))} left out{share} {together}")
    return Driver(
        "one subject",
        f"One subject: {'; '.join(told)}.",
        subjects=tuple(subject for group in few for subject in group),
        p_values=tuple(p for group in few for p in _p_values(group.values())),
    )


def _any_subject(pair: Pair, repeats: Repeats) -> Driver | None:
    """Say so where the rows read alike whichever of most subjects is left out."""
    ids, groups = _without_one(pair, repeats)
    for group in groups:
        if 2 * len(group) > len(ids):
            together = _together_words(pair, list(group.values()))
            return Driver(
                "any subject",
                f"Any subject: with one of {len(group)} of the {len(ids)} subjects left out, "
                f"whichever it is, {together}. It hangs on nobody in particular.",
                subjects=tuple(group),
                p_values=_p_values(group.values()),
            )
    return None


def _without_one(pair: Pair, repeats: Repeats) -> tuple[list[str], list[dict[str, Met]]]:
    """Return everybody, and those without whom the rows read alike, by how they then read."""
    used = {subject for row in pair.rows for subject in row.result.subjects}
    ids = [subject for subject in repeats.table.subjects if subject in used]
    groups: dict[Reading, dict[str, Met]] = {}
    for subject in ids:
        made = [repeats.without(recipe, subject) for recipe in pair.recipes]
        both = _meet(pair, repeats, made)
        if both is not None:
            groups.setdefault(reading_of(both[0], pair.alpha), {})[subject] = both
    return ids, list(groups.values())


def _limit_value(pair: Pair, repeats: Repeats) -> Driver | None:
    """Enter other shares of the limit for the values below it."""
    groups: dict[Reading, dict[float, Met]] = {}
    for share in _shares(pair, repeats):
        made = [repeats.outcome(recipe, substitute=share) for recipe in pair.recipes]
        both = _meet(pair, repeats, made)
        if both is not None:
            groups.setdefault(reading_of(both[0], pair.alpha), {})[share] = both
    if not groups:
        return None
    told = []
    for group in groups.values():
        shares = _any_of([percent(share) for share in group])
        together = _together_words(pair, list(group.values()))
        told.append(f"with {shares} of the limit entered for a value below it, {together}")
    planned = percent(float(SUBSTITUTES[repeats.plan.substitute]))
    return Driver(
        "limit value",
        f"Limit value: {'; '.join(told)}. The plan enters {planned}.",
        fractions=tuple(share for group in groups.values() for share in group),
        p_values=tuple(p for group in groups.values() for p in _p_values(group.values())),
    )


def _who(pair: Pair, repeats: Repeats) -> Driver | None:
    """Take the subjects that both rows have."""
    common, left = _common(pair, repeats)
    if not left or not common:
        return None
    made = [repeats.outcome(recipe, subjects=common) for recipe in pair.recipes]
    both = _meet(pair, repeats, made)
    if both is None:
        return None
    sizes = " and ".join(str(row.result.n_subjects) for row in pair.rows)
    return Driver(
        "who is in it",
        f"Who is in it: the rows rest on {sizes} subjects; without {listing(left, 40)}, on the "
        f"{len(common)} that both have, {_together_words(pair, [both])}.",
        subjects=left,
        p_values=_p_values([both]),
    )


def _adjustment(pair: Pair, repeats: Repeats) -> Driver | None:
    """Compare the P values before adjustment, and adjust both rows alike where that can be."""
    if pair.parted != ("p_adjusted",):
        return None
    planned, other = pair.rows
    before = side_words(replace(reading_of(planned, pair.alpha), p_adjusted=None), pair.alpha)
    cells = [p_against(row.result.p_value, pair.alpha) for row in pair.rows]
    after = " and ".join(
        f"{_adjusted_by(row)} {p_against(row.p_adjusted, pair.alpha)}"
        for row in pair.rows
        if row.p_adjusted is not None
    )
    told = (
        f"Adjustment: before it both P values are {before} ({' and '.join(cells)}), after it one "
        f"alone ({after})."
    )
    if planned.adjust != other.adjust and {planned.adjust, other.adjust} <= _STEPWISE:
        made = repeats.outcome(replace(pair.recipes[1], adjust=planned.adjust))
        if made is not None and _are_alike(pair, (planned, made.rows[other.label])):
            same = made.rows[other.label]
            told += (
                f" Adjusted alike, by {_adjusted_by(planned)}, "
                f"{_together_words(pair, [(planned, same)])}."
            )
    return Driver("adjustment", told, p_values=_p_values([pair.rows]))


_STEPWISE = frozenset(P_ADJUSTMENTS) - {"none"}

_CANDIDATES: tuple[Callable[[Pair, Repeats], Driver | None], ...] = (
    _scale,
    _one_subject,
    _any_subject,
    _limit_value,
    _who,
    _adjustment,
)


def _neither(pair: Pair, repeats: Repeats) -> Driver:
    """Say that no change brings the rows together, and what each is about."""
    *tried, last = _tried(pair, repeats)
    planned, other = (row.result for row in pair.rows)
    head = f"They are not brought together by {f'{listing(tried)} or by ' if tried else ''}{last}."
    if planned.estimand == other.estimand:
        about = f"They rest on other assumptions: {planned.hypothesis} {other.hypothesis}"
        return Driver("other assumptions", f"{head} {about}")
    names = " and ".join(
        result.estimand if result.estimate is None else estimate_words(result.estimate)
        for result in (planned, other)
    )
    about = f"{names} are about different things, and both can be true."
    if pair.other.role == "sensitivity" and pair.planned.label != ALL_OCCASIONS:
        about = f"{names} are about the same only where the differences are symmetric, and both "
        about += "can be true."
    return Driver("another estimand", f"{head} Another estimand: {about}")


def _tried(pair: Pair, repeats: Repeats) -> Iterator[str]:
    if pair.planned.result.scale != pair.other.result.scale:
        yield "the other scale"
    if _shares(pair, repeats):
        yield "another share of the limit"
    if _common(pair, repeats)[1]:
        yield "the subjects that both have"
    yield "leaving any one subject out"


# ── what is compared, and on whom ─────────────────────────────────────────────────────────


def _meet(pair: Pair, repeats: Repeats, made: Sequence[Outcome | None]) -> Met | None:
    """Return both rows made again where they read alike, and not for lack of subjects."""
    found = []
    for recipe, again in zip(pair.recipes, made, strict=True):
        whole = repeats.outcome(recipe)
        if again is None or whole is None or _lost_reach(pair, again, whole):
            return None
        found.append(again.rows[pair.planned.label])
    both = (found[0], found[1])
    return both if _are_alike(pair, both) else None


def _are_alike(pair: Pair, both: Met) -> bool:
    resolved = all(is_resolved(row, pair.alpha) for row in both)
    first, second = (reading_of(row, pair.alpha) for row in both)
    return resolved and alike(first, second, pair.parted)


def _lost_reach(pair: Pair, made: Outcome, whole: Outcome) -> bool:
    """Say whether a P that could lie at or below the level no longer can: too few are left."""
    label, alpha = pair.planned.label, pair.alpha
    floors = {
        "p": (whole.floors[label], made.floors[label]),
        "p_adjusted": (whole.floor_adjusted, made.floor_adjusted),
    }
    parted = [floors[name] for name in pair.parted if name in floors]
    return any(before <= alpha < after for before, after in parted)


def _common(pair: Pair, repeats: Repeats) -> tuple[tuple[str, ...], tuple[str, ...]]:
    """Return who is in both rows, and who in one alone."""
    planned, other = (set(row.result.subjects) for row in pair.rows)
    ids = repeats.table.subjects
    return (
        tuple(s for s in ids if s in planned & other),
        tuple(s for s in ids if s in planned ^ other),
    )


def _shares(pair: Pair, repeats: Repeats) -> tuple[float, ...]:
    """Return the shares of the limit to try; none where no value lies below one."""
    common = repeats.table.recensored()
    if not common.below.any() or not any(recipe.takes_substitute for recipe in pair.recipes):
        return ()
    if (common.lower_limit[common.below] < 0).any():
        return ()  # a part of a negative limit lies above it
    planned = float(SUBSTITUTES[repeats.plan.substitute])
    return tuple(share for share in FRACTIONS if share != planned)


# ── words ─────────────────────────────────────────────────────────────────────────────────


def parted_words(pair: Pair) -> str:
    """Say in what the planned row and the other one part."""
    planned, other = (reading_of(row, pair.alpha) for row in pair.rows)
    level = declared(pair.alpha)
    told = []
    if "direction" in pair.parted:
        directions = DIRECTIONS[planned.direction], DIRECTIONS[other.direction]
        told.append(f"the first reads as {directions[0]}, the second as {directions[1]}")
    lone = {
        name: "first" if getattr(planned, name) else "second"
        for name in pair.parted
        if name != "direction"
    }
    if not lone and not planned.p and not other.p:
        told.append(f"neither P lies at or below {level}")
    if len(set(lone.values())) == 1 and len(lone) == 2:
        which = lone["p"]
        told.append(f"only the {which} lies at or below {level}, before and after adjustment")
    elif None in (planned.p_adjusted, other.p_adjusted):
        told += [f"only the {which} lies at or below {level}" for which in lone.values()]
    else:
        when = {"p": "before", "p_adjusted": "after"}
        told += [
            f"{when[name]} adjustment only the {which} lies at or below {level}"
            for name, which in lone.items()
        ]
    return "; ".join(told)


def _together_words(pair: Pair, met: Sequence[Met]) -> str:
    """Say how both rows read after a change, with their P values."""
    first, second = (reading_of(row, pair.alpha) for row in met[0])
    told = []
    if "direction" in pair.parted:
        told.append(f"read as {DIRECTIONS[first.direction]}")
    if second.p_adjusted is None:
        first = replace(first, p_adjusted=None)
    if set(pair.parted) != {"direction"}:
        told.append(f"lie {side_words(first, pair.alpha)}")
    if len(met) == 1:
        numbers = " and ".join(p_words(row, pair.alpha) for row in met[0])
    else:
        columns = zip(*_p_values(met), strict=True)
        numbers = " and ".join(p_range_words(column, pair.alpha) for column in columns)
    return f"both {' and '.join(told)}: {numbers}"


def _p_values(met: Iterable[Met]) -> tuple[tuple[float, float], ...]:
    return tuple((first.result.p_value, second.result.p_value) for first, second in met)


def _anyone(ids: Sequence[str]) -> str:
    return ids[0] if len(ids) == 1 else f"any one of {_any_of(ids)}"


def _any_of(words: Sequence[str]) -> str:
    *head, last = words
    return f"{', '.join(head)} or {last}" if head else last


def _adjusted_by(row: Row) -> str:
    return TITLES[row.adjust or "none"]
