"""What is fixed before looking at the data."""

from robustrm.plan.checking import methods_for
from robustrm.plan.plan import COMPANIONS, Plan

__all__ = ["COMPANIONS", "Plan", "methods_for"]
