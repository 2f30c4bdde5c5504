"""What the evidence pages share: rows as CSV and back, lines of a table, versions."""

from __future__ import annotations

import csv
import dataclasses
import sys
from collections.abc import Callable, Iterable, Sequence
from pathlib import Path
from typing import Any, TypeVar

from robustrm.kernels.binomial import clopper_pearson

RowT = TypeVar("RowT")

_READ: dict[str, Callable[[str], object]] = {
    "int": int,
    "float": float,
    "str": str,
    "bool": lambda text: text == "True",
    "int | None": lambda text: int(text) if text else None,
    "float | None": lambda text: float(text) if text else None,
    "bool | None": lambda text: text == "True" if text else None,
}


def write_csv(rows: Sequence[Any], path: Path) -> None:
    """Write rows of one dataclass, one a line."""
    with path.open("w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(field.name for field in dataclasses.fields(rows[0]))
        writer.writerows(dataclasses.astuple(row) for row in rows)


def read_csv(path: Path, kind: type[RowT]) -> list[RowT]:
    """Read rows of a dataclass back."""
    types = {field.name: str(field.type) for field in dataclasses.fields(kind)}  # type: ignore[arg-type]  # a dataclass
    with path.open(newline="", encoding="utf-8") as file:
        return [
            kind(**{name: _READ[types[name]](text) for name, text in line.items()})
            for line in csv.DictReader(file)
        ]


def versions() -> str:
    """Say by which versions a table was made."""
    from importlib.metadata import version

    python = ".".join(str(part) for part in sys.version_info[:3])
    named = [f"{name} {version(name)}" for name in ("robustrm", "numpy", "scipy")]
    return ", ".join([*named, f"Python {python}"])


def line(cells: Iterable[str]) -> str:
    """Return one line of a table."""
    return f"| {' | '.join(cells)} |"


def head(names: Sequence[str], left: int) -> list[str]:
    """Return the two head lines of a table whose first `left` columns hold words."""
    return [line(names), line(["---"] * left + ["---:"] * (len(names) - left))]


def joined(parts: Iterable[str]) -> str:
    """Return a page from its paragraphs."""
    return "\n\n".join(part.strip() for part in parts) + "\n"


def monte_carlo_interval(hits: int, datasets: int) -> tuple[float, float]:
    """Return the 95% Clopper-Pearson interval of a simulated share."""
    low, high = clopper_pearson(hits, datasets, 0.95)
    return float(low), float(high)
