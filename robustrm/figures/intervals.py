"""A family of comparisons, one row each."""

from __future__ import annotations

from matplotlib.axes import Axes

from robustrm._format import level_text, p_cell
from robustrm.figures import style
from robustrm.figures.interval_rows import IntervalRow, draw_rows, write_headings
from robustrm.figures.labels import axis_text, one_line, wrapped
from robustrm.methods.adjusting import TITLES
from robustrm.results import Comparison, Estimate, FollowUps


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
    rows = [
        IntervalRow(_pair_text(c), c.estimate, str(c.result.n_subjects), p_cell(c.p_adjusted))
        for c in follow_ups
    ]
    known = [comparison.estimate for comparison in follow_ups if comparison.estimate is not None]
    with style.house():
        axes = style.axes_for(ax, (style.WIDTH, 1.25 + 0.36 * len(rows)))
        draw_rows(axes, rows)
        axes.set_xlabel(f"{_estimate_name(known)}\n{_interval_words(follow_ups)}")
        write_headings(axes, _p_heading(follow_ups.adjust))
    return axes


def _p_heading(adjust: str) -> str:
    p_value = "P" if adjust == "none" else "adjusted P"
    return f"{p_value}\n{wrapped(f'({TITLES[adjust]})', 12)}"  # "(Benjamini-" and "Hochberg)"


def _pair_text(comparison: Comparison) -> str:
    if len(one_line(comparison.label)) <= 22:
        return wrapped(comparison.label, 22)
    second = wrapped(comparison.second, 22, lines=1)
    return f"{second}\nvs {wrapped(comparison.first, 19, lines=1)}"


def _estimate_name(estimates: list[Estimate]) -> str:
    log = any(estimate.scale == "log" for estimate in estimates)
    names = {estimate.name for estimate in estimates}
    units = {estimate.unit for estimate in estimates}
    name = names.pop() if len(names) == 1 else "estimate"
    unit = units.pop() if len(units) == 1 else None
    return axis_text(40, name, unit, "log axis" if log else "")


def _interval_words(follow_ups: FollowUps) -> str:
    whose = "each" if follow_ups.intervals == "separate" else "together"
    return f"{follow_ups.intervals} intervals, {level_text(follow_ups.level)} {whose}"
