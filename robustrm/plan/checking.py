"""What the keys of a plan may hold."""

from __future__ import annotations

import datetime as dt
import math
import re
from collections.abc import Sequence
from typing import Literal, cast

from robustrm._checks import check_choice, check_names
from robustrm.errors import ArgumentError
from robustrm.methods.registry import (
    CLOSED_METHODS,
    FAMILIES,
    METHODS,
    SINGLE_STEP_METHODS,
)

Family = Literal["first", "all", "successive"] | tuple[tuple[str, str], ...]
Limit = float | tuple[float | None, ...]


def methods_for(kind: str) -> tuple[str, ...]:
    """Return the names of the methods of one kind that a plan can name: no open options."""
    return tuple(m.name for m in METHODS if m.kind == kind and not m.requires)


def check_pair(pair: str, adjust: str, sides: int) -> None:
    """Refuse a method of comparison that is not offered, or not with this adjustment."""
    if adjust != "closed":
        check_choice("pair", pair, (*methods_for("pair"), *methods_for("family")))
        _check_single_step(pair, adjust, sides)
    elif pair not in CLOSED_METHODS:
        raise ArgumentError(
            f"`pair` must be {' or '.join(map(repr, CLOSED_METHODS))} with `adjust` 'closed', "
            f"got {pair!r}: its scores are computed once from the whole table."
        )


def _check_single_step(pair: str, adjust: str, sides: int) -> None:
    own = pair in SINGLE_STEP_METHODS
    if own and adjust != "single-step":
        raise ArgumentError(
            f"`adjust` must be 'single-step' with `pair` {pair!r}, got {adjust!r}: its p values "
            "are adjusted over all pairs of occasions."
        )
    if adjust == "single-step" and not own:
        raise ArgumentError(
            f"`pair` must be {' or '.join(map(repr, SINGLE_STEP_METHODS))} with `adjust` "
            f"'single-step', got {pair!r}. Use 'holm'."
        )
    if own and sides != 2:
        raise ArgumentError(
            f"`sides` must be 2 with `pair` {pair!r}, got {sides!r}: the range over all pairs has "
            "no direction."
        )


def checked_family(family: str | Sequence[Sequence[str]]) -> Family:
    """Return the planned comparisons: a family by name, or pairs of different occasions."""
    if isinstance(family, str):
        return cast(Family, check_choice("contrasts", family, FAMILIES))
    pairs = tuple(tuple(str(label) for label in pair) for pair in family)
    if not pairs or any(len(pair) != 2 or pair[0] == pair[1] for pair in pairs):
        raise ArgumentError(
            f"`contrasts` must be one of {', '.join(map(repr, FAMILIES))} or pairs of two "
            f"different occasions, got {family!r}."
        )
    return cast(Family, pairs)


def checked_companions(names: Sequence[str]) -> tuple[str, ...]:
    """Return the methods beside, each of which needs no option without a default."""
    offered = tuple(m.name for m in METHODS if not m.requires)
    for name in check_names("companions", names, least=0):
        check_choice("companions", name, offered)
    return tuple(names)


def check_seed(seed: int | None) -> None:
    """Refuse a seed that is no whole number."""
    whole = isinstance(seed, int) and not isinstance(seed, bool)
    if seed is not None and not (whole and seed >= 0):
        raise ArgumentError(f"`seed` must be a whole number of at least 0, got {seed!r}.")


def checked_occasions(occasions: Sequence[str]) -> tuple[str, ...]:
    """Return the planned occasions in their order; none is "as in the file"."""
    return check_names("occasions", occasions, least=0)


def checked_limit(argument: str, limit: object, occasions: Sequence[str]) -> Limit | None:
    """Return a declared limit: one number, or one an occasion with None where there is none.

    In a plan file NaN stands for None, because TOML has no empty value.
    """
    if limit is None or _is_number(limit):
        return None if limit is None else float(cast(float, limit))
    listed = list(limit) if isinstance(limit, (list, tuple)) else None
    if listed is None or not all(value is None or _is_number(value) for value in listed):
        raise ArgumentError(
            f"`{argument}` must be a number, or one an occasion, got {limit!r}. Write 0.3, or "
            "[0.3, 0.3, 0.5]."
        )
    if occasions and len(listed) != len(occasions):
        raise ArgumentError(
            f"`{argument}` must hold one number for each of the {len(occasions)} occasions, got "
            f"{len(listed)}."
        )
    numbers = (None if value is None else float(cast(float, value)) for value in listed)
    return tuple(None if v is None or math.isnan(v) else v for v in numbers)


def _is_number(value: object) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool)


def check_margin(margin: float | None, reason: str | None) -> None:
    """Refuse a margin of no relevant change that is not positive, or that has no reason."""
    if margin is None:
        return
    if not (_is_number(margin) and 0 < margin < math.inf):
        raise ArgumentError(f"`margin` must be a positive number, got {margin!r}.")
    if not reason:
        raise ArgumentError(
            f"`margin` needs `margin_reason`, got a margin of {margin!r} without one. Say where it "
            "comes from."
        )


def check_answer(argument: str, answer: object) -> None:
    """Refuse what is neither yes, no nor left open."""
    if answer is not None and not isinstance(answer, bool):
        raise ArgumentError(
            f"`{argument}` must be true, false or left out (not known), got {answer!r}."
        )


def check_text(argument: str, text: object) -> None:
    """Refuse what is no text, or an empty one."""
    if text is not None and not (isinstance(text, str) and text.strip()):
        raise ArgumentError(f"`{argument}` must be a text, got {text!r}. Leave it out instead.")


def check_created(created: str | None) -> None:
    """Refuse a date of writing that is no date."""
    if created is None:
        return
    try:
        dt.date.fromisoformat(created)
    except (TypeError, ValueError):
        raise ArgumentError(
            f"`created` must be a date as text, such as '2026-03-04', got {created!r}."
        ) from None


def check_digest(digest: str | None) -> None:
    """Refuse a digest that is no SHA-256."""
    if digest is not None and not re.fullmatch(r"[0-9a-f]{64}", str(digest)):
        raise ArgumentError(
            f"`data_digest` must be a SHA-256 of 64 hexadecimal digits, got {digest!r}."
        )
