"""Figures: a table or a result goes in, matplotlib axes come out, nothing is computed.

Every function draws on the axes it is given, or makes a figure of its own, and returns the
axes. Matplotlib is loaded with this room and nowhere else.
"""

from robustrm.figures.agreement import agreement
from robustrm.figures.changes import paired_changes, paired_figure
from robustrm.figures.describing import (
    describe_agreement,
    describe_centred_quantiles,
    describe_changes,
    describe_comparisons,
    describe_difference_symmetry,
    describe_null,
    describe_spread_level,
    describe_trajectories,
)
from robustrm.figures.diagnostics import centred_quantiles, spread_level
from robustrm.figures.intervals import comparisons
from robustrm.figures.leave_one_out import describe_leave_one_out, leave_one_out
from robustrm.figures.lines import trajectories
from robustrm.figures.missing_map import describe_missing_map, missing_map
from robustrm.figures.nulls import null_law
from robustrm.figures.picture import Picture, pictures
from robustrm.figures.power import describe_power, power
from robustrm.figures.reference_change import describe_individual_changes, individual_changes
from robustrm.figures.saving import figure_bytes
from robustrm.figures.sensitivity_pictures import sensitivity_pictures
from robustrm.figures.specification import describe_specification, specification
from robustrm.figures.symmetry import difference_symmetry

__all__ = [
    "Picture",
    "agreement",
    "centred_quantiles",
    "comparisons",
    "describe_agreement",
    "describe_centred_quantiles",
    "describe_changes",
    "describe_comparisons",
    "describe_difference_symmetry",
    "describe_individual_changes",
    "describe_leave_one_out",
    "describe_missing_map",
    "describe_null",
    "describe_power",
    "describe_specification",
    "describe_spread_level",
    "describe_trajectories",
    "difference_symmetry",
    "figure_bytes",
    "individual_changes",
    "leave_one_out",
    "missing_map",
    "null_law",
    "paired_changes",
    "paired_figure",
    "pictures",
    "power",
    "sensitivity_pictures",
    "specification",
    "spread_level",
    "trajectories",
]
