"""Rows of estimates with their intervals on one axis: what several figures have in common."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

from matplotlib.axes import Axes

from robustrm.figures import style
from robustrm.results import Estimate

HAlign = Literal["left", "center", "right"]
N_AT, P_AT = 26, 88  # points right of the axes, where the columns end


@dataclass(frozen=True, slots=True)
class IntervalRow:
    """One row: its name, the estimate if there is one, and the words at its right.

    A row that is not a planned one has an open symbol.
    """

    name: str
    estimate: Estimate | None
    n: str
    p: str
    planned: bool = True


def draw_rows(axes: Axes, rows: Sequence[IntervalRow]) -> None:
    """Draw rows on an axis that they share, first row on top; a log axis for ratios."""
    known = [row.estimate for row in rows if row.estimate is not None]
    logarithmic = any(estimate.scale == "log" for estimate in known)
    neutral = known[0].neutral if known else 0.0
    if logarithmic:
        axes.set_xscale("log")
    axes.margins(x=0.08)
    axes.set_ylim(len(rows) - 0.5, -0.5)
    axes.axvline(neutral, color=style.QUIET, linewidth=1, zorder=1)
    set_range(axes, known, neutral, log=logarithmic)
    for place, row in enumerate(rows):
        _draw_row(axes, place, row)
    style.ticks(axes.xaxis, log=logarithmic)
    axes.set_yticks(range(len(rows)), [row.name for row in rows])
    axes.spines["left"].set_visible(False)
    axes.tick_params(axis="y", length=0)


def write_headings(axes: Axes, p_heading: str) -> None:
    """Write what stands in the columns at the right."""
    for points, text in ((N_AT, "n"), (P_AT, p_heading)):
        axes.annotate(
            text,
            (1, 1),
            xycoords="axes fraction",
            xytext=(points, 2),
            textcoords="offset points",
            ha="right",
            va="bottom",
            annotation_clip=False,
        )


def set_range(axes: Axes, estimates: list[Estimate], neutral: float, *, log: bool) -> None:
    """Show every estimate, every finite end and the line of no change, with a margin."""
    ends = [neutral] + [
        end
        for estimate in estimates
        for end in (estimate.value, estimate.low, estimate.high)
        if end is not None and math.isfinite(end) and (end > 0 or not log)
    ]
    places = [math.log(end) for end in ends] if log else ends
    margin = 0.08 * (max(places) - min(places)) or math.log(2)
    low, high = min(places) - margin, max(places) + margin
    axes.set_xlim(*((math.exp(low), math.exp(high)) if log else (low, high)))


def _draw_row(axes: Axes, place: int, row: IntervalRow) -> None:
    if row.estimate is None:
        _write(axes, 0.5, place, "not estimable", "center")
    else:
        _draw_estimate(axes, place, row.estimate, planned=row.planned)
    _write_column(axes, place, N_AT, row.n)
    _write_column(axes, place, P_AT, row.p)


def _draw_estimate(axes: Axes, row: int, estimate: Estimate, *, planned: bool) -> None:
    low, high = estimate.low, estimate.high
    if low is None or high is None:
        _write(axes, 0.98, row - 0.3, "interval not estimable", "right")
    else:
        left, right = axes.get_xlim()
        ends = (max(low, left), min(high, right))
        axes.plot(ends, [row, row], color=style.INK, linewidth=1.4, zorder=2, label="_interval")
        # An endless side runs to the edge of the view and carries an arrow there.
        for end, edge, arrow in ((low, left, "<"), (high, right, ">")):
            if (end < edge) if arrow == "<" else (end > edge):
                axes.plot([edge], [row], marker=arrow, color=style.INK, clip_on=False)
    axes.plot(
        [estimate.value],
        [row],
        linestyle="none",
        marker="D",
        markersize=7,
        markerfacecolor=style.ACCENT if planned else "white",
        markeredgecolor=style.INK,
        zorder=4,
        label="_estimate",
    )


def _write(axes: Axes, place: float, row: float, text: str, align: HAlign) -> None:
    axes.text(
        place,
        row,
        text,
        transform=axes.get_yaxis_transform(),
        ha=align,
        va="center",
        fontsize=style.SMALL,
        fontstyle="italic",
        bbox={"facecolor": "white", "edgecolor": "none", "pad": 1},
    )


def _write_column(axes: Axes, row: int, points: int, text: str) -> None:
    axes.annotate(
        text,
        (1, row),
        xycoords=axes.get_yaxis_transform(),
        xytext=(points, 0),
        textcoords="offset points",
        ha="right",
        va="center_baseline",  # as the labels of the ticks
        annotation_clip=False,
    )
