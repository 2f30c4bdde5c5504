"""Text that stands in a figure: the user's labels made safe and short, numbers made ticks."""

from __future__ import annotations

import textwrap
from decimal import Decimal

from robustrm._format import number


def one_line(text: str) -> str:
    r"""Return `text` on one line, without the control characters that an SVG may not hold.

    Examples
    --------
    >>> one_line("week 0\n(before\tdose)")
    'week 0 (before dose)'
    """
    return " ".join("".join(c if c.isprintable() else " " for c in text).split())


def wrapped(text: str, width: int, *, lines: int = 2) -> str:
    r"""Return `text` in at most `lines` lines of `width` characters, safe to draw.

    What is too long loses its middle, as labels of one table often start, or end, alike.
    A dollar sign is escaped: two of them would otherwise start a formula.

    Examples
    --------
    >>> print(wrapped("second visit, four weeks after the first infusion", 17))
    second visit,
    … first infusion
    >>> wrapped("cost in $", 20)
    'cost in \\$'
    """
    short = one_line(text)
    while len(parts := textwrap.wrap(short, width)) > lines:
        short = _shorter(short)
    return "\n".join(parts).replace("$", r"\$")


def _shorter(text: str) -> str:
    """Drop the word in the middle; of one or two words, letters there."""
    words = [word for word in text.split() if word != "…"]
    if len(words) > 2:
        middle = len(words) // 2
        return " ".join([*words[:middle], "…", *words[middle + 1 :]])
    half = len(text) // 2
    head, tail = text.split("…", 1) if "…" in text else (text[:half], text[half:])
    head, tail = (head[:-1], tail) if len(head) >= len(tail) else (head, tail[1:])
    return f"{head.rstrip()}…{tail.lstrip()}"


def with_unit(name: str, unit: str | None, *remarks: str) -> str:
    """Return ``"ferritin (µg/L, log axis)"``: a name with its unit and remarks.

    Examples
    --------
    >>> with_unit("ferritin", "µg/L", "log axis"), with_unit("score", None)
    ('ferritin (µg/L, log axis)', 'score')
    """
    inside = ", ".join(part for part in (unit, *remarks) if part)
    return f"{name} ({inside})" if inside else name


def axis_text(width: int, name: str, unit: str | None, *remarks: str) -> str:
    """Return the label of an axis; what stands in brackets gets a line of its own if need be."""
    whole = with_unit(name, unit, *remarks)
    if len(one_line(whole)) <= width:
        return wrapped(whole, width)
    below = wrapped(with_unit("", unit, *remarks), width, lines=1)
    return f"{wrapped(name, width, lines=1 if below else 2)}\n{below}".rstrip()


def tick_text(value: float, position: int | None = None) -> str:
    """Return a tick value with the digits it needs; `position` is what matplotlib passes.

    Examples
    --------
    >>> [tick_text(value) for value in (0.5, 1.0, 2.5, 300.0, -0.1, 0.0)]
    ['0.5', '1', '2.5', '300', '−0.1', '0']
    """
    digits = Decimal(f"{value:.6g}").normalize().as_tuple().digits
    return number(value, len(digits))
