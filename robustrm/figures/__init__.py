"""Figures: a table or a result goes in, matplotlib axes come out, nothing is computed.

Every function draws on the axes it is given, or makes a figure of its own, and returns the
axes. Matplotlib is loaded with this room and nowhere else.
"""

from robustrm.figures.changes import paired_changes, paired_figure
from robustrm.figures.describing import (
    describe_changes,
    describe_comparisons,
    describe_null,
    describe_trajectories,
)
from robustrm.figures.intervals import comparisons
from robustrm.figures.lines import trajectories
from robustrm.figures.nulls import null_law
from robustrm.figures.picture import Picture, pictures
from robustrm.figures.saving import figure_bytes

__all__ = [
    "Picture",
    "comparisons",
    "describe_changes",
    "describe_comparisons",
    "describe_null",
    "describe_trajectories",
    "figure_bytes",
    "null_law",
    "paired_changes",
    "paired_figure",
    "pictures",
    "trajectories",
]
