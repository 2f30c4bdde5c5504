"""A plan meets a table: everything that is computed for a report, and who is in it."""

from robustrm.analysis.options import family_of, offered, overall, stream, thresholds
from robustrm.analysis.result import (
    ALL_OCCASIONS,
    Analysis,
    Inclusion,
    Row,
    Skip,
    apart,
    references,
)
from robustrm.analysis.running import Progress, analyze

__all__ = [
    "ALL_OCCASIONS",
    "Analysis",
    "Inclusion",
    "Progress",
    "Row",
    "Skip",
    "analyze",
    "apart",
    "family_of",
    "offered",
    "overall",
    "references",
    "stream",
    "thresholds",
]
