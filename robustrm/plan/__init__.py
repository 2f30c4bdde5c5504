"""What is fixed before looking at the data."""

from robustrm.plan.checking import methods_for
from robustrm.plan.grid import GRID_CHOICES, GridChoices
from robustrm.plan.plan import COMPANIONS, Plan

__all__ = ["COMPANIONS", "GRID_CHOICES", "GridChoices", "Plan", "methods_for"]
