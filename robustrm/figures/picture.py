"""The figures of one analysis, each with its title and alternative text."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import cast

from matplotlib.axes import Axes
from matplotlib.figure import Figure

from robustrm.analysis import Analysis
from robustrm.figures import describing
from robustrm.figures.agreement import agreement, panels
from robustrm.figures.changes import paired_figure
from robustrm.figures.intervals import comparisons
from robustrm.figures.labels import one_line
from robustrm.figures.lines import trajectories
from robustrm.figures.nulls import null_law
from robustrm.figures.saving import figure_bytes
from robustrm.methods.registry import method as registered


@dataclass(frozen=True, slots=True, eq=False)
class Picture:
    """A figure with what a page needs to show it to everybody.

    Parameters
    ----------
    name : str
        Name for a file, without ending: letters, digits and hyphens, no label of the user.
    title : str
        Title, as plain text.
    alt : str
        What the figure shows, in words and numbers, as plain text.
    figure : Figure
        The figure.
    """

    name: str
    title: str
    alt: str
    figure: Figure

    def to_bytes(self, kind: str = "svg") -> bytes:
        """Return the figure as a file: ``"svg"`` or ``"png"``."""
        return figure_bytes(self.figure, kind)


def pictures(analysis: Analysis) -> tuple[Picture, ...]:
    """Draw the figures of a report.

    Parameters
    ----------
    analysis : Analysis
        What was found; nothing is computed anew.

    Returns
    -------
    tuple of Picture
        All subjects over the occasions, each planned comparison that has subjects, the planned
        comparisons together, and the null distribution of the overall test.

    Notes
    -----
    Titles and alternative texts hold the user's labels unescaped: a page escapes them. No
    identifier of a subject is in any of them, nor in the figures.
    """
    return tuple(_drawn(analysis))


def _drawn(analysis: Analysis) -> Iterator[Picture]:
    table, primary = analysis.table, analysis.primary
    axes = trajectories(table, summary=analysis.summary, log=analysis.scale == "log")
    yield Picture(
        name="trajectories",
        title=one_line(f"{table.marker} of every subject over the occasions"),
        alt=describing.describe_trajectories(table, analysis.summary),
        figure=_figure_of(axes),
    )
    for index, comparison in enumerate(primary, start=1):
        if comparison.result.n_subjects:
            yield Picture(
                name=f"change-{index}",
                title=one_line(f"{table.marker}: {comparison.label}, every subject"),
                alt=describing.describe_changes(table, comparison),
                figure=paired_figure(table, comparison),
            )
    yield Picture(
        name="comparisons",
        title=one_line(f"{table.marker}: planned comparisons"),
        alt=describing.describe_comparisons(primary),
        figure=_figure_of(comparisons(primary)),
    )
    for index, comparison in enumerate(primary, start=1):
        rows = [row for row in analysis.rows() if row.label == comparison.label]
        if len(panels(rows)) > 1:
            yield Picture(
                name=f"methods-{index}",
                title=one_line(f"{table.marker}: {comparison.label}, by every method"),
                alt=describing.describe_agreement(comparison.label, panels(rows)),
                figure=agreement(rows),
            )
    null = analysis.null_distribution
    if null is not None and analysis.omnibus is not None:
        title = registered(null.method).title
        yield Picture(
            name="null-distribution",
            title=one_line(f"{table.marker}: {title}, null distribution"),
            alt=describing.describe_null(title, null, analysis.omnibus),
            figure=_figure_of(null_law(null)),
        )


def _figure_of(axes: Axes) -> Figure:
    return cast(Figure, axes.get_figure(root=True))
