"""Natural order of labels."""

from __future__ import annotations

import re


def natural_key(text: str) -> tuple[tuple[int, int | str], ...]:
    """Return a sort key that puts ``"week 2"`` before ``"week 10"``.

    Examples
    --------
    >>> sorted(["T10", "T2", "T1"], key=natural_key)
    ['T1', 'T2', 'T10']
    """
    parts = re.split(r"(\d+)", text)
    key = tuple((0, int(part)) if part.isdecimal() else (1, part.casefold()) for part in parts)
    return (*key, (2, text))  # "p7" and "P7" have an order too
