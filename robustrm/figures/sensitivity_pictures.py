"""The figures of a sensitivity analysis, each with its title and alternative text."""

from __future__ import annotations

from collections.abc import Iterator
from typing import cast

from matplotlib.axes import Axes
from matplotlib.figure import Figure

from robustrm.figures.labels import one_line
from robustrm.figures.leave_one_out import describe_leave_one_out, leave_one_out
from robustrm.figures.missing_map import describe_missing_map, missing_map
from robustrm.figures.picture import Picture
from robustrm.figures.specification import describe_specification, specification
from robustrm.sensitivity_analysis import Sensitivity


def sensitivity_pictures(found: Sensitivity) -> tuple[Picture, ...]:
    """Draw the figures of a sensitivity analysis.

    Parameters
    ----------
    found : Sensitivity
        What was found; nothing is computed anew.

    Returns
    -------
    tuple of Picture
        The specifications with their choices, each planned comparison without every subject in
        turn, and, where a visit was missed, the map of what is there.
    """
    return tuple(_drawn(found))


def _drawn(found: Sensitivity) -> Iterator[Picture]:
    table, parts = found.analysis.table, found.parts
    yield Picture(
        name="specifications",
        title=one_line(f"{table.marker}: all declared specifications"),
        alt=describe_specification(parts.grid),
        figure=specification(parts.grid),
    )
    planned = (i for i in parts.leave_one_out.influences if i.row.role == "primary")
    for index, influence in enumerate(planned, start=1):
        yield Picture(
            name=f"without-one-{index}",
            title=one_line(f"{table.marker}: {influence.row.label} without one subject at a time"),
            alt=describe_leave_one_out(influence),
            figure=_figure_of(leave_one_out(influence)),
        )
    if table.missing.any():
        yield Picture(
            name="missing-map",
            title=one_line(f"{table.marker}: what was measured"),
            alt=describe_missing_map(table),
            figure=_figure_of(missing_map(table)),
        )


def _figure_of(axes: Axes) -> Figure:
    return cast(Figure, axes.get_figure(root=True))
