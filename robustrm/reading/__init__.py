"""From a file to an :class:`robustrm.OccasionTable`: file kinds, layouts, faults."""

from robustrm.reading.reader import read_table

__all__ = ["read_table"]
