"""Every subject's values over the occasions."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Literal

import numpy as np
from matplotlib.axes import Axes

from robustrm._format import number
from robustrm.errors import ArgumentError
from robustrm.figures import style
from robustrm.figures.labels import axis_text, tick_text, wrapped
from robustrm.methods.summary import OccasionSummary
from robustrm.table import OccasionTable
from robustrm.ties import Floats

Side = Literal["lower", "upper"]


def trajectories(
    table: OccasionTable,
    *,
    summary: Sequence[OccasionSummary] | None = None,
    log: bool | None = None,
    ids: bool = False,
    ax: Axes | None = None,
) -> Axes:
    r"""Draw one line a subject over the occasions.

    Parameters
    ----------
    table : OccasionTable
        On either scale; the axis always shows values in the marker's own unit.
    summary : sequence of OccasionSummary, optional
        Where the medians come from, which are drawn at the occasions that have one.
    log : bool, optional
        Whether the axis is logarithmic. Default: when all values are positive.
    ids : bool, default False
        Whether each line carries its subject's identifier. Left out unless asked for: a
        figure travels further than the table that it was made from.
    ax : Axes, optional
        Where to draw; a new figure if not given.

    Returns
    -------
    Axes
        With the number of subjects under every occasion.

    Raises
    ------
    ArgumentError
        When a log axis is asked for and a value is zero or negative.

    Notes
    -----
    A value beyond a limit is an open triangle at the limit. A missing value breaks the line:
    what was not measured is not joined. Occasions are evenly spaced, whatever the time
    between them.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[91, 72, 60], [40, 31, 25], [120, np.nan, 80]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ... )
    >>> [tick.get_text() for tick in trajectories(table).get_xticklabels()]
    ['week 0\nn = 3', 'week 6\nn = 2', 'week 12\nn = 3']
    """
    values = measured_unit(table, table.values)
    logarithmic = _is_log(values, log)
    k = table.n_occasions
    with style.house():
        axes = style.axes_for(ax, (min(style.WIDTH + 0.6 * max(k - 6, 0), 7.2), 3.4))
        if logarithmic:
            axes.set_yscale("log")
        axes.margins(y=0.08)
        _draw_subjects(axes, table, values)
        axes.set_xlim(-0.35, k - 0.65)
        _draw_limits(axes, table)
        if summary is not None:
            _draw_medians(axes, table, summary)
        if ids:
            _write_ids(axes, table, values)
        style.ticks(axes.yaxis, log=logarithmic)
        width = max(style.characters(axes) // k, 6)
        axes.set_xticks(range(k), [_occasion_text(table, j, width) for j in range(k)])
        remark = "log axis" if logarithmic else ""
        axes.set_ylabel(axis_text(36, table.marker, table.unit, remark))
        style.explain(axes, columns=2)
    return axes


def measured_unit(table: OccasionTable, cells: Floats) -> Floats:
    """Return cells of `table` in the unit in which the marker was measured."""
    return np.exp(cells) if table.scale == "log" else cells


def _is_log(values: Floats, asked: bool | None) -> bool:
    present = values[~np.isnan(values)]
    possible = bool(present.size) and bool((present > 0).all())
    if asked and not possible:
        seen = number(float(present.min())) if present.size else "no value at all"
        raise ArgumentError(
            f"`log` must be false where a value is zero or negative, got {seen}. "
            "Leave it out to have the axis chosen."
        )
    return possible if asked is None else asked


def _draw_subjects(axes: Axes, table: OccasionTable, values: Floats) -> None:
    for row in values:
        axes.plot(row, color=style.QUIET, linewidth=0.8, zorder=2, label="_subject")
    # Many subjects get smaller points, so that single ones can still be followed.
    size = 4.2 if table.n_subjects <= 20 else 3.2
    for label, cells, marker, face in (
        ("measured", ~table.missing & ~table.censored, "o", style.SUBJECT),
        ("below the limit", table.below, "v", "white"),
        ("above the limit", table.above, "^", "white"),
    ):
        rows, columns = np.nonzero(cells)
        if rows.size:
            axes.plot(
                columns,
                values[rows, columns],
                linestyle="none",
                marker=marker,
                markersize=size if marker == "o" else size + 1,
                markerfacecolor=face,
                markeredgecolor=style.SUBJECT,
                markeredgewidth=0.9,
                zorder=3,
                label=label,
            )


def _draw_limits(axes: Axes, table: OccasionTable) -> None:
    """Draw the limits that are in view; a far one must not press the values together."""
    bottom, top = axes.get_ylim()
    sides: tuple[tuple[Side, Floats, float], ...] = (
        ("lower", table.lower_limit, bottom),
        ("upper", table.upper_limit, top),
    )
    for side, limits, edge in sides:
        applied = np.where(table.missing, np.nan, measured_unit(table, limits))
        applied[~((applied >= bottom) & (applied <= top))] = np.nan
        distinct = np.unique(applied[~np.isnan(applied)])
        if not distinct.size:
            continue
        label = _limit_text(side, distinct, table.unit)
        if distinct.size == 1 and np.array_equal(np.isnan(applied), table.missing):
            axes.axhspan(edge, distinct[0], facecolor=style.BAND, zorder=0, label="_beyond")
            axes.axhline(
                distinct[0], color=style.INK, linewidth=0.9, linestyle="--", zorder=1, label=label
            )
        else:
            _draw_limits_of_occasions(axes, applied, label)
    axes.set_ylim(bottom, top)


def _draw_limits_of_occasions(axes: Axes, applied: Floats, label: str) -> None:
    places = [
        (j, limit)
        for j, column in enumerate(applied.T)
        for limit in np.unique(column[~np.isnan(column)]).tolist()
    ]
    at = np.array([j for j, _ in places])
    axes.hlines(
        [limit for _, limit in places],
        at - 0.3,
        at + 0.3,
        color=style.INK,
        linewidth=0.9,
        linestyle="--",
        zorder=1,
        label=label,
    )


def _limit_text(side: Side, distinct: Floats, unit: str | None) -> str:
    ends = [tick_text(float(limit)) for limit in (distinct[0], distinct[-1])]
    sizes = " to ".join(dict.fromkeys(ends))
    return wrapped(" ".join(part for part in (f"{side} limit", sizes, unit) if part), 34)


def _draw_medians(axes: Axes, table: OccasionTable, summary: Sequence[OccasionSummary]) -> None:
    medians = {s.occasion: s.median for s in summary}
    shown = [
        (j, median)
        for j, occasion in enumerate(table.occasions)
        if (median := medians.get(occasion)) is not None
    ]
    if shown:
        axes.plot(
            [j for j, _ in shown],
            [median for _, median in shown],
            linestyle="none",
            marker="D",
            markersize=7.5,
            markerfacecolor=style.ACCENT,
            markeredgecolor=style.INK,
            zorder=4,
            label="median",
        )


def _write_ids(axes: Axes, table: OccasionTable, values: Floats) -> None:
    for subject, row in zip(table.subjects, values, strict=True):
        present = np.flatnonzero(~np.isnan(row))
        if present.size:
            last = int(present[-1])
            axes.annotate(
                wrapped(subject, 10, lines=1),
                (last, float(row[last])),
                xytext=(5, 0),
                textcoords="offset points",
                va="center",
                fontsize=style.SMALL - 1,
            )


def _occasion_text(table: OccasionTable, j: int, width: int) -> str:
    """Return the label of an occasion with its n, and how many of them lie beyond a limit."""
    parts = [
        wrapped(table.occasions[j], width, lines=3),
        f"n = {int((~table.missing[:, j]).sum())}",
    ]
    for side, flags in (("below", table.below), ("above", table.above)):
        if flags[:, j].any():
            parts.append(f"{int(flags[:, j].sum())} {side}")
    return "\n".join(parts)
