"""When too much of an occasion lies beyond a limit for a shift to be estimated."""

from __future__ import annotations

from robustrm.results import Note
from robustrm.table import OccasionTable

MOSTLY_BEYOND = Note(
    "mostly beyond the limit",
    "More than half of the values of an occasion lie beyond a limit.",
    "No shift is estimated: it would be that of the limit or its substitute.",
    "The counts of falls and rises stand instead.",
)


def is_mostly_beyond(pair: OccasionTable) -> bool:
    """Whether more than half of the subjects of a pair lie beyond a limit on one occasion."""
    return bool((pair.censored.sum(axis=0) * 2 > pair.n_subjects).any())
