"""Diagnostics that are blind to the occasions, like the advice whose figures they show.

Spread against level, and the tails of the subject-centred values.
"""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes

from robustrm._checks import check_choice
from robustrm._format import counted, fixed
from robustrm.advice import blind
from robustrm.advice.view import blind_view, check_raw
from robustrm.figures import style
from robustrm.figures.diagnostic_parts import draw_points, label_ends, roomy_axes
from robustrm.figures.labels import axis_text, with_unit, wrapped
from robustrm.results import Scale
from robustrm.table import OccasionTable
from robustrm.ties import Floats

_FITS, _TALL = 44, 34  # characters that fit below these axes, and beside them
_REFERENCES = ((0.0, "raw scale", "--"), (1.0, "log scale", ":"))


def spread_level(table: OccasionTable, *, ax: Axes | None = None) -> Axes:
    """Draw the spread of every subject's values against their level.

    Blind to the occasions: rearranging a subject's values changes nothing here.

    Parameters
    ----------
    table : OccasionTable
        On the raw scale.
    ax : Axes, optional
        Where to draw; a new figure if not given.

    Returns
    -------
    Axes
        One point a subject on log axes: standard deviation against median. The solid line has
        the slope that the advice tells. Thin lines through the middle have slope 0, where spread
        does not grow with the level (raw scale), and slope 1, where it grows in proportion (log
        scale). n and the number of subjects without a point stand below.

    Raises
    ------
    ArgumentError
        When the table is not on the raw scale.

    Notes
    -----
    A value beyond a limit counts as the limit, as in the advice. The spread then looks smaller
    than it is; such a subject has an open symbol. The spread holds the changes over the
    occasions too. With few subjects the slope is uncertain.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[91, 72, 60], [40, 31, 25], [120, 125, 80], [66, 50, 59], [33, 21, 20], [75, 60, 44]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ... )
    >>> [text.get_text() for text in spread_level(table).texts]
    ['slope 0: raw scale', 'slope 1: log scale', 'slope 0.73: fitted']
    """
    found = spread_of(table)
    with style.house():
        axes = roomy_axes(ax, (style.WIDTH, 3.4))
        axes.set_xscale("log")
        axes.set_yscale("log")
        _draw_subjects(axes, found)
        _draw_slopes(axes, found)
        axes.set_xlabel("\n".join([_level_text(table), *spread_notes(found)]))
        axes.set_ylabel(axis_text(_TALL, "SD within a subject", table.unit, "log axis"))
        style.explain(axes, columns=1)
    return axes


def centred_quantiles(
    table: OccasionTable, *, scale: Scale = "log", ax: Axes | None = None
) -> Axes:
    """Draw the pooled values less their subject's mean against normal quantiles.

    Blind to the occasions: rearranging a subject's values changes nothing here.

    Parameters
    ----------
    table : OccasionTable
        On the raw scale.
    scale : {"log", "raw"}, default "log"
        Where the values are centred. On logs the axis shows the ratio of a value to its
        subject's geometric mean, else its difference from the subject's mean.
    ax : Axes, optional
        Where to draw; a new figure if not given.

    Returns
    -------
    Axes
        Ordered values against normal quantiles at Blom's positions, a line through the quartiles,
        and below them n, tail weight and tail balance, which the advice tells.

    Raises
    ------
    ArgumentError
        When the table is not on the raw scale, or `scale` is not known.
    DataError
        When a value has no logarithm.

    Notes
    -----
    The values of one subject sum to zero, so the points are not independent, and the changes
    over the occasions are in them. A value beyond a limit counts as the limit, as in the advice;
    its open triangle points to where the value lies.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[91, 72, 60], [40, 31, 25], [120, 125, 80], [66, 50, 59], [33, 21, 20], [75, 60, 44]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ... )
    >>> print(centred_quantiles(table).get_xlabel())
    normal quantile
    n = 6 subjects, 18 values
    tail weight 1.82 (normal 2.58)
    tail balance 1.14 (symmetric 1)
    """
    found = centred_of(table, scale)
    logarithmic = scale == "log"
    with style.house():
        axes = roomy_axes(ax, (style.WIDTH, 3.4))
        if logarithmic:
            axes.set_yscale("log")
        axes.margins(x=0.04, y=0.06)
        _draw_quantiles(axes, found, log=logarithmic)
        style.ticks(axes.xaxis, log=False)
        style.ticks(axes.yaxis, log=logarithmic)
        axes.set_xlabel("\n".join(["normal quantile", *centred_notes(found)]))
        mean = "/ subject's geometric mean" if logarithmic else "− subject's mean"
        bracket = (None, "log axis") if logarithmic else (table.unit,)
        axes.set_ylabel(_centred_text(table.marker, mean, *bracket))
        style.explain(axes, columns=3)
    return axes


# ── what is drawn, and the words for it: the alternative texts use them too ───────────────


def spread_of(table: OccasionTable) -> blind.SpreadLevel:
    """Return the points and the line that are drawn of a table."""
    check_raw(table)
    return blind.spread_level(blind_view(table))


def centred_of(table: OccasionTable, scale: Scale) -> blind.CentredValues:
    """Return the centred values that are drawn of a table."""
    check_raw(table)
    check_choice("scale", scale, ("log", "raw"))
    return blind.centred_values(blind_view(table, scale=scale))


def spread_notes(found: blind.SpreadLevel) -> list[str]:
    """Return n, an absent slope, and who has no point."""
    head = f"n = {found.level.size}"
    if np.isnan(found.slope):
        head += ", slope not estimable"
    return [
        head,
        *(f"{counted(count, 'subject')} {why} not drawn" for why, count in found.left_out.items()),
    ]


def centred_notes(found: blind.CentredValues) -> list[str]:
    """Return n, tail weight and tail balance."""
    shape = found.shape
    return [
        f"n = {counted(found.n_subjects, 'subject')}, {counted(found.values.size, 'value')}",
        _against("tail weight", shape.tail_weight, "normal 2.58"),
        _against("tail balance", shape.tail_balance, "symmetric 1"),
    ]


def _against(name: str, value: float, reference: str) -> str:
    return f"{name} not defined" if np.isnan(value) else f"{name} {fixed(value, 2)} ({reference})"


# ── drawing ───────────────────────────────────────────────────────────────────────────────


def _draw_subjects(axes: Axes, found: blind.SpreadLevel) -> None:
    groups = [
        ("subject", ~found.limited, "o", style.SUBJECT),
        ("subject with a value beyond a limit", found.limited, "o", "white"),
    ]
    draw_points(axes, found.level, found.spread, groups)


def _draw_slopes(axes: Axes, found: blind.SpreadLevel) -> None:
    """Draw the lines to the right edge, where each has its label, and keep those ends in view."""
    if not found.level.size:
        axes.set(xticks=[], yticks=[])
        axes.minorticks_off()
        return
    low, high = _widened(found.level)
    across = np.geomspace(low, high, 50)
    ends = [float(found.spread.min()), float(found.spread.max())]
    lines = [
        (f"slope {slope:.0f}: {name}", found.through_middle(across, slope), dashes, 0.8)
        for slope, name, dashes in _REFERENCES
    ]
    if not np.isnan(found.slope):
        name = f"slope {fixed(found.slope, 2)}: fitted"
        lines.append((name, found.fitted(across), "-", 1.4))
    for name, heights, dashes, width in lines:
        axes.plot(
            across,
            heights,
            color=style.INK,
            linewidth=width,
            linestyle=dashes,
            zorder=1,
            label=f"_{name}",
        )
    labels = [(float(heights[-1]), name) for name, heights, *_ in lines]
    axes.set_xlim(low, high)
    axes.set_ylim(*_widened(np.array([*ends, *(height for height, _ in labels)])))
    for axis in (axes.xaxis, axes.yaxis):
        style.ticks(axis, log=True)
    label_ends(axes, labels)


def _widened(values: Floats) -> tuple[float, float]:
    """Return a range about positive values with a margin on a log axis."""
    low, high = np.log(values.min()), np.log(values.max())
    margin = max(0.08 * (high - low), np.log(1.1))
    return float(np.exp(low - margin)), float(np.exp(high + margin))


def _level_text(table: OccasionTable) -> str:
    """Return the label of the axis of levels; a long marker is shortened alone."""
    name = f"{wrapped(table.marker, _FITS - 21, lines=1)}, median of a subject"
    bracket = wrapped(with_unit("", table.unit, "log axis"), _FITS, lines=1)
    fits = len(name) + 1 + len(bracket) <= _FITS
    return f"{name}{' ' if fits else chr(10)}{bracket}"


def _centred_text(marker: str, mean: str, unit: str | None, *remarks: str) -> str:
    """Return the label of the axis; a long marker is shortened alone, what it is against never."""
    if len(marker) + len(mean) < _TALL:
        return axis_text(_TALL, f"{marker} {mean}", unit, *remarks)
    below = wrapped(with_unit(mean, unit, *remarks), _FITS, lines=1)
    return f"{wrapped(marker, _TALL, lines=1)}\n{below}"


def _draw_quantiles(axes: Axes, found: blind.CentredValues, *, log: bool) -> None:
    values = np.exp(found.values) if log else found.values
    groups = [
        ("measured", ~(found.below | found.above), "o", style.SUBJECT),
        ("below the limit", found.below, "v", "white"),
        ("above the limit", found.above, "^", "white"),
    ]
    draw_points(axes, found.quantiles, values, groups)
    if not values.size:
        return
    ends = found.quantiles[[0, -1]]
    heights = found.intercept + found.slope * ends
    heights = np.exp(heights) if log else heights
    axes.plot(ends, heights, color=style.INK, linewidth=0.9, zorder=1, label="_quartiles")
    label_ends(axes, [(float(heights[-1]), "quartile line")])
