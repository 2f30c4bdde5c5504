"""Does the conclusion hold? Other reasonable assumptions, and what is asked of every study."""

from robustrm.sensitivity_analysis.reference_change import reference_change
from robustrm.sensitivity_analysis.reference_changes import ReferenceChanges, reference_changes
from robustrm.sensitivity_analysis.running import PARTS, TITLES, Sensitivity, sensitivity

__all__ = [
    "PARTS",
    "TITLES",
    "ReferenceChanges",
    "Sensitivity",
    "reference_change",
    "reference_changes",
    "sensitivity",
]
