"""What was measured, what lies beyond a limit and what is missing: subjects by occasions."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.patches import Patch

from robustrm._format import counted, listing
from robustrm.figures import style
from robustrm.figures.labels import one_line, with_unit, wrapped
from robustrm.sensitivity_analysis.missing_patterns import Pattern, pattern_words, patterns_of
from robustrm.table import OccasionTable

_ROW = (0.13, 0.2)  # inches that a subject takes: with many, and with few
_TALLEST = 7.8
_SHADES = {"measured": style.SUBJECT, "below": style.BAND, "above": style.BAND, "missing": "white"}
_MARKERS = {"below": "v", "above": "^", "missing": "x"}
_LABELS = {
    "measured": "measured",
    "below": "below the limit",
    "above": "above the limit",
    "missing": "missing",
}


def missing_map(table: OccasionTable, *, ax: Axes | None = None) -> Axes:
    r"""Draw one cell for every subject and occasion, subjects sorted by what they lack.

    Parameters
    ----------
    table : OccasionTable
        On either scale; no value is drawn, only whether there is one.
    ax : Axes, optional
        Where to draw; a new figure if not given.

    Returns
    -------
    Axes
        Subjects who lack the same occasions stand together, complete ones on top, with their
        number at the right. n at an occasion counts the values there, also those beyond a limit.

    Notes
    -----
    No identifier is drawn. Within a pattern the order of the subjects depends on their values
    alone.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[91, 72, 60], [40, np.nan, 25], [120, 125, np.nan]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ... )
    >>> [tick.get_text() for tick in missing_map(table).get_xticklabels()]
    ['week 0\nn = 3', 'week 6\nn = 2', 'week 12\nn = 2']
    """
    ordered = table.by_content()
    patterns = patterns_of(ordered)
    rows = [row for pattern in patterns for row in pattern.rows]
    n, k = len(rows), ordered.n_occasions
    row_height = min(_ROW[1], max(_ROW[0], 4 / max(n, 1)), _TALLEST / max(n, 1))
    with style.house():
        width = min(style.WIDTH + 0.6 * max(k - 6, 0), 7.2)
        axes = style.axes_for(ax, (width, max(row_height * n, 1.2) + 1.1))
        states = _states(ordered)[rows]
        _draw_cells(axes, states)
        axes.set_xlim(-0.5, k - 0.5)
        axes.set_ylim(n - 0.5, -0.5)
        _draw_groups(axes, patterns, labelled=row_height >= _ROW[0])
        room = max(style.characters(axes) // max(k, 1), 6)
        axes.set_xticks(range(k), [_occasion_text(ordered, j, room) for j in range(k)])
        axes.set_yticks([])
        axes.set_ylabel(wrapped("subjects, sorted by what they lack", 20))
        axes.spines[:].set_visible(False)
        axes.tick_params(length=0)
        _explain(axes, states)
    return axes


def describe_missing_map(table: OccasionTable) -> str:
    """Say in words what :func:`missing_map` draws; no identifier is named."""
    columns = [_occasion_words(table, j) for j in range(table.n_occasions)]
    patterns = [
        f"{pattern_words(table, pattern.missing)} ({len(pattern.rows)})"
        for pattern in patterns_of(table)
    ]
    return one_line(
        f"Map of {with_unit(table.marker, table.unit)}: {counted(table.n_subjects, 'subject')} by "
        f"{table.n_occasions} occasions, {int(table.missing.sum())} of {table.values.size} values "
        f"missing. {'; '.join(columns)}. Number of subjects by pattern: {'; '.join(patterns)}."
    )


def _states(table: OccasionTable) -> np.ndarray:
    states = np.full(table.values.shape, "measured", dtype=object)
    for name in ("below", "above", "missing"):
        states[getattr(table, name)] = name
    return states


def _draw_cells(axes: Axes, states: np.ndarray) -> None:
    """Draw the cells: lightness tells them apart, and every one but the measured has a symbol."""
    for name, shade in _SHADES.items():
        places = np.argwhere(states == name)
        if not len(places):
            continue
        for row, column in places.tolist():
            axes.barh(
                row,
                0.94,
                height=0.86,
                left=column - 0.47,
                color=shade,
                edgecolor=style.QUIET,
                linewidth=0.6 if name != "measured" else 0,
                zorder=2,
            )
        if name in _MARKERS:
            axes.plot(
                places[:, 1],
                places[:, 0],
                linestyle="none",
                marker=_MARKERS[name],
                markersize=4.5,
                color=style.INK,
                markerfacecolor="white",
                markeredgewidth=0.9,
                zorder=3,
                label=f"_{name}",
            )


def _draw_groups(axes: Axes, patterns: tuple[Pattern, ...], *, labelled: bool) -> None:
    """Part the patterns by lines, and write how many subjects each has at the right."""
    start = 0
    for pattern in patterns:
        size = len(pattern.rows)
        if start:
            axes.axhline(start - 0.5, color=style.INK, linewidth=0.9, zorder=4, label="_pattern")
        if labelled or size > 1:
            axes.annotate(
                str(size),
                (1, start + (size - 1) / 2),
                xycoords=axes.get_yaxis_transform(),
                xytext=(16, 0),
                textcoords="offset points",
                ha="right",
                va="center_baseline",
                fontsize=style.SMALL,
                annotation_clip=False,
            )
        start += size
    axes.annotate(
        "n",
        (1, 1),
        xycoords="axes fraction",
        xytext=(16, 2),
        textcoords="offset points",
        ha="right",
        va="bottom",
        annotation_clip=False,
    )


def _explain(axes: Axes, states: np.ndarray) -> None:
    from matplotlib.lines import Line2D

    found = [name for name in _SHADES if (states == name).any()]
    handles = [
        Line2D(
            [],
            [],
            linestyle="none",
            marker=_MARKERS[name],
            color=style.INK,
            markerfacecolor="white",
            markersize=4.5,
        )
        if name in _MARKERS
        else Patch(facecolor=_SHADES[name])
        for name in found
    ]
    axes.legend(
        handles,
        [_LABELS[name] for name in found],
        loc="lower left",
        bbox_to_anchor=(0, 1),
        ncols=2,
        frameon=False,
    )


def _occasion_text(table: OccasionTable, j: int, width: int) -> str:
    present = int((~table.missing[:, j]).sum())
    return f"{wrapped(table.occasions[j], width, lines=3)}\nn = {present}"


def _occasion_words(table: OccasionTable, j: int) -> str:
    counts = {
        "below a limit": int(table.below[:, j].sum()),
        "above a limit": int(table.above[:, j].sum()),
        "missing": int(table.missing[:, j].sum()),
    }
    present = f"n = {int((~table.missing[:, j]).sum())}"
    return (
        f"{table.occasions[j]}: {listing([present, *(f'{c} {w}' for w, c in counts.items() if c)])}"
    )
