"""A plan meets a table: everything that is computed for a report, and who is in it."""

from robustrm.analysis.result import Analysis, Inclusion, Row, Skip
from robustrm.analysis.running import Progress, analyze, stream

__all__ = ["Analysis", "Inclusion", "Progress", "Row", "Skip", "analyze", "stream"]
