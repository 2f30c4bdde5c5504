"""Power against the number of subjects."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import cast

from matplotlib.axes import Axes
from matplotlib.ticker import MaxNLocator

from robustrm._checks import check_choice
from robustrm._format import declared, fixed
from robustrm.figures import style
from robustrm.figures.labels import one_line, wrapped
from robustrm.sizing.result import AT_LEAST_ONE, Followed, Sizing

_BAND = 0.18
# Line styles and markers of the planned tests: any change, then single ones.
_PLANNED: tuple[tuple[str | tuple[float, tuple[float, ...]], str], ...] = (
    ("-", "o"),
    ((0, (5, 1.5)), "^"),
    ((0, (1.2, 1.2)), "v"),
    ((0, (4, 1, 1, 1)), "D"),
)


def power(sizing: Sizing, *, tests: Sequence[str] | None = None, ax: Axes | None = None) -> Axes:
    """Draw the power of the planned tests, and of the parametric beside, against n.

    Parameters
    ----------
    sizing : Sizing
        From :func:`robustrm.sample_size`.
    tests : sequence of str, optional
        Names in the column ``test`` of its table; None takes the planned family (any expected
        change, and the smallest of them), the planned overall test, and the paired t test after
        Holm.
    ax : Axes, optional
        Where to draw; a new figure if not given.

    Returns
    -------
    Axes
        A line a test with the band of its 95% Monte Carlo intervals, the target as a line across,
        and a ring where power reaches it and stays.
    """
    drawn = _chosen(sizing, tests)
    with style.house():
        axes = style.axes_for(ax, (style.WIDTH, 2.9 + 0.16 * len(drawn)))
        axes.axhline(sizing.target, color=style.QUIET, linewidth=1, zorder=1)
        for place, test in enumerate(drawn):
            _draw(axes, sizing, test, _look(test, place))
        axes.set_ylim(-0.02, 1.02)
        axes.margins(x=0.03)
        axes.set_xlabel("subjects")
        axes.set_ylabel("power")
        for axis in (axes.xaxis, axes.yaxis):
            style.ticks(axis, log=False)
        cast(MaxNLocator, axes.xaxis.get_major_locator()).set_params(integer=True)
        axes.annotate(
            f"target {declared(sizing.target)}",
            (1, sizing.target),
            xycoords=axes.get_yaxis_transform(),
            xytext=(-2, -3),
            textcoords="offset points",
            ha="right",
            va="top",
            fontsize=style.SMALL,
        )
        axes.legend(loc="lower left", bbox_to_anchor=(0, 1), frameon=False, handlelength=3)
    return axes


def describe_power(sizing: Sizing, tests: Sequence[str] | None = None) -> str:
    """Say in words what :func:`power` draws."""
    sizes = sorted(set(sizing.table["n"].tolist()))
    told = []
    for test in _chosen(sizing, tests):
        first, last = (sizing.power_at(test.name, n)[0] for n in (sizes[0], sizes[-1]))
        told.append(f"{_words(sizing, test)}, from {fixed(first, 2)} to {fixed(last, 2)}")
    return one_line(
        f"Power against {sizes[0]} to {sizes[-1]} subjects with 95% Monte Carlo bands, target "
        f"{declared(sizing.target)}: {'; '.join(told)}."
    )


def _chosen(sizing: Sizing, tests: Sequence[str] | None) -> list[Followed]:
    by_name = {test.name: test for test in sizing.tests}
    if tests is not None:
        return [by_name[check_choice("tests", name, tuple(by_name))] for name in tests]
    planned = [t for t in sizing.tests if t.role == "primary" and t.expects_change]
    single = [t for t in planned if t.comparison != AT_LEAST_ONE]
    hardest = sorted(single, key=lambda test: abs(math.log(test.ratio or 1)))[:1]
    found = [t for t in planned if t not in single] + hardest
    found += [t for t in sizing.tests if t.role == "supporting"]
    beside = [t for t in sizing.tests if t.role == "beside" and t.outcome == "holm"]
    return found + [t for t in beside if t.expects_change][:1]


@dataclass(frozen=True, slots=True)
class _Look:
    color: str
    line: str | tuple[float, tuple[float, ...]]
    marker: str | None


def _look(test: Followed, place: int) -> _Look:
    """Return color, line style and marker: each role has its own."""
    if test.role == "supporting":
        return _Look(style.ACCENT, "-", "s")
    if test.role == "beside":
        return _Look(style.QUIET, "--", None)
    return _Look(style.SUBJECT, *_PLANNED[place % len(_PLANNED)])


def _draw(axes: Axes, sizing: Sizing, test: Followed, look: _Look) -> None:
    color = look.color
    rows = sizing.table[sizing.table["test"] == test.name]
    n, share = rows["n"].to_numpy(), rows["power"].to_numpy()
    axes.fill_between(
        n, rows["low"].to_numpy(), rows["high"].to_numpy(), color=color, alpha=_BAND, linewidth=0
    )
    axes.plot(
        n,
        share,
        color=color,
        linestyle=look.line,
        linewidth=1.4,
        marker=look.marker,
        markersize=3.2,
        markeredgecolor=style.INK if color == style.ACCENT else color,
        markeredgewidth=0.5,
        label=wrapped(_words(sizing, test), 70, lines=1),
    )
    smallest = sizing.smallest.get(test.name)
    if smallest is not None:
        reached = sizing.power_at(test.name, smallest)[0]
        axes.plot(
            [smallest, smallest], [-0.02, reached],
            color=color, linewidth=0.8, linestyle=":", zorder=1,
        )  # fmt: skip
        axes.plot(
            [smallest], [reached],
            marker="o", markersize=8, markerfacecolor="none", markeredgecolor=style.INK,
            linestyle="none", zorder=4,
        )  # fmt: skip


def _words(sizing: Sizing, test: Followed) -> str:
    if not test.expects_change:
        return test.name
    smallest = sizing.smallest.get(test.name)
    told = f"n = {smallest}" if smallest is not None else "target not reached"
    return f"{test.name} ({told})"
