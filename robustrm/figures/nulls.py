"""The null distribution of a test with the observed value in it."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes

from robustrm._format import number
from robustrm.figures import style
from robustrm.figures.labels import axis_text
from robustrm.methods.null_distribution import NullDistribution

_BARS = 60  # more values than this are gathered in classes


def null_law(null: NullDistribution, *, ax: Axes | None = None) -> Axes:
    """Draw a null distribution and mark the observed value of the statistic.

    Parameters
    ----------
    null : NullDistribution
        From :func:`robustrm.null_distribution`.
    ax : Axes, optional
        Where to draw; a new figure if not given.

    Returns
    -------
    Axes
        Probability (or share of the draws) against the statistic; values at least as large as
        the observed one are filled.

    Notes
    -----
    A law with more than 60 values is gathered in classes of equal width, for the eye only.
    """
    places, heights, width = _columns(null)
    beyond = places + width / 2 > null.observed
    with style.house():
        axes = style.axes_for(ax, (style.WIDTH, 2.4))
        for chosen, colour, label in (
            (~beyond, style.QUIET, "below the observed value"),
            (beyond, style.ACCENT, "at or above it"),
        ):
            axes.bar(
                places[chosen],
                heights[chosen],
                width=width,
                color=colour,
                edgecolor=style.INK,
                linewidth=0.3,
                label=label,
            )
        axes.axvline(null.observed, color=style.INK, linewidth=1.2, linestyle="--", zorder=3)
        axes.set_ylim(bottom=0)
        axes.set_xlim(*_view(null, width))
        left = null.observed < sum(axes.get_xlim()) / 2
        axes.annotate(
            f"observed {number(null.observed, 4)}",
            (null.observed, 1),
            xycoords=axes.get_xaxis_transform(),
            xytext=(4 if left else -4, -2),
            textcoords="offset points",
            ha="left" if left else "right",
            va="top",
            fontsize=style.SMALL,
        )
        axes.set_xlabel(axis_text(40, null.statistic_name, None))
        kind = "probability (exact)" if null.null == "exact" else "share of 9,999 arrangements"
        axes.set_ylabel(kind)
        style.ticks(axes.xaxis, log=False)
    return axes


def _view(null: NullDistribution, width: float) -> tuple[float, float]:
    """Show all but the last ten-thousandth of the law, and the observed value with room."""
    if not np.isfinite(null.observed):
        return 0.0, 1.0  # no subject varies: there is no statistic
    reached = np.cumsum(null.weights)
    low, high = null.values[np.searchsorted(reached, [1e-4, 1 - 1e-4]).clip(max=reached.size - 1)]
    ends = [value for value in (low, high, null.observed) if np.isfinite(value)]
    room = 0.12 * (max(ends) - min(ends)) + width
    return min(ends) - width, max(ends) + room


def _columns(null: NullDistribution) -> tuple[np.ndarray, np.ndarray, float]:
    """Return centres, heights and width of the columns to draw."""
    finite = np.isfinite(null.values)
    values, weights = null.values[finite], null.weights[finite]
    if values.size <= 1:
        return values, weights, 1.0
    if values.size <= _BARS:
        return values, weights, 0.9 * float(np.diff(values).min())
    edges = np.linspace(values[0], values[-1], _BARS + 1)
    # one edge of the classes is the observed value, so that the filled part is the tail
    edges = edges + (null.observed - edges[np.searchsorted(edges, null.observed) - 1])
    edges = np.concatenate([[edges[0] - (edges[1] - edges[0])], edges])
    heights, _ = np.histogram(values, bins=edges, weights=weights)
    return (edges[:-1] + edges[1:]) / 2, heights, float(edges[1] - edges[0])
