"""What the figures of the diagnostics share: points by group, lines named at their right end."""

from __future__ import annotations

from collections.abc import Sequence
from typing import cast

from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.layout_engine import ConstrainedLayoutEngine

from robustrm.figures import style
from robustrm.ties import Bools, Floats

Group = tuple[str, Bools, str, str]
"""A name, who is in it, marker and face."""


def roomy_axes(ax: Axes | None, size: tuple[float, float]) -> Axes:
    """Return `ax`, or new axes with room for names at their right."""
    axes = style.axes_for(ax, size)
    engine = cast(Figure, axes.get_figure(root=True)).get_layout_engine()
    if ax is None and isinstance(engine, ConstrainedLayoutEngine):
        # The names of the lines end at the edge; where the letters are set wider, they need room.
        engine.set(w_pad=9 / 72)
    return axes


def draw_points(axes: Axes, x: Floats, y: Floats, groups: Sequence[Group]) -> None:
    """Draw the points, each group with a symbol of its own."""
    size = 4.5 if x.size <= 60 else 3.5
    for label, chosen, marker, face in groups:
        if chosen.any():
            axes.plot(
                x[chosen],
                y[chosen],
                linestyle="none",
                marker=marker,
                markersize=size if marker == "o" else size + 1,
                markerfacecolor=face,
                markeredgecolor=style.SUBJECT,
                markeredgewidth=0.9,
                zorder=3,
                label=label,
            )


def label_ends(axes: Axes, ends: Sequence[tuple[float, str]]) -> None:
    """Write each text right of the axes at the height where its line leaves them.

    Texts that would touch are moved apart, in the order of the lines. Set the view before.
    """
    bottom, top = axes.transAxes.transform([(0, 0), (0, 1)])[:, 1]
    left, _ = axes.get_xlim()
    heights = [
        (float(axes.transData.transform((left, end))[1]) - bottom) / (top - bottom)
        for end, _ in ends
    ]
    # the layout still takes room for what stands below the axes
    points = 0.8 * (top - bottom) / cast(Figure, axes.get_figure(root=True)).dpi * 72
    for place, (_, text) in zip(spread_out(heights, 1.3 * style.SMALL / points), ends, strict=True):
        axes.annotate(
            text,
            (1, place),
            xycoords="axes fraction",
            xytext=(4, 0),
            textcoords="offset points",
            va="center",
            fontsize=style.SMALL,
            annotation_clip=False,
        )


def spread_out(places: Sequence[float], gap: float) -> list[float]:
    """Return places moved as little as needed to lie `gap` apart, in the same order.

    Examples
    --------
    >>> [round(place, 2) for place in spread_out([0.9, 0.5, 0.92], 0.1)]
    [0.86, 0.5, 0.96]
    """
    order = sorted(range(len(places)), key=lambda i: places[i])
    # runs of texts that touch: the sum of the wished starts, and the members
    runs: list[tuple[list[float], list[int]]] = []
    for i in order:
        starts, members = [places[i]], [i]
        while runs and sum(starts) / len(starts) < _mean_end(runs[-1], gap):
            earlier, others = runs.pop()
            starts = [*earlier, *(s - gap * len(others) for s in starts)]
            members = [*others, *members]
        runs.append((starts, members))
    result = [0.0] * len(places)
    for starts, members in runs:
        base = sum(starts) / len(starts)
        for step, i in enumerate(members):
            result[i] = base + step * gap
    return result


def _mean_end(run: tuple[list[float], list[int]], gap: float) -> float:
    starts, members = run
    return sum(starts) / len(starts) + gap * len(members)
