"""A specification grid: P values and estimates above, the choices behind them below."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, cast

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.layout_engine import ConstrainedLayoutEngine

from robustrm._format import counted, number, p_cell, p_phrase, p_range
from robustrm.figures import style
from robustrm.figures.labels import axis_text, one_line, wrapped
from robustrm.sensitivity_analysis.branches import DIMENSIONS, spelled
from robustrm.sensitivity_analysis.grid import Grid

_P, _ESTIMATES, _CHOICE, _GAP, _PAD = 1.6, 1.25, 0.165, 0.6, 0.12  # inches of panels and rows

_TITLES = {
    "replicates": "replicates",
    "scale": "scale",
    "test": "test",
    "trim": "share cut or pulled in",
    "substitute": "below the limit",
    "missing": "subjects",
    "outliers": "outliers",
}
_WORDS = {
    ("substitute", "half"): "half the limit",
    ("substitute", "root2"): "limit/√2",
    ("substitute", "limit"): "the limit",
    ("missing", "complete"): "complete",
    ("missing", "available"): "two or more visits",
    ("test", "aligned_ranks"): "aligned ranks",
    ("test", "friedman"): "Friedman",
    ("test", "quade"): "Quade",
    ("test", "normal_scores"): "normal scores",
    ("test", "mean_permutation"): "means (F)",
    ("test", "winsorized_permutation"): "Winsorized values (F)",
    ("test", "trimmed_anova"): "trimmed means (F)",
    ("test", "rank_anova"): "rank ANOVA-type",
    ("test", "hotelling"): "Hotelling T²",
    ("outliers", "winsorized"): "pulled in",
    ("replicates", "mean"): "mean",
    ("replicates", "geometric"): "geometric mean",
}
_SCALES = (("log", "ratio"), ("raw", "difference"))


@dataclass(frozen=True, slots=True)
class _Choice:
    """One row of the lower part: an option of a dimension, and who takes it."""

    dimension: str
    option: str
    label: str
    taken: tuple[int, ...]
    shared: tuple[int, ...]


def specification(grid: Grid) -> Figure:
    """Draw every specification of a grid in the order of its P value.

    Parameters
    ----------
    grid : Grid
        From the sensitivity analysis.

    Returns
    -------
    Figure
        P values on a log axis with the level; below them the estimates of the last planned
        contrast, ratios and differences each on an axis of their own; below these one row an
        option, with a filled dot where a specification takes it and an open one where it makes no
        difference for these data.

    Notes
    -----
    The order of the columns is that of P and shows nothing else. No test compares one column with
    another, and how many lie below the level is not a result.
    """
    ordered = grid.frame.sort_values("p", kind="stable").reset_index(drop=True)
    choices = _choices(grid, ordered)
    scales = [pair for pair in _SCALES if _known(ordered, pair[0]).any()]
    blocks = len({choice.dimension for choice in choices})
    heights = [_P, *(_ESTIMATES for _ in scales), _CHOICE * (len(choices) + blocks)]
    with style.house():
        figure = style.new_figure((style.WIDTH, sum(heights) + _GAP))
        # letters set at the size of a screen are a little narrower than in print
        cast(ConstrainedLayoutEngine, figure.get_layout_engine()).set(w_pad=_PAD)
        axes = figure.subplots(len(heights), 1, sharex=True, height_ratios=heights)
        panels = [cast(Axes, one) for one in np.atleast_1d(axes)]
        for panel in panels:
            style.axes_for(panel, (0, 0))
            panel.tick_params(axis="x", length=0, labelbottom=False)
            panel.set_xlim(-0.8, len(ordered) - 0.2)
        _draw_p(panels[0], grid, ordered)
        for panel, (scale, name) in zip(panels[1:-1], scales, strict=True):
            _draw_estimates(panel, grid, ordered, scale, name)
        _draw_choices(panels[-1], choices, len(ordered))
        panels[-1].set_xlabel(
            f"{counted(len(ordered), 'specification')} in the order of P\n({_subjects(ordered)})"
        )
        figure.align_ylabels(panels[:-1])
    return figure


def _subjects(frame: Any) -> str:
    sizes = sorted(set(frame["n"].tolist()))
    span = f"{sizes[0]}" if len(sizes) == 1 else f"{sizes[0]} to {sizes[-1]}"
    return f"{span} subjects"


def _size(count: int) -> float:
    """Size of a dot, in points, that leaves room between neighbours."""
    return float(np.clip(150 / max(count, 1), 1.6, 5))


def _draw_p(axes: Axes, grid: Grid, ordered: Any) -> None:
    places, p = np.arange(len(ordered)), ordered["p"].to_numpy(float)
    axes.set_yscale("log")
    axes.set_ylim(min(p.min(), grid.alpha) / 1.6, 1.25)
    axes.axhline(grid.alpha, color=style.QUIET, linewidth=1, linestyle="--", zorder=1)
    axes.plot(
        places,
        p,
        linestyle="none",
        marker="o",
        markersize=_size(len(p)),
        color=style.SUBJECT,
        label="_p",
        zorder=3,
    )
    planned = ordered["planned"].to_numpy(bool)
    axes.plot(
        places[planned],
        p[planned],
        linestyle="none",
        marker="D",
        markersize=6,
        markerfacecolor=style.ACCENT,
        markeredgecolor=style.INK,
        label="_planned",
        zorder=4,
    )
    style.ticks(axes.yaxis, log=True)
    axes.set_ylabel("P")
    axes.set_title(_headline(grid, planned=bool(planned.any())), fontsize=style.TEXT, loc="left")


def _headline(grid: Grid, *, planned: bool) -> str:
    joint = f"all together: {p_phrase(grid.grid_p)}; median {p_phrase(grid.median_p)}"
    diamond = "; diamond: the planned test" if planned else ""
    return f"{joint}\ndashed: {grid.alpha:g}{diamond}"


def _known(ordered: Any, scale: str) -> np.ndarray:
    estimates = ordered["estimate"].to_numpy(float)
    return np.asarray((ordered["estimate_scale"] == scale).to_numpy() & np.isfinite(estimates))


def _draw_estimates(axes: Axes, grid: Grid, ordered: Any, scale: str, name: str) -> None:
    """Draw the estimates on one scale at the places of their specifications."""
    known = _known(ordered, scale)
    values = ordered["estimate"].to_numpy(float)[known]
    if scale == "log":
        axes.set_yscale("log")
    neutral = 1.0 if scale == "log" else 0.0
    axes.axhline(neutral, color=style.QUIET, linewidth=1, zorder=1)
    axes.plot(
        np.flatnonzero(known),
        values,
        linestyle="none",
        marker="s",
        markersize=_size(len(ordered)),
        color=style.INK,
        label=f"_{name}",
        zorder=3,
    )
    _set_range(axes, values, neutral, log=scale == "log")
    style.ticks(axes.yaxis, log=scale == "log")
    remark = "log axis" if scale == "log" else None
    unit = grid.unit if scale == "raw" else None
    axes.set_ylabel(axis_text(16, name, unit, *([remark] if remark else [])))
    first, second = grid.contrast
    label = wrapped(f"{second} vs {first}", 44, lines=1)
    axes.set_title(label, fontsize=style.SMALL, loc="left", pad=2)


def _set_range(axes: Axes, values: np.ndarray, neutral: float, *, log: bool) -> None:
    ends = np.append(values, neutral)
    ends = np.log(ends) if log else ends
    margin = 0.15 * float(np.ptp(ends)) or 0.5
    low, high = float(ends.min()) - margin, float(ends.max()) + margin
    axes.set_ylim(*(np.exp([low, high]) if log else (low, high)))


# ── the choices ───────────────────────────────────────────────────────────────────────────────


def _choices(grid: Grid, ordered: Any) -> list[_Choice]:
    """Return the rows of the lower part: the dimensions that tell specifications apart."""
    found = []
    for dimension in DIMENSIONS:
        taken = [set(str(cell).split(", ")) for cell in ordered[dimension]]
        options = [o for o in _options(grid, dimension) if any(o in one for one in taken)]
        if len(options) < 2 or set.intersection(*taken):
            continue  # an option that all of them take tells none apart
        for option in options:
            with_it = [place for place, one in enumerate(taken) if option in one]
            found.append(
                _Choice(
                    dimension,
                    option,
                    _label(dimension, option, ordered),
                    tuple(place for place in with_it if len(taken[place]) == 1),
                    tuple(place for place in with_it if len(taken[place]) > 1),
                )
            )
    return found


def _options(grid: Grid, dimension: str) -> list[str]:
    declared: Sequence[Any] = getattr(grid.choices, dimension)
    options = [spelled(dimension, value) for value in declared]
    return [spelled("trim", None), *options] if dimension == "trim" else options


def _label(dimension: str, option: str, ordered: Any) -> str:
    words: Mapping[tuple[str, str], str] = _WORDS
    label = words.get((dimension, option), option)
    if dimension == "missing":
        # the n of specifications that take this option and no other
        sizes = sorted({int(n) for n in ordered.loc[ordered[dimension] == option, "n"]})
        label += f" (n = {', '.join(map(str, sizes))})" if sizes else ""
    return label


def _draw_choices(axes: Axes, choices: Sequence[_Choice], count: int) -> None:
    labels: list[str] = []
    heights: list[float] = []
    height = 0.0
    before = ""
    for choice in choices:
        if choice.dimension != before:
            axes.text(
                -0.01,
                height,
                _TITLES[choice.dimension],
                transform=axes.get_yaxis_transform(),
                ha="right",
                va="center",
                fontsize=style.SMALL,
                fontweight="bold",
            )
            before, height = choice.dimension, height + 1
        axes.axhline(height, color=style.BAND, linewidth=0.8, zorder=0)
        for places, face in ((choice.taken, style.INK), (choice.shared, "white")):
            axes.plot(
                places,
                [height] * len(places),
                linestyle="none",
                marker="o",
                markersize=_size(count),
                markerfacecolor=face,
                markeredgecolor=style.INK,
                markeredgewidth=0.6,
                label=f"_{choice.dimension}: {choice.option}",
            )
        labels.append(wrapped(choice.label, 30, lines=1))
        heights.append(height)
        height += 1
    axes.set_ylim(max(height, 1) - 0.4, -0.6)
    axes.set_yticks(heights, labels, fontsize=style.SMALL)
    axes.tick_params(axis="y", length=0, labelsize=style.SMALL)
    axes.spines[["left"]].set_visible(False)


# ── in words ──────────────────────────────────────────────────────────────────────────────────


def describe_specification(grid: Grid) -> str:
    """Say in words what :func:`specification` draws."""
    frame = grid.frame
    first, second = grid.contrast
    parts = [
        f"{counted(len(frame), 'specification')} in the order of their P values, "
        f"{p_range(float(frame['p'].min()), float(frame['p'].max()))}; all together "
        f"{p_phrase(grid.grid_p)}, median {p_cell(grid.median_p)}."
    ]
    for scale, name in _SCALES:
        values = frame["estimate"].to_numpy(float)[_known(frame, scale)]
        if values.size:
            unit = f" {grid.unit}" if scale == "raw" and grid.unit else ""
            parts.append(
                f"{name.capitalize()} of {second} to {first}: {number(float(values.min()))} to "
                f"{number(float(values.max()))}{unit} ({counted(values.size, 'specification')})."
                if scale == "log"
                else f"{name.capitalize()} {second} minus {first}: {number(float(values.min()))} "
                f"to {number(float(values.max()))}{unit} "
                f"({counted(values.size, 'specification')})."
            )
    parts.append(f"Of {_subjects(frame)}. Below, dots show the choices of each.")
    return one_line(" ".join(parts))
