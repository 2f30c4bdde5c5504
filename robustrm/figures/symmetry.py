"""Symmetry of the differences of two occasions: shown, not used to choose."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes

from robustrm._checks import check_choice
from robustrm._format import number
from robustrm.advice.describe import MirroredDifferences, mirrored_differences
from robustrm.advice.view import check_raw
from robustrm.figures import style
from robustrm.figures.diagnostic_parts import draw_points, label_ends, roomy_axes
from robustrm.figures.labels import axis_text, wrapped
from robustrm.results import Scale
from robustrm.table import OccasionTable

_FITS = 44  # characters that fit below these axes


def difference_symmetry(
    table: OccasionTable,
    first: str,
    second: str,
    *,
    scale: Scale = "log",
    substitute: str = "half",
    ax: Axes | None = None,
) -> Axes:
    """Draw how far the differences of two occasions lie above and below their median.

    It looks at the occasions, so it is descriptive: shown, not used to choose.

    Parameters
    ----------
    table : OccasionTable
        On the raw scale.
    first, second : str
        The occasions; differences are second - first, on logs ratios second / first.
    scale : {"log", "raw"}, default "log"
        Where the differences are taken. On logs the axes show distances as factors.
    substitute : {"half", "root2", "limit"}, default "half"
        What enters for a value below the limit that both occasions share.
    ax : Axes, optional
        Where to draw; a new figure if not given.

    Returns
    -------
    Axes
        One point for the largest and the smallest difference, one for the next two, and so on:
        distance of the upper one from the median against that of the lower one, on equal axes.
        Symmetric differences lie on the line. n and the median stand below.

    Raises
    ------
    ArgumentError
        When the table is not on the raw scale, or an occasion or option is not known.
    DataError
        When a value has no logarithm.

    Notes
    -----
    Subjects with both values below the limit enter as no change. A point is open when a value
    beyond a limit is in one of its two differences. With few subjects points stray far from the
    line under symmetry too.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[91, 72], [40, 31], [120, 125], [66, 50], [33, 21], [75, 60]],
    ...     occasions=["week 0", "week 6"],
    ... )
    >>> print(difference_symmetry(table, "week 0", "week 6").get_xlabel())
    distance below the median (factor, log axis)
    value, week 6 / week 0
    n = 6, median ratio 0.783
    """
    found = mirrored_of(table, first, second, scale, substitute)
    remarks = ("factor", "log axis") if scale == "log" else (table.unit,)
    with style.house():
        axes = roomy_axes(ax, (3.6, 3.45))
        _draw_mirrored(axes, found)
        # Each occasion keeps its share of the line: which is divided by which must stay readable.
        later, earlier = (wrapped(occasion, 18, lines=1) for occasion in (second, first))
        sign = "/" if scale == "log" else "−"
        pair = f"{later} {sign} {earlier}"
        marker = wrapped(table.marker, _FITS, lines=1)
        named = f"{marker}, {pair}" if len(marker) + len(pair) + 2 <= _FITS else f"{marker}\n{pair}"
        below = axis_text(_FITS, "distance below the median", *remarks)
        axes.set_xlabel("\n".join([below, named, mirrored_note(found)]))
        axes.set_ylabel(axis_text(34, "distance above the median", *remarks))
        style.explain(axes, columns=1)
    return axes


def mirrored_of(
    table: OccasionTable, first: str, second: str, scale: Scale, substitute: str
) -> MirroredDifferences:
    """Return the distances that are drawn of two occasions."""
    check_raw(table)
    check_choice("scale", scale, ("log", "raw"))
    return mirrored_differences(table, first, second, scale=scale, substitute=substitute)


def mirrored_note(found: MirroredDifferences) -> str:
    """Return n and the median difference, on the log scale as a ratio."""
    if not found.n:
        return "n = 0"
    if found.scale == "log":
        return f"n = {found.n}, median ratio {number(float(np.exp(found.median)))}"
    return f"n = {found.n}, median difference {number(found.median)}"


def _draw_mirrored(axes: Axes, found: MirroredDifferences) -> None:
    log = found.scale == "log"
    below, above = (np.exp(d) if log else d for d in (found.below, found.above))
    if log:
        axes.set_xscale("log")
        axes.set_yscale("log")
    groups = [
        ("pair of differences", ~found.limited, "o", style.SUBJECT),
        ("with a value beyond a limit", found.limited, "o", "white"),
    ]
    draw_points(axes, below, above, groups)
    widest = max([*found.below.tolist(), *found.above.tolist()], default=0.0) or 1.0
    view = np.array([-0.05, 1.08]) * widest
    view = np.exp(view) if log else view
    axes.plot(view, view, color=style.INK, linewidth=0.9, zorder=1, label="_symmetric")
    axes.set_xlim(*view)
    axes.set_ylim(*view)
    axes.set_box_aspect(1)
    for axis in (axes.xaxis, axes.yaxis):
        style.ticks(axis, log=log)
    label_ends(axes, [(float(view[1]), "symmetric")])
