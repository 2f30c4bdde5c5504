"""From written cells to the arrays of an occasion table: replicates, limits, reporting step."""

from robustrm.records.arrangement import Arranged, Declared, arrange, arrange_written
from robustrm.records.findings import Findings
from robustrm.records.record import Record, Written, read_cells
from robustrm.records.replicates import Replicate

__all__ = [
    "Arranged",
    "Declared",
    "Findings",
    "Record",
    "Replicate",
    "Written",
    "arrange",
    "arrange_written",
    "read_cells",
]
