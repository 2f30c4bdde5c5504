"""Two occasions: what each subject had on both, how each changed, and the estimate."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from robustrm._format import level_text, number, span
from robustrm.errors import ArgumentError
from robustrm.figures import style
from robustrm.figures.labels import with_unit, wrapped
from robustrm.figures.lines import trajectories
from robustrm.results import Comparison, Estimate
from robustrm.table import OccasionTable
from robustrm.ties import Bools, Floats

_ESTIMATE_AT = 1.6  # right of the subjects, who stand from 0 to 1


@dataclass(frozen=True, slots=True)
class Changes:
    """The changes of one pair, smallest first, as they are drawn.

    Parameters
    ----------
    values : array (m,)
        Ratios second / first on the log scale, else differences second − first.
    at_most, at_least : array (m,) of bool
        True where a member lies beyond a limit, so that the value only bounds the change.
    n_unknown : int
        Subjects with both members beyond the same limit, who have no value here.
    """

    values: Floats
    at_most: Bools
    at_least: Bools
    n_unknown: int

    @property
    def n(self) -> int:
        """Number of subjects with both occasions."""
        return self.values.size + self.n_unknown

    @property
    def bounded(self) -> Bools:
        """True where the change is only bounded."""
        return self.at_most | self.at_least


def changes_of(table: OccasionTable, comparison: Comparison) -> Changes:
    """Return the changes of the subjects that entered `comparison`, on its scale.

    No substitute is used: a value beyond a limit counts as the limit, which gives a bound.
    """
    scale = comparison.result.scale
    if scale == "raw" and table.scale == "log":
        raise ArgumentError(
            "`table` must be on the raw scale where differences were compared, got one of "
            "logarithms. Pass the table as it was read."
        )
    pair = (comparison.first, comparison.second)
    entered = table.select(subjects=comparison.result.subjects or table.subjects)
    used = entered.on_scale(scale).comparable(pair)
    gaps, _ = used.paired(*pair)
    below, above = used.below, used.above
    known = ~gaps.unknown
    order = np.argsort(gaps.values[known], kind="stable")
    values = np.exp(gaps.values) if scale == "log" else gaps.values
    return Changes(
        values=values[known][order],
        at_most=(below[:, 1] | above[:, 0])[known][order],
        at_least=(below[:, 0] | above[:, 1])[known][order],
        n_unknown=int(gaps.unknown.sum()),
    )


def paired_changes(table: OccasionTable, comparison: Comparison, *, ax: Axes | None = None) -> Axes:
    """Draw how every subject changed between two occasions, and the estimate beside.

    Parameters
    ----------
    table : OccasionTable
        The table that was analyzed, or the raw table it came from.
    comparison : Comparison
        The pair, with its estimate and interval.
    ax : Axes, optional
        Where to draw; a new figure if not given.

    Returns
    -------
    Axes
        Subjects from the smallest to the largest change, so that no two points hide each
        other; ratios on a log axis with a line at 1, differences with a line at 0.

    Raises
    ------
    ArgumentError
        When the comparison is of differences and the table holds logarithms, or when it
        names a subject or occasion that the table does not have.

    Notes
    -----
    An open triangle is a bound: one of the two values lies beyond a limit, and the true
    change lies in the direction in which the triangle points. The estimate may use a
    substitute for such a value, the points do not. Subjects with both values beyond the
    same limit are counted under the axis and not drawn.
    """
    changes = changes_of(table, comparison)
    logarithmic = comparison.result.scale == "log"
    with style.house():
        axes = style.axes_for(ax, (3.4, 3.4))
        if logarithmic:
            axes.set_yscale("log")
        axes.margins(y=0.1)
        axes.axhline(1.0 if logarithmic else 0.0, color=style.QUIET, linewidth=1, zorder=1)
        _draw_changes(axes, changes)
        _draw_estimate(axes, comparison.estimate)
        axes.set_xlim(-0.1, 2.2)
        style.ticks(axes.yaxis, log=logarithmic)
        axes.set_xticks(
            [0.5, _ESTIMATE_AT], [_subjects_text(changes), _estimate_text(comparison.estimate)]
        )
        axes.tick_params(axis="x", length=0, labelsize=style.SMALL)
        axes.set_ylabel(_change_text(table, comparison))
        style.explain(axes, columns=1)
    return axes


def paired_figure(table: OccasionTable, comparison: Comparison) -> Figure:
    """Draw a pair in two panels: the two values of every subject, and the changes.

    Parameters
    ----------
    table : OccasionTable
        The table that was analyzed, or the raw table it came from.
    comparison : Comparison
        The pair, with its estimate and interval.

    Returns
    -------
    Figure
        Both panels show the subjects that entered the comparison.
    """
    both = table.select(
        subjects=comparison.result.subjects or None,
        occasions=(comparison.first, comparison.second),
    ).complete()
    with style.house():
        figure = style.new_figure((style.WIDTH, 3.5))
        left, right = figure.subplots(1, 2, width_ratios=(1, 1.25))
    trajectories(both, log=comparison.result.scale == "log", ax=left)
    paired_changes(table, comparison, ax=right)
    _share_legend(figure, (left, right))
    return figure


def _share_legend(figure: Figure, panels: tuple[Axes, Axes]) -> None:
    """Explain the symbols of both panels once, above them."""
    symbols: dict[str, Artist] = {}
    for axes in panels:
        handles, labels = axes.get_legend_handles_labels()
        for handle, label in zip(handles, labels, strict=True):
            symbols.setdefault(label, handle)
        if (legend := axes.get_legend()) is not None:
            legend.remove()
    if len(symbols) > 1:
        with style.house():
            figure.legend(
                list(symbols.values()),
                list(symbols),
                loc="outside upper left",
                ncols=2,
                frameon=False,
            )


def _draw_changes(axes: Axes, changes: Changes) -> None:
    places = (np.arange(changes.values.size) + 0.5) / max(changes.values.size, 1)
    size = 4.5 if changes.values.size <= 20 else 3.5
    for label, cells, marker, face in (
        ("measured", ~changes.bounded, "o", style.SUBJECT),
        ("change at most this", changes.at_most, "v", "white"),
        ("change at least this", changes.at_least, "^", "white"),
    ):
        if cells.any():
            axes.plot(
                places[cells],
                changes.values[cells],
                linestyle="none",
                marker=marker,
                markersize=size if marker == "o" else size + 1,
                markerfacecolor=face,
                markeredgecolor=style.SUBJECT,
                markeredgewidth=0.9,
                zorder=3,
                label=label,
            )


def _draw_estimate(axes: Axes, estimate: Estimate | None) -> None:
    if estimate is None:
        return
    if estimate.low is not None and estimate.high is not None:
        _draw_interval(axes, estimate.value, estimate.low, estimate.high)
    axes.plot(
        [_ESTIMATE_AT],
        [estimate.value],
        linestyle="none",
        marker="D",
        markersize=7.5,
        markerfacecolor=style.ACCENT,
        markeredgecolor=style.INK,
        zorder=4,
        label="_estimate",
    )


def _draw_interval(axes: Axes, value: float, low: float, high: float) -> None:
    """Draw the interval; an endless side runs to the edge of the view and does not move it."""
    least = 0.0 if axes.get_yscale() == "log" else -math.inf
    ends = [end if least < end < math.inf else value for end in (low, high)]
    (line,) = axes.plot(
        [_ESTIMATE_AT] * 2, ends, color=style.INK, linewidth=1.4, zorder=2, label="_interval"
    )
    bottom, top = axes.get_ylim()
    line.set_ydata([max(low, bottom), min(high, top)])
    axes.set_ylim(bottom, top)


def _subjects_text(changes: Changes) -> str:
    lines = ["subjects", f"n = {changes.n}"]
    if changes.n_unknown:
        lines.append(f"{changes.n_unknown} unknown, both\nbeyond a limit")
    return "\n".join(lines)


def _estimate_text(estimate: Estimate | None) -> str:
    if estimate is None:
        return "not estimable"
    head = f"{wrapped(estimate.name, 15)}\n{number(estimate.value)}"
    if estimate.level is None or estimate.low is None:
        return f"{head}\ninterval\nnot estimable"
    return f"{head}\n{level_text(estimate.level)} interval\n{span(estimate.low, estimate.high)}"


def _change_text(table: OccasionTable, comparison: Comparison) -> str:
    logarithmic = comparison.result.scale == "log"
    sign, unit, remark = ("/", None, "log axis") if logarithmic else ("−", table.unit, "")
    # Each occasion keeps its share of the line: which is divided by which must stay readable.
    second, first = (
        wrapped(occasion, 16, lines=1) for occasion in (comparison.second, comparison.first)
    )
    bracket = wrapped(with_unit("", unit, remark), 36, lines=1)
    pair = f"{second} {sign} {first}"
    break_or_space = "\n" if len(pair) + len(bracket) > 36 else " "
    return f"{wrapped(table.marker, 36, lines=1)}\n{pair}{break_or_space}{bracket}".rstrip()
