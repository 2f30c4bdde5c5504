"""Argument checks with one wording: the argument, the rule, the value seen, the next step."""

from __future__ import annotations

import difflib
import math
import operator
from collections.abc import Iterable, Sequence
from typing import Literal, cast

from robustrm.errors import ArgumentError

STAGES = (9_999, 99_999, 999_999)
"""Monte Carlo draws, raised stage by stage while a p value is not resolved."""

Alternative = Literal["two-sided", "greater", "less"]


def nearest(name: str, options: Iterable[str]) -> str | None:
    """Return the option most like `name`, or None when nothing is close."""
    found = difflib.get_close_matches(name, sorted(options), n=1)
    return found[0] if found else None


def did_you_mean(value: object, options: Iterable[str]) -> str:
    """Return ``" Did you mean 'x'?"`` or an empty string."""
    guess = nearest(str(value), options)
    return f" Did you mean {guess!r}?" if guess else ""


def check_choice(argument: str, value: str, options: Sequence[str]) -> str:
    """Return `value` when it is one of `options`, else refuse it."""
    if value not in options:
        listed = ", ".join(repr(option) for option in options)
        raise ArgumentError(
            f"`{argument}` must be one of {listed}, got {value!r}.{did_you_mean(value, options)}"
        )
    return value


def check_alternative(value: str) -> Alternative:
    """Return the direction of a test."""
    return cast(Alternative, check_choice("alternative", value, ("two-sided", "greater", "less")))


def check_level(value: float, argument: str = "level") -> float:
    """Return a confidence level inside (0, 1)."""
    if isinstance(value, bool) or not 0 < value < 1:
        hint = f" Did you mean {value / 100:g}?" if 1 < value < 100 else ""
        raise ArgumentError(f"`{argument}` must be in (0, 1), got {value!r}.{hint}")
    return float(value)


def check_count(argument: str, value: object, *, least: int = 1) -> int:
    """Return a whole number that is at least `least`."""
    try:
        number = operator.index(value)  # type: ignore[arg-type]  # refused below when not integral
    except TypeError:
        number = None
    if number is None or isinstance(value, bool) or number < least:
        raise ArgumentError(
            f"`{argument}` must be a whole number of at least {least}, got {value!r}."
        )
    return number


def check_share(argument: str, value: float) -> float:
    """Return a share cut at each end of a sample, in [0, 0.5)."""
    if isinstance(value, bool) or not 0 <= value < 0.5:
        hint = f" Did you mean {value / 100:g}?" if 1 <= value < 50 else ""
        raise ArgumentError(f"`{argument}` must be in [0, 0.5), got {value!r}.{hint}")
    return float(value)


def check_finite(argument: str, value: float) -> float:
    """Return a finite float."""
    if not math.isfinite(value):
        raise ArgumentError(f"`{argument}` must be a finite number, got {value!r}.")
    return float(value)


def check_names(argument: str, names: Sequence[str], *, least: int = 1) -> tuple[str, ...]:
    """Return distinct, non-empty names in the order given."""
    if isinstance(names, str):
        raise ArgumentError(
            f"`{argument}` must be a list of names, got the single text {names!r}. "
            f"Write [{names!r}]."
        )
    result = tuple(str(name) for name in names)
    if len(result) < least:
        raise ArgumentError(f"`{argument}` must hold at least {least} names, got {len(result)}.")
    repeated = sorted({name for name in result if result.count(name) > 1})
    if repeated:
        raise ArgumentError(f"`{argument}` must not repeat a name, got {repeated[0]!r} twice.")
    if any(not name.strip() for name in result):
        raise ArgumentError(f"`{argument}` must not hold an empty name, got {result!r}.")
    return result


def check_member(argument: str, value: str, members: Sequence[str]) -> str:
    """Return `value` when the table has it, else name what it has."""
    if value not in members:
        listed = ", ".join(repr(member) for member in members)
        raise ArgumentError(
            f"`{argument}` must name one of {listed}, got {value!r}.{did_you_mean(value, members)}"
        )
    return value


def check_draws(draws: int | Sequence[int] | None, argument: str = "draws") -> tuple[int, ...]:
    """Return rising numbers of draws: the usual stages for None, exactly `draws` for an int."""
    if draws is None:
        return STAGES
    stages = tuple(draws) if isinstance(draws, Sequence) else (draws,)
    whole = all(type(v) is int and v >= 99 for v in stages)
    if not stages or not whole or list(stages) != sorted(set(stages)):
        raise ArgumentError(
            f"`{argument}` must be rising whole numbers of at least 99, got {draws!r}."
        )
    return stages
