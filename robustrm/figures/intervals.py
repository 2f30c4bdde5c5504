"""A family of comparisons, one row each."""

from __future__ import annotations

import math
from typing import Literal

from matplotlib.axes import Axes

from robustrm._format import level_text, p_cell
from robustrm.figures import style
from robustrm.figures.labels import axis_text, one_line, wrapped
from robustrm.methods.adjusting import TITLES
from robustrm.results import Comparison, Estimate, FollowUps

HAlign = Literal["left", "center", "right"]
_N_AT, _P_AT = 26, 88  # points right of the axes, where the columns end


def comparisons(follow_ups: FollowUps, *, ax: Axes | None = None) -> Axes:
    """Draw the estimates and intervals of a family of comparisons.

    Parameters
    ----------
    follow_ups : FollowUps
        The family; every member gets a row, also one that could not be estimated.
    ax : Axes, optional
        Where to draw; a new figure if not given.

    Returns
    -------
    Axes
        Ratios on a log axis with a line at 1, differences with a line at 0, probabilities with
        a line at a half; n and the adjusted p value stand on the right.

    Notes
    -----
    The axis says whether each interval holds its level alone or all of them together. A
    separate interval and an adjusted p value can disagree.
    """
    estimates = [comparison.estimate for comparison in follow_ups]
    known = [estimate for estimate in estimates if estimate is not None]
    logarithmic = any(estimate.scale == "log" for estimate in known)
    neutral = known[0].neutral if known else 0.0
    with style.house():
        axes = style.axes_for(ax, (style.WIDTH, 1.25 + 0.36 * len(follow_ups)))
        if logarithmic:
            axes.set_xscale("log")
        axes.margins(x=0.08)
        axes.set_ylim(len(follow_ups) - 0.5, -0.5)
        axes.axvline(neutral, color=style.QUIET, linewidth=1, zorder=1)
        _set_range(axes, known, neutral, log=logarithmic)
        for row, comparison in enumerate(follow_ups):
            _draw_row(axes, row, comparison)
        style.ticks(axes.xaxis, log=logarithmic)
        axes.set_yticks(range(len(follow_ups)), [_pair_text(c) for c in follow_ups])
        axes.spines["left"].set_visible(False)
        axes.tick_params(axis="y", length=0)
        axes.set_xlabel(f"{_estimate_name(known, log=logarithmic)}\n{_interval_words(follow_ups)}")
        _write_headings(axes, follow_ups.adjust)
    return axes


def _set_range(axes: Axes, estimates: list[Estimate], neutral: float, *, log: bool) -> None:
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


def _draw_row(axes: Axes, row: int, comparison: Comparison) -> None:
    estimate = comparison.estimate
    if estimate is None:
        _write(axes, 0.5, row, "not estimable", "center")
    else:
        _draw_estimate(axes, row, estimate)
    _write_column(axes, row, _N_AT, str(comparison.result.n_subjects))
    _write_column(axes, row, _P_AT, p_cell(comparison.p_adjusted))


def _draw_estimate(axes: Axes, row: int, estimate: Estimate) -> None:
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
        markerfacecolor=style.ACCENT,
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


def _write_headings(axes: Axes, adjust: str) -> None:
    p_value = "P" if adjust == "none" else "adjusted P"
    title = wrapped(f"({TITLES[adjust]})", 12)  # at most "(Benjamini-" and "Hochberg)"
    for points, text in ((_N_AT, "n"), (_P_AT, f"{p_value}\n{title}")):
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


def _pair_text(comparison: Comparison) -> str:
    if len(one_line(comparison.label)) <= 22:
        return wrapped(comparison.label, 22)
    second = wrapped(comparison.second, 22, lines=1)
    return f"{second}\nvs {wrapped(comparison.first, 19, lines=1)}"


def _estimate_name(estimates: list[Estimate], *, log: bool) -> str:
    names = {estimate.name for estimate in estimates}
    units = {estimate.unit for estimate in estimates}
    name = names.pop() if len(names) == 1 else "estimate"
    unit = units.pop() if len(units) == 1 else None
    return axis_text(40, name, unit, "log axis" if log else "")


def _interval_words(follow_ups: FollowUps) -> str:
    whose = "each" if follow_ups.intervals == "separate" else "together"
    return f"{follow_ups.intervals} intervals, {level_text(follow_ups.level)} {whose}"
