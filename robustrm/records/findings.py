"""What is found on the way from a file to a table."""

from __future__ import annotations

from dataclasses import dataclass, field

from robustrm.errors import Problem
from robustrm.ledger import LedgerLine
from robustrm.results import Note


@dataclass
class Findings:
    """Problems, notes and ledger lines; it grows until everything has been said at once."""

    problems: list[Problem] = field(default_factory=list)
    notes: list[Note] = field(default_factory=list)
    lines: list[LedgerLine] = field(default_factory=list)

    def add(self, other: Findings) -> None:
        """Take over everything that `other` found."""
        self.problems += other.problems
        self.notes += other.notes
        self.lines += other.lines
