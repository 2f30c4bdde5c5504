"""One comparison with every subject left out in turn, beside the result of all."""

from __future__ import annotations

import math

from matplotlib.axes import Axes

from robustrm._format import counted, number, number_range, span
from robustrm.figures import style
from robustrm.figures.interval_rows import set_range
from robustrm.figures.labels import axis_text, one_line, wrapped
from robustrm.results import Estimate
from robustrm.sensitivity_analysis.influence import Influence, Without

Drawn = tuple[Without, Estimate]

_ROW = 0.13  # inches a subject takes


def leave_one_out(influence: Influence, *, ax: Axes | None = None) -> Axes:
    """Draw the estimate without each subject, sorted, beside the estimate of all.

    Parameters
    ----------
    influence : Influence
        One analysis of one comparison, from :func:`sensitivity_analysis.leave_one_out`.
    ax : Axes, optional
        Where to draw; a new figure if not given.

    Returns
    -------
    Axes
        One row a subject left out, with its interval; the estimate and interval of all subjects
        as a dashed line and a band. Who moves the estimate most has a filled symbol; a square
        changes the reading.

    Notes
    -----
    No identifier is in the figure: the sentences and tables name the subjects. Subjects who are
    not in the comparison have no row, and the axis counts those without an estimate.
    """
    drawn = drawn_of(influence)
    with style.house():
        axes = style.axes_for(ax, (style.WIDTH, 1.65 + _ROW * max(len(drawn), 3)))
        whole = influence.row.result.estimate
        if whole is None or not drawn:
            _write_nothing(axes)
            return axes
        logarithmic = whole.scale == "log" and whole.no_change is None
        if logarithmic:
            axes.set_xscale("log")
        axes.set_ylim(len(drawn) - 0.3, -0.7)
        everything = [whole, *(estimate for _, estimate in drawn)]
        set_range(axes, everything, whole.neutral, log=logarithmic)
        _draw_whole(axes, whole)
        for place, (without, estimate) in enumerate(drawn):
            _draw_interval(axes, place, estimate)
            _draw_symbol(axes, place, without, estimate, influence.most_influential)
        style.ticks(axes.xaxis, log=logarithmic)
        axes.set_yticks([])
        axes.spines["left"].set_visible(False)
        axes.set_xlabel(_axis_name(influence, whole, drawn))
        axes.set_ylabel("one subject left out, by estimate")
        _explain(axes)
    return axes


def drawn_of(influence: Influence) -> list[Drawn]:
    """Return the repeats that have an estimate, smallest first."""
    known = [
        (without, row.result.estimate)
        for without, row in influence.made
        if row.result.estimate is not None and math.isfinite(row.result.estimate.value)
    ]
    return sorted(known, key=lambda drawn: drawn[1].value)


def describe_leave_one_out(influence: Influence) -> str:
    """Say in words what :func:`leave_one_out` draws; no identifier is named."""
    drawn = drawn_of(influence)
    row, whole = influence.row, influence.row.result.estimate
    head = f"{row.label}, {row.title}, with every subject left out in turn"
    if whole is None or not drawn:
        return one_line(f"{head}: there is no estimate to draw.")
    unit = f" {whole.unit}" if whole.unit else ""
    values = [estimate.value for _, estimate in drawn]
    parts = [
        f"{head}, {counted(len(drawn), 'row')} sorted by estimate: {whole.name} "
        f"{number_range(min(values), max(values))}{unit}; of all {row.result.n_subjects} subjects "
        f"{number(whole.value)}{unit}"
        + ("." if whole.low is None else f", interval {span(whole.low, whole.high)}.")
    ]
    most = influence.most_influential
    ends = sorted(estimate.value for without, estimate in drawn if without.subject in most)
    if ends:
        who = "One subject moves" if len(most) == 1 else f"{len(most)} subjects each move"
        to = " or ".join(dict.fromkeys(number(end) for end in (ends[0], ends[-1])))
        parts.append(f"{who} the estimate most, to {to}.")
    changing = sum(bool(without.changes) for without, _ in drawn)
    who = counted(changing, "subject") if changing else "Nobody"
    verb = "changes" if changing < 2 else "change"
    parts.append(f"{who} left out {verb} the reading.")
    return one_line(" ".join(parts))


# ── parts ─────────────────────────────────────────────────────────────────────────────────


def _draw_whole(axes: Axes, whole: Estimate) -> None:
    left, right = axes.get_xlim()
    if whole.low is not None and whole.high is not None:
        axes.axvspan(
            max(whole.low, left),
            min(whole.high, right),
            facecolor=style.BAND,
            zorder=0,
            label="all subjects, interval",
        )
    axes.axvline(whole.neutral, color=style.QUIET, linewidth=1, zorder=1)
    axes.axvline(
        whole.value, color=style.INK, linewidth=1, linestyle="--", zorder=1, label="all subjects"
    )


def _draw_interval(axes: Axes, place: int, estimate: Estimate) -> None:
    if estimate.low is None or estimate.high is None:
        return
    left, right = axes.get_xlim()
    ends = (max(estimate.low, left), min(estimate.high, right))
    axes.plot(ends, [place, place], color=style.QUIET, linewidth=1, zorder=2, label="_interval")


def _draw_symbol(
    axes: Axes, place: int, without: Without, estimate: Estimate, most: tuple[str, ...]
) -> None:
    axes.plot(
        [estimate.value],
        [place],
        linestyle="none",
        marker="s" if without.changes else "o",
        markersize=5,
        markerfacecolor=style.ACCENT if without.subject in most else "white",
        markeredgecolor=style.INK,
        zorder=4,
        label=_meaning(without, most),
    )


def _meaning(without: Without, most: tuple[str, ...]) -> str:
    told = ["one left out"]
    if without.subject in most:
        told.append("moves most")
    if without.changes:
        told.append("reads otherwise")
    return ", ".join(told)


def _axis_name(influence: Influence, whole: Estimate, drawn: list[Drawn]) -> str:
    name = axis_text(46, whole.name, whole.unit, f"{influence.row.result.scale} scale")
    row = influence.row
    lines = [
        name,
        wrapped(row.label, 46, lines=1),
        wrapped(f"{row.title}, n = {row.result.n_subjects}", 46, lines=1),
    ]
    absent = sum(without.included for without in influence.repeats) - len(drawn)
    if absent:
        lines.append(f"{counted(absent, 'subject')} without whom there is no estimate")
    return "\n".join(lines)


def _explain(axes: Axes) -> None:
    """Explain each symbol once, above the axes."""
    handles, labels = axes.get_legend_handles_labels()
    once = dict(zip(labels, handles, strict=True))
    axes.legend(
        list(once.values()),
        list(once),
        loc="lower left",
        bbox_to_anchor=(0, 1),
        ncols=2,
        frameon=False,
    )


def _write_nothing(axes: Axes) -> None:
    axes.set_xticks([])
    axes.set_yticks([])
    axes.spines[["left", "bottom"]].set_visible(False)
    axes.text(0.5, 0.5, "not estimable", transform=axes.transAxes, ha="center", va="center")
