"""Sentences about subjects left out in turn: what holds whoever it is, and what does not."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from robustrm._format import (
    counted,
    declared,
    listing,
    number,
    number_range,
    p_phrase,
)
from robustrm.methods.adjusting import TITLES
from robustrm.sensitivity_analysis.influence import Influence, Without, value_of
from robustrm.sensitivity_analysis.reading import (
    ADJUSTING,
    DIRECTIONS,
    Reading,
    direction_of,
    method_words,
    numbers_words,
    p_against,
    p_range_words,
    p_words,
    reading_of,
    side_words,
)


def lead_sentence(found: Sequence[Influence]) -> str:
    """Say in which planned contrasts the reading holds whoever is left out."""
    planned = [influence for influence in found if influence.row.role == "primary"]
    steady = [i.row.label for i in planned if i.holds]
    changing = [i.row.label for i in planned if i.changing]
    unknown = [i.row.label for i in planned if not i.holds and not i.changing]
    size = counted(len(planned), "planned contrast")
    parts = [f"The reading holds whichever subject is left out in {len(steady)} of {size}"]
    if steady and len(steady) < len(planned):
        parts[0] += f" ({listing(steady, 20)})"
    if changing:
        parts.append(f"it changes in {listing(changing, 20)}")
    if unknown:
        parts.append(f"it cannot be told in {listing(unknown, 20)}")
    return f"{'; '.join(parts)}."


def influence_sentence(influence: Influence) -> str:
    """Return everything about one analysis of one comparison."""
    row, alpha = influence.row, influence.alpha
    head = (
        f"{row.label}, {method_words(row)}: {numbers_words(row, alpha)} with everybody; with one "
        f"subject left out {_ranges(influence)}."
    )
    told = [head, *_held(influence), *_changed(influence), *_lost(influence), *_most(influence)]
    return " ".join(told)


def _ranges(influence: Influence) -> str:
    alpha = influence.alpha
    told = []
    if influence.row.result.estimate is not None:
        ends = number_range(*influence.range_of("estimate"))
        told.append(f"the estimate lies {'from' if ' to ' in ends else 'at'} {ends}")
    values = p_range_words(influence.range_of("p"), alpha)
    adjust = influence.row.adjust
    if influence.row.p_adjusted is not None and adjust in ADJUSTING:
        low, high = (p_against(p, alpha) for p in influence.range_of("p_adjusted"))
        values += f" ({TITLES[adjust]} {low if low == high else f'{low} to {high}'})"
    return ", ".join([*told, values])


def _held(influence: Influence) -> list[str]:
    """Say what holds whoever is left out."""
    lost = {name for without in influence.changing for name in without.changes}
    lost |= set(influence.out_of_reach)
    reading = reading_of(influence.row, influence.alpha)
    held = []
    if "direction" not in lost and reading.direction in (-1, 1):
        met = {direction_of(row.result.estimate) for _, row in influence.made}
        one_way = met == {reading.direction}
        held.append(
            f"it reads as {DIRECTIONS[reading.direction]}"
            if one_way
            else f"it does not read as {DIRECTIONS[-reading.direction]}"
        )
    sides = replace(
        reading,
        p=None if "p" in lost else reading.p,
        p_adjusted=None if "p_adjusted" in lost else reading.p_adjusted,
    )
    told = _sides_held(sides, has_adjusted=reading.p_adjusted is not None, alpha=influence.alpha)
    held += [told] if told and not influence.unresolved else []
    return [f"Whoever is left out, {' and '.join(held)}."] if held else []


def _sides_held(sides: Reading, *, has_adjusted: bool, alpha: float) -> str:
    words = {True: f"at or below {declared(alpha)}", False: f"above {declared(alpha)}"}
    if sides.p is not None and (sides.p_adjusted is not None or not has_adjusted):
        return f"P lies {side_words(sides, alpha)}"
    for side, when in ((sides.p, "before"), (sides.p_adjusted, "after")):
        if side is not None:
            return f"P lies {words[side]} {when} adjustment"
    return ""


def _changed(influence: Influence) -> list[str]:
    """Say who changes the reading, those alike together."""
    groups: dict[Reading, list[Without]] = {}
    for without in influence.changing:
        if without.row is not None:
            reading = reading_of(without.row, influence.alpha)
            groups.setdefault(reading, []).append(without)
    return [_change(influence, reading, group) for reading, group in groups.items()]


def _change(influence: Influence, reading: Reading, group: list[Without]) -> str:
    alpha = influence.alpha
    names = [without.subject for without in group]
    who = f"With {names[0]}" if len(names) == 1 else f"With any one of {_any_of(names)}"
    rows = [without.row for without in group if without.row is not None]
    changes = {name for without in group for name in without.changes}
    told = []
    if "direction" in changes:
        told.append(f"it reads as {DIRECTIONS[reading.direction]}")
    if changes - {"direction"}:
        told.append(f"P lies {side_words(reading, alpha)}")
    numbers = (
        p_words(rows[0], alpha)
        if len(rows) == 1
        else p_range_words([row.result.p_value for row in rows], alpha)
    )
    return f"{who} left out {' and '.join(told)}: {numbers}."


def _lost(influence: Influence) -> list[str]:
    """Say where one subject fewer takes the level out of reach."""
    lost = influence.out_of_reach
    if not lost:
        return []
    left = influence.row.result.n_subjects - 1
    what = "P" if "p" in lost else "the adjusted P"
    return [
        f"With {counted(left, 'subject')} {what} cannot reach {declared(influence.alpha)} whatever "
        "the values, so on that nothing is said of any one person."
    ]


def _most(influence: Influence) -> list[str]:
    """Say who moves the answer most, and to where."""
    who = influence.most_influential
    if not who:
        return []
    rows = {without.subject: row for without, row in influence.made}
    name = "p" if influence.row.result.estimate is None else "estimate"
    what = "P" if name == "p" else "the estimate"
    verb = "moves" if len(who) == 1 else "each move"
    ends = sorted(value_of(rows[subject], name) for subject in who)
    shown = [_shown(name, end) for end in (ends[0], ends[-1])]
    to = shown[0] if shown[0] == shown[1] else f"{shown[0]} or {shown[1]}"
    return [f"{listing(who, 20)} {verb} {what} most, to {to}."]


def _shown(name: str, value: float) -> str:
    return p_phrase(value) if name == "p" else number(value)


def _any_of(words: Sequence[str]) -> str:
    *head, last = words
    return f"{', '.join(head)} or {last}" if head else last
