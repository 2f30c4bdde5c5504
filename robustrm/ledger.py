"""The ledger: what was done to the cells, to whom, and why.

Every step that builds or changes a table adds lines; no line is ever removed. The counts
say where each cell of the input went, so that nothing can leave without a trace.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import asdict, dataclass, field, replace
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, slots=True)
class CellCounts:
    """Where the cells of the input went: ``read`` is the sum of the other five."""

    values: int = 0
    below: int = 0
    above: int = 0
    missing: int = 0
    refused: int = 0

    @property
    def read(self) -> int:
        """All cells that were read."""
        return self.values + self.below + self.above + self.missing + self.refused


@dataclass(frozen=True, slots=True)
class LedgerLine:
    """One thing done, with its reason.

    Parameters
    ----------
    step : str
        Name of the step, such as ``"read"``, ``"limits"``, ``"complete"``, ``"recensored"``.
    what : str
        What was done and why, as a sentence.
    subject, occasion : str, optional
        Whom and which occasion it concerns; None when it concerns the whole table.
    cells : int
        Number of cells concerned.
    """

    step: str
    what: str
    subject: str | None = None
    occasion: str | None = None
    cells: int = 0


@dataclass(frozen=True, slots=True)
class Ledger:
    """All lines in the order in which they were written, and the counts of the input.

    Parameters
    ----------
    lines : tuple of LedgerLine
        One line a step, or a step and a subject.
    counts : CellCounts
        Cells of the input by outcome. Replicates count as cells of their own.
    """

    lines: tuple[LedgerLine, ...] = ()
    counts: CellCounts = field(default_factory=CellCounts)

    def add(self, *lines: LedgerLine) -> Ledger:
        """Return a ledger with further lines."""
        return replace(self, lines=(*self.lines, *lines))

    def of_step(self, step: str) -> tuple[LedgerLine, ...]:
        """Return the lines of one step."""
        return tuple(line for line in self.lines if line.step == step)

    def to_frame(self) -> pd.DataFrame:
        """Return one row a line."""
        import pandas as pd

        columns = ["step", "subject", "occasion", "cells", "what"]
        return pd.DataFrame([asdict(line) for line in self.lines], columns=columns)

    def to_dict(self) -> dict[str, Any]:
        """Return plain values."""
        return {
            "counts": {**asdict(self.counts), "read": self.counts.read},
            "lines": [asdict(line) for line in self.lines],
        }

    def __str__(self) -> str:
        counts = self.counts
        head = (
            f"{counts.read} cells read: {counts.values} values, {counts.below} below and "
            f"{counts.above} above a limit, {counts.missing} missing, {counts.refused} refused"
        )
        return "\n".join([head, *_sentences(self.lines)])


def _sentences(lines: Iterable[LedgerLine]) -> list[str]:
    return [f"  {line.step}: {line.what}" for line in lines]
