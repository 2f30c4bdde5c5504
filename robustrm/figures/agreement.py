"""Two occasions by every method: one row a method, one panel an estimand."""

from __future__ import annotations

from collections.abc import Sequence
from typing import cast

from matplotlib.axes import Axes
from matplotlib.figure import Figure

from robustrm._format import p_cell
from robustrm.analysis import Row
from robustrm.figures import style
from robustrm.figures.interval_rows import IntervalRow, draw_rows, write_headings
from robustrm.figures.labels import axis_text, wrapped

Panel = tuple[str, tuple[Row, ...]]

_ROW, _PANEL = 0.27, 0.62  # inches a row takes, and a panel besides its rows


def panels(rows: Sequence[Row]) -> tuple[Panel, ...]:
    """Return the rows by what they estimate, those on the scale of the first before the others.

    Two rows share a panel only where estimand, scale and unit agree. Rows that have no estimate
    with an interval are left out: there is nothing to set on an axis.
    """
    found: dict[tuple[str, str, str | None], list[Row]] = {}
    for row in rows:
        estimate = row.result.estimate
        if estimate is not None:
            key = (row.result.estimand, row.result.scale, estimate.unit)
            found.setdefault(key, []).append(row)
    planned = rows[0].result.scale if rows else None
    ordered = sorted(found.items(), key=lambda item: item[0][1] != planned)
    return tuple((_name(held[0], unit, scale), tuple(held)) for (_, scale, unit), held in ordered)


def _name(row: Row, unit: str | None, scale: str) -> str:
    estimate = row.result.estimate
    assert estimate is not None  # rows without one are in no panel
    # a probability of a direction has no scale
    remark = f"{scale} scale" if estimate.no_change is None else ""
    return axis_text(46, estimate.name, unit, remark)


def agreement(rows: Sequence[Row]) -> Figure:
    """Draw what every method says of one pair of occasions.

    Parameters
    ----------
    rows : sequence of Row
        Results about the same two occasions, the planned one first.

    Returns
    -------
    Figure
        One panel an estimand, each with an axis of its own: estimates of different things never
        share one. The planned row has a filled symbol, the others open ones. n and the unadjusted
        P value stand on the right.
    """
    shown = panels(rows)
    heights = [_ROW * len(held) + _PANEL for _, held in shown] or [1.0]
    with style.house():
        figure = style.new_figure((style.WIDTH, sum(heights) + 0.3))
        grid = figure.subplots(len(heights), 1, squeeze=False, height_ratios=heights)
        for place, (axes, (name, held)) in enumerate(zip(grid[:, 0], shown, strict=False)):
            _draw_panel(cast(Axes, axes), name, held, first=place == 0)
    return figure


def _draw_panel(axes: Axes, name: str, rows: Sequence[Row], *, first: bool) -> None:
    style.axes_for(axes, (0, 0))
    drawn = [
        IntervalRow(
            wrapped(row.title, 22),
            row.result.estimate,
            str(row.result.n_subjects),
            p_cell(row.result.p_value),
            planned=row.role == "primary",
        )
        for row in rows
    ]
    draw_rows(axes, drawn)
    axes.set_xlabel(name)
    if first:
        write_headings(axes, "P")
