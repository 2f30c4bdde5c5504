"""In which plate each value was assayed, and whether plate and occasion can be told apart."""

from __future__ import annotations

import itertools
from collections import defaultdict
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from robustrm._format import counted, listing
from robustrm.cells import clean, parse_cell
from robustrm.ledger import LedgerLine
from robustrm.records import Findings, Written
from robustrm.records.natural import natural_key
from robustrm.records.sheets import Sheet
from robustrm.results import Note

Cell = tuple[str, str]
"""A subject and an occasion."""


@dataclass(frozen=True, slots=True)
class Plates:
    """Which values were assayed in which plate.

    Parameters
    ----------
    column : str
        The column that says it.
    cells : mapping of str to set of (subject, occasion)
        What each plate holds; missing values are in none.
    unknown : frozenset of (subject, occasion)
        Cells with a value and no plate.
    occasions : tuple of str
        All occasions, in time order.
    """

    column: str
    cells: Mapping[str, frozenset[Cell]]
    unknown: frozenset[Cell]
    occasions: tuple[str, ...]

    def of_occasion(self, occasion: str) -> list[str]:
        """Return the plates with a value of an occasion, in natural order."""
        names = [n for n, held in self.cells.items() if any(o == occasion for _, o in held)]
        return sorted(names, key=natural_key)

    @property
    def apart(self) -> list[tuple[str, str]]:
        """The pairs of occasions that have plates and share none."""
        plates = {occasion: set(self.of_occasion(occasion)) for occasion in self.occasions}
        return [
            (a, b)
            for a, b in itertools.combinations(self.occasions, 2)
            if plates[a] and plates[b] and not plates[a] & plates[b]
        ]

    @property
    def confounded(self) -> bool:
        """Whether no plate holds values of two occasions, and there are two to compare."""
        filled = [occasion for occasion in self.occasions if self.of_occasion(occasion)]
        return len(filled) > 1 and len(self.apart) == len(filled) * (len(filled) - 1) // 2

    @property
    def single(self) -> bool:
        """Whether every plate holds one value."""
        return len(self.cells) > 1 and all(len(held) == 1 for held in self.cells.values())

    def to_dict(self) -> dict[str, Any]:
        """Return what the source of a table keeps."""
        return {
            "column": self.column,
            "n_plates": len(self.cells),
            "apart": [list(pair) for pair in self.apart],
            "confounded": self.confounded,
            "single": self.single,
        }


def plates_of(
    sheet: Sheet, column: str, written: Sequence[Written], occasions: Sequence[str]
) -> Plates:
    """Return the plates of the cells in use; a missing value was assayed nowhere."""
    names = dict(zip((row.number for row in sheet.rows), sheet.texts(column), strict=True))
    cells: dict[str, set[Cell]] = defaultdict(set)
    for item in written:
        if item.row is not None and parse_cell(item.text).kind != "missing":
            cells[names[item.row]].add((item.subject, item.occasion))
    unknown = frozenset(cells.pop("", set()))
    held = {name: frozenset(cells[name]) for name in sorted(cells, key=natural_key)}
    return Plates(clean(column), held, unknown, tuple(occasions))


def tell(plates: Plates, found: Findings) -> None:
    """Put down where the values were assayed, and what that does to a comparison of occasions."""
    found.lines.append(LedgerLine("plate", _where(plates)))
    found.notes += [*_unknown_notes(plates), *_apart_notes(plates)]


def _where(plates: Plates) -> str:
    places: dict[str, set[str]] = defaultdict(set)
    for name, held in plates.cells.items():
        for subject, _ in held:
            places[subject].add(name)
    together = sum(len(names) == 1 for names in places.values())
    return (
        f"{counted(len(plates.cells), 'plate')} in column {plates.column!r}; {together} of "
        f"{counted(len(places), 'subject')} with all values in one plate"
    )


def _unknown_notes(plates: Plates) -> list[Note]:
    if not plates.unknown:
        return []
    places = sorted(plates.unknown, key=lambda c: (natural_key(c[0]), plates.occasions.index(c[1])))
    shown = listing([f"{subject} at {occasion}" for subject, occasion in places])
    return [
        Note(
            "plate missing",
            f"{counted(len(places), 'value')} without a plate in column {plates.column!r}: "
            f"{shown}.",
            "Whether plates and occasions can be told apart is judged from the others.",
            "Complete the column from the laboratory's run list.",
        )
    ]


def _apart_notes(plates: Plates) -> list[Note]:
    if not plates.apart:
        return []
    if plates.single:
        return [
            Note(
                "plate",
                f"Every value has a plate of its own in column {plates.column!r}.",
                "That reads like the number of a sample: what was assayed together is not told.",
                "Name the column with the run or plate in --plate.",
            )
        ]
    if plates.confounded:
        fact = f"No plate of column {plates.column!r} holds values of two occasions"
        where = "every comparison of occasions"
        names = [f"{o}: {listing(plates.of_occasion(o))}" for o in plates.occasions]
    else:
        fact = f"Some occasions share no plate of column {plates.column!r}"
        where = "a comparison of these"
        names = [f"{a} and {b}" for a, b in plates.apart]
    return [
        Note(
            "plate",
            f"{fact} ({'; '.join(names)}).",
            f"A difference between plates enters {where} and cannot be told from a change.",
            "Say so beside the results. Samples of one person belong in one plate; assaying some "
            "again, side by side, shows how far the plates differ.",
        )
    ]
