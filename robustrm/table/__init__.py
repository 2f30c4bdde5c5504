"""The occasion table, the only data type of the package."""

from robustrm.records.natural import natural_key
from robustrm.table.occasion_table import OccasionTable, long_in_order

__all__ = ["OccasionTable", "long_in_order", "natural_key"]
