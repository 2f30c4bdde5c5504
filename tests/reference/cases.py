"""Published cases with their sources: data, printed values, and values recomputed from the data.

One file holds one case, and ``not_used.json`` every case and field that no test uses, with the
reason. The recomputed numbers were found by independent code (enumeration, SciPy, statsmodels),
not by this package. A case whose source says "from memory" was written down without the book.
"""

from __future__ import annotations

import functools
import json
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from decimal import Decimal
from pathlib import Path
from typing import Any

FOLDER = Path(__file__).parent
NOT_USED = "not_used.json"


@dataclass(frozen=True, kw_only=True)
class Case:
    """One published case, as its file has it."""

    id: str
    method: str
    citation: str
    data: dict[str, Any]
    published: dict[str, Any]
    recomputed: dict[str, Any]
    agree: bool
    agree_basis: str
    note: str
    source: str

    @property
    def words(self) -> str:
        """The source in a few words, for the name of a test."""
        memory = ", values from memory" if "from memory" in self.source else ""
        return self.citation.split(",")[0].split(";")[0][:48] + memory

    def at(self, path: str) -> Any:
        """Return what stands at a path such as ``"recomputed.friedman.chi2"``."""
        section, *keys = path.split(".", 1)
        place: Any = getattr(self, section)
        for key in keys[0].split("/") if keys else ():
            place = place[key]
        return place


@functools.cache
def all_cases() -> dict[str, Case]:
    """Return every case by its id."""
    files = sorted(path for path in FOLDER.glob("*.json") if path.name != NOT_USED)
    return {path.stem: Case(**json.loads(path.read_text(encoding="utf-8"))) for path in files}


def case(name: str) -> Case:
    """Return one case."""
    return all_cases()[name]


def not_used() -> dict[str, dict[str, str]]:
    """Return why something is not checked here.

    ``"cases"`` by id are not in the folder, ``"elsewhere"`` by id are compared by another test
    file, ``"fields"`` by ``"id:section.path"`` are not compared at all.
    """
    result: dict[str, dict[str, str]] = json.loads((FOLDER / NOT_USED).read_text(encoding="utf-8"))
    return result


def leaves(name: str) -> Iterator[str]:
    """Yield every field of a case that holds a value, as ``"section.path"``."""

    def below(value: Any, path: str) -> Iterator[str]:
        if isinstance(value, dict) and value:
            for key, part in value.items():
                yield from below(part, f"{path}/{key}")
        elif value != {}:
            yield path

    for section in ("published", "recomputed"):
        for key, value in case(name).at(section).items():
            yield from below(value, f"{section}.{key}")


@dataclass(frozen=True)
class Check:
    """One field of a case, and how the package finds its value."""

    case: str
    field: str
    find: Callable[[], Any]

    def __str__(self) -> str:
        return f"{self.case}:{self.field}: {case(self.case).words}"

    @property
    def expected(self) -> Any:
        """What the case says."""
        return case(self.case).at(self.field)

    @property
    def is_published(self) -> bool:
        """Whether the value was printed by the source, rather than recomputed."""
        return self.field.startswith("published")


def agrees(found: Any, expected: Any, *, printed: bool) -> bool:
    """Compare numbers, or lists and mappings of them.

    Recomputed numbers agree to 1e-9 of their size, printed ones to half a unit of their last
    printed digit.
    """
    if isinstance(expected, dict):
        return set(found) == set(expected) and all(
            agrees(found[key], value, printed=printed) for key, value in expected.items()
        )
    if isinstance(expected, list):
        pairs = zip(found, expected, strict=True)
        return all(agrees(one, other, printed=printed) for one, other in pairs)
    if expected is None or found is None:
        return found is None and expected is None
    tolerance = 1e-9 * abs(expected) + 1e-13
    if printed:
        tolerance = max(tolerance, half_a_digit(expected))
    # strictly: 23.5 is not a printed 24
    return bool(abs(found - expected) < tolerance)


def half_a_digit(value: float) -> float:
    """Return half a unit of the last digit that a number was printed with.

    A trailing zero is not kept by JSON, so a number is never held to more than it shows.
    """
    exponent = Decimal(repr(value)).as_tuple().exponent
    assert isinstance(exponent, int)
    places = 0 if float(value).is_integer() else -exponent
    return 0.5 * 10.0**-places
