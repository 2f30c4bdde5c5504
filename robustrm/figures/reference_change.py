"""Change in one person: the ratios of all subjects between the limits of usual variation."""

from __future__ import annotations

from typing import TYPE_CHECKING, Literal

import numpy as np
from matplotlib.axes import Axes

from robustrm._checks import check_member
from robustrm._format import counted, level_text, listing, number
from robustrm.figures import style
from robustrm.figures.labels import one_line, wrapped
from robustrm.sensitivity_analysis.reference_changes import ReferenceChanges
from robustrm.ties import Bools, Floats

if TYPE_CHECKING:
    import pandas as pd

VAlign = Literal["bottom", "center", "top"]
_MOST_LARGE = 20  # subjects that leave room for large symbols


def individual_changes(
    changes: ReferenceChanges, first: str, second: str, *, ax: Axes | None = None
) -> Axes:
    r"""Draw the ratio of every subject between two occasions, with the limits of usual variation.

    Parameters
    ----------
    changes : ReferenceChanges
        What was found of every subject.
    first, second : str
        A contrast that `changes` holds; the ratios are second / first.
    ax : Axes, optional
        Where to draw; a new figure if not given.

    Returns
    -------
    Axes
        Subjects from the smallest to the largest ratio on a log axis, the limits as dashed lines
        with their values, and how many lie below, between and above them. No identifier is drawn.

    Raises
    ------
    ArgumentError
        When `changes` holds no such contrast.

    Notes
    -----
    A triangle is a bound: one of the two values lies beyond a limit of detection, and the true
    ratio lies in the direction in which it points. It is filled where the bound itself lies
    outside. Subjects with both values beyond the same limit are counted and not drawn.

    Examples
    --------
    >>> from robustrm.sensitivity_analysis.reference_changes import reference_changes
    >>> from robustrm.table import OccasionTable
    >>> table = OccasionTable.from_array(
    ...     [[9.1, 2.0], [4.0, 3.1], [2.0, 7.5]], occasions=["week 0", "week 6"], marker="CRP"
    ... )
    >>> changes = reference_changes(table, cv_within=0.42, cv_assay=0.05, source="invented")
    >>> [text.get_text() for text in individual_changes(changes, "week 0", "week 6").texts]
    ['1 above\n3.08', '0.324\n1 below', '1 within']
    """
    rows, counts = _of_pair(changes, first, second)
    drawn = rows[rows["ratio"].notna()].sort_values("ratio", kind="stable")
    with style.house():
        axes = style.axes_for(ax, (3.6, 3.4))
        axes.set_yscale("log")
        axes.axhline(1.0, color=style.QUIET, linewidth=1, zorder=1)
        _draw_points(axes, drawn)
        _set_range(axes, changes, drawn["ratio"].to_numpy())
        style.ticks(axes.yaxis, log=True)
        _draw_limits(axes, changes, counts)
        axes.set_xlim(-0.05, 1.05)
        axes.set_xticks([0.5], [_subjects_text(counts)])
        axes.tick_params(axis="x", length=0, labelsize=style.SMALL)
        axes.set_ylabel(_ratio_text(changes.marker, first, second))
        style.explain(axes, columns=2)
    return axes


def describe_individual_changes(changes: ReferenceChanges, first: str, second: str) -> str:
    """Say in words what :func:`individual_changes` draws; no identifier is named."""
    _, counts = _of_pair(changes, first, second)
    seen = {
        "below the lower limit": counts["n_below"],
        "within the limits": counts["n_within"],
        "above the upper limit": counts["n_above"],
        "not known, a value beyond a limit of detection": counts["n_unknown"],
    }
    told = listing([f"{count} {what}" for what, count in seen.items() if count])
    return one_line(
        f"Ratios of {changes.marker}, {second} / {first}, of "
        f"{counted(int(counts['n']), 'subject')} on a log axis, with the limits of usual variation "
        f"of one person, {number(changes.low)} and {number(changes.high)} "
        f"({level_text(changes.level)}): {told or 'none'}."
    )


def _of_pair(
    changes: ReferenceChanges, first: str, second: str
) -> tuple[pd.DataFrame, pd.Series[float]]:
    """Return the rows and the counts of one contrast."""
    counts = changes.counts
    known = [f"{a} / {b}" for a, b in zip(counts["second"], counts["first"], strict=True)]
    place = known.index(check_member("second / first", f"{second} / {first}", known))
    frame = changes.frame
    rows = frame[(frame["first"] == first) & (frame["second"] == second)]
    return rows, counts.iloc[place]


def _draw_points(axes: Axes, drawn: pd.DataFrame) -> None:
    ratios: Floats = drawn["ratio"].to_numpy(dtype=float)
    places = (np.arange(ratios.size) + 0.5) / max(ratios.size, 1)
    outside: Bools = (drawn["outside"].to_numpy(dtype=object) == True).astype(bool)  # noqa: E712
    bound = drawn["bound"].to_numpy(dtype=str)
    size = 4.5 if ratios.size <= _MOST_LARGE else 3.5
    for label, cells, marker, face in (
        ("within the limits", (bound == "measured") & ~outside, "o", style.SUBJECT),
        ("outside", (bound == "measured") & outside, "s", style.INK),
        ("at most this", (bound == "at most") & ~outside, "v", "white"),
        ("at least this", (bound == "at least") & ~outside, "^", "white"),
        ("outside, at most this", (bound == "at most") & outside, "v", style.INK),
        ("outside, at least this", (bound == "at least") & outside, "^", style.INK),
    ):
        if cells.any():
            axes.plot(
                places[cells],
                ratios[cells],
                linestyle="none",
                marker=marker,
                markersize=size if marker in "os" else size + 1,
                markerfacecolor=face,
                markeredgecolor=style.INK if face == style.INK else style.SUBJECT,
                markeredgewidth=0.9,
                zorder=3,
                label=label,
            )


def _set_range(axes: Axes, changes: ReferenceChanges, ratios: Floats) -> None:
    """Show every ratio and both limits, with a margin."""
    ends = np.log([changes.low, changes.high, 1.0, *ratios.tolist()])
    ends = ends[np.isfinite(ends)]
    margin = 0.14 * float(np.ptp(ends)) or 0.5
    axes.set_ylim(float(np.exp(ends.min() - margin)), float(np.exp(ends.max() + margin)))


def _draw_limits(axes: Axes, changes: ReferenceChanges, counts: pd.Series[float]) -> None:
    """Draw the limits, and write how many lie beyond each and between them."""
    bottom, top = axes.get_ylim()
    places: dict[str, tuple[float, VAlign]] = {
        "above": (changes.high, "bottom"),
        "below": (changes.low, "top"),
    }
    for side, (limit, va) in places.items():
        if not bottom < limit < top:
            continue  # endless limits have nobody beyond them
        axes.axhline(
            limit, color=style.INK, linewidth=1, linestyle=(0, (4, 3)), zorder=2, label="_limit"
        )
        lines = [f"{int(counts[f'n_{side}'])} {side}", number(limit)]
        _write(axes, limit, "\n".join(lines if side == "above" else lines[::-1]), va)
    low, high = max(changes.low, bottom), min(changes.high, top)
    _write(axes, float(np.sqrt(low * high)), f"{int(counts['n_within'])} within", "center")


def _write(axes: Axes, height: float, text: str, va: VAlign) -> None:
    axes.annotate(
        text,
        (1, height),
        xycoords=axes.get_yaxis_transform(),
        xytext=(5, 0),
        textcoords="offset points",
        ha="left",
        va=va,
        fontsize=style.SMALL,
        annotation_clip=False,
    )


def _subjects_text(counts: pd.Series[float]) -> str:
    unknown = int(counts["n_unknown"])
    lines = [f"subjects, n = {int(counts['n'])}"]
    if unknown:
        lines.append(f"{unknown} not known, a value beyond a limit of detection")
    return "\n".join(lines)


def _ratio_text(marker: str, first: str, second: str) -> str:
    # Each occasion keeps its share of the line: which is divided by which must stay readable.
    later, earlier = (wrapped(occasion, 16, lines=1) for occasion in (second, first))
    pair = f"{later} / {earlier}"
    break_or_space = "\n" if len(pair) > 25 else " "
    return f"{wrapped(marker, 36, lines=1)}\n{pair}{break_or_space}(log axis)"
