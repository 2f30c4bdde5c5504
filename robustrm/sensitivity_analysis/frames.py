"""Tidy frames as plain values."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from robustrm.results import plain

if TYPE_CHECKING:
    import pandas as pd


def records(frame: pd.DataFrame) -> list[dict[str, Any]]:
    """Return the rows of a frame as dicts that any JSON writer takes; what is not there is None."""
    import pandas as pd

    rows: list[dict[Any, Any]] = frame.astype(object).to_dict("records")
    return [
        {str(name): None if _is_absent(pd, value) else plain(value) for name, value in row.items()}
        for row in rows
    ]


def _is_absent(pd: Any, value: Any) -> bool:
    return not isinstance(value, (list, tuple, dict)) and bool(pd.isna(value))
