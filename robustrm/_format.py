"""Numbers into text: the only place where a number is rounded.

Everything before the page carries full precision; these functions are called when a
line of text, a table cell or a tick label is written, and nowhere else.
"""

from __future__ import annotations

import math
import re
import unicodedata
from collections.abc import Sequence
from decimal import ROUND_HALF_UP, Decimal
from typing import Literal

Style = Literal["medical", "apa"]
DASH = "–"


def number(value: float | None, digits: int = 3) -> str:
    """Return `value` to `digits` significant digits, never in exponent form from 1e-4 to 1e6."""
    if value is None or math.isnan(value):
        return DASH
    if math.isinf(value):
        return "∞" if value > 0 else "−∞"
    if value == 0:
        return "0"
    size = math.floor(math.log10(abs(value)))
    if not -5 < size < 6:
        text = f"{value:.{digits - 1}e}"
    else:
        text = f"{value:.{max(digits - 1 - size, 0)}f}"
    return text.replace("-", "−")


def fixed(value: float | None, decimals: int = 2) -> str:
    """Return `value` with a fixed number of decimals."""
    if value is None or math.isnan(value):
        return DASH
    return f"{value:.{decimals}f}".replace("-", "−")


def bounded(value: float | None, style: Style = "medical", decimals: int = 2) -> str:
    """Return a quantity that cannot exceed 1 in size, in APA style without its leading zero.

    Examples
    --------
    >>> bounded(0.714), bounded(0.714, "apa"), bounded(-0.5, "apa"), bounded(1.0, "apa")
    ('0.71', '.71', '−.50', '1.00')
    """
    return _led(fixed(value, decimals), style)


def _led(text: str, style: Style) -> str:
    return re.sub(r"^(\D*)0\.", r"\1.", text) if style == "apa" else text


def p_cell(p: float | None, style: Style = "medical") -> str:
    """Return a p value for a table cell: never 0, ``"< 0.001"`` below 0.001.

    Halves are rounded up: exact p values such as 1/16 end in one, and down would flatter.

    Examples
    --------
    >>> p_cell(0.0132), p_cell(4e-9), p_cell(0.0132, "apa"), p_cell(1.0), p_cell(1 / 16)
    ('0.013', '< 0.001', '.013', '1.000', '0.063')
    """
    if p is None or math.isnan(p):
        return DASH
    rounded = Decimal(p).quantize(Decimal("0.001"), rounding=ROUND_HALF_UP)
    return _led("< 0.001" if p < 0.001 else str(rounded), style)


def p_phrase(p: float | None, style: Style = "medical") -> str:
    """Return a p value for a sentence: ``"P = 0.013"`` or ``"p = .013"``.

    Examples
    --------
    >>> p_phrase(0.0132), p_phrase(4e-9), p_phrase(0.0132, "apa")
    ('P = 0.013', 'P < 0.001', 'p = .013')
    """
    letter = "P" if style == "medical" else "p"
    cell = p_cell(p, style)
    return f"{letter} {cell}" if cell.startswith("<") else f"{letter} = {cell}"


def p_range(low: float, high: float, style: Style = "medical") -> str:
    """Return the range of several p values for a sentence.

    Examples
    --------
    >>> p_range(0.0061, 0.0081), p_range(1e-4, 0.02, "apa"), p_range(1e-5, 1e-4)
    ('P = 0.006 to 0.008', 'p < .001 to .020', 'P < 0.001')
    """
    first, last = p_phrase(low, style), p_cell(high, style)
    return first if first.endswith(last) else f"{first} to {last}"


def restyled(text: str, style: Style) -> str:
    """Return a finished sentence with its p values in another style.

    Examples
    --------
    >>> restyled("lower bound 0.5 (P = 0.013); uncorrected P < 0.001.", "apa")
    'lower bound 0.5 (p = .013); uncorrected p < .001.'
    """
    return re.sub(r"\bP ([=<]) 0?(\d?\.\d)", r"p \1 \2", text) if style == "apa" else text


def statistic_phrase(name: str, df: Sequence[float | None], value: float | None) -> str:
    """Return a statistic with its degrees of freedom, decimals only where df is not whole.

    None stands for infinitely many, as it does beside a defined statistic in JSON.

    Examples
    --------
    >>> statistic_phrase("F", (3, 36), 4.123), statistic_phrase("F", (1.62, 17.8), 4.123)
    ('F(3, 36) = 4.12', 'F(1.62, 17.80) = 4.12')
    >>> statistic_phrase("F", (1.58, None), 4.123)
    'F(1.58, ∞) = 4.12'
    >>> statistic_phrase("Q", (), 6.333)
    'Q = 6.33'
    """
    # An epsilon of its lower bound gives whole degrees of freedom but for the last bit.
    listed = ", ".join("∞" if d is None else df_text(round(d, 9)) for d in df)
    return f"{name}({listed}) = {fixed(value)}" if listed else f"{name} = {fixed(value)}"


def interval_phrase(
    level: float | None, low: float | None, high: float | None, style: Style = "medical"
) -> str:
    """Return an interval for a sentence, with the level that it attains.

    Examples
    --------
    >>> interval_phrase(0.95, 0.524, 0.934)
    '95% CI 0.524 to 0.934'
    >>> interval_phrase(0.96875, 0.524, 0.934, "apa")
    '96.9% CI [0.524, 0.934]'
    >>> interval_phrase(None, None, None)
    'interval not estimable'
    """
    if level is None or low is None or high is None:
        return "interval not estimable"
    limits = f"[{number(low)}, {number(high)}]" if style == "apa" else span(low, high)
    return f"{level_text(level)} CI {limits}"


def span(low: float | None, high: float | None, digits: int = 3) -> str:
    """Return an interval, or ``"not estimable"`` where there is none."""
    if low is None or high is None:
        return "not estimable"
    return f"{number(low, digits)} to {number(high, digits)}"


def df_text(df: float) -> str:
    """Return degrees of freedom: whole ones without decimals, corrected ones with two.

    Examples
    --------
    >>> df_text(3.0), df_text(1.8286), df_text(math.inf)
    ('3', '1.83', '∞')
    """
    if math.isinf(df):
        return "∞"
    return f"{df:.0f}" if float(df).is_integer() else f"{df:.2f}"


def declared(value: float | None) -> str:
    """Return a number that somebody declared, such as a limit, with the digits it was given.

    Examples
    --------
    >>> declared(0.3), declared(20.0), declared(-1.5)
    ('0.3', '20', '−1.5')
    """
    return DASH if value is None else f"{value:.6g}".replace("-", "−")


def number_range(low: float, high: float, digits: int = 3) -> str:
    """Return two numbers as a range, or one where they print alike.

    Examples
    --------
    >>> number_range(0.5, 0.75), number_range(0.06251, 0.06252)
    ('0.500 to 0.750', '0.0625')
    """
    ends = number(low, digits), number(high, digits)
    return ends[0] if ends[0] == ends[1] else " to ".join(ends)


def percent(fraction: float, decimals: int = 0) -> str:
    """Return a fraction as percent, without a space (0.95 gives ``"95%"``)."""
    return f"{100 * fraction:.{decimals}f}%"


def level_text(level: float) -> str:
    """Return an attained level with the digits that tell it from a nominal one.

    Examples
    --------
    >>> level_text(0.95), level_text(0.9521484375), level_text(0.96875)
    ('95%', '95.2%', '96.9%')
    """
    rounded = round(100 * level, 1)
    return f"{rounded:g}%"


def width(text: str) -> int:
    """Return the columns that `text` takes in a terminal: wide letters two, marks none.

    Examples
    --------
    >>> width("week 0"), width("第0週"), width("e\u0301")
    (6, 5, 1)
    """
    return sum(
        0 if unicodedata.combining(c) else 1 + (unicodedata.east_asian_width(c) in "WF")
        for c in text
    )


def aligned(
    headings: Sequence[str],
    rows: Sequence[Sequence[str]],
    *,
    indent: str = "",
    words: Sequence[int] = (0,),
) -> str:
    """Return a small table in plain text: the columns that hold `words` left, the others right."""
    cells = [list(headings), *[list(row) for row in rows]]
    widths = [max(width(row[column]) for row in cells) for column in range(len(headings))]
    lines = []
    for row in cells:
        padded = []
        for column, (text, room) in enumerate(zip(row, widths, strict=True)):
            blank = " " * (room - width(text))
            padded.append(text + blank if column in words else blank + text)
        lines.append((indent + "  ".join(padded)).rstrip())
    lines.insert(1, indent + "  ".join("─" * room for room in widths))
    return "\n".join(lines)


def listing(items: Sequence[str], limit: int = 8) -> str:
    """Return ``"a, b and c"``; beyond `limit` the rest is counted.

    Examples
    --------
    >>> listing(["week 2", "week 6", "week 12"])
    'week 2, week 6 and week 12'
    """
    shown = list(items[:limit])
    if len(items) > limit:
        shown.append(f"{len(items) - limit} more")
    if len(shown) < 2:
        return "".join(shown)
    return f"{', '.join(shown[:-1])} and {shown[-1]}"


def counted(count: int, noun: str, plural: str | None = None) -> str:
    """Return a count with its noun: ``"1 subject"``, ``"14 subjects"``."""
    return f"{count} {noun if count == 1 else plural or noun + 's'}"


def capital(text: str) -> str:
    """Return `text` with its first letter as a capital, the rest untouched."""
    return text[:1].upper() + text[1:]
