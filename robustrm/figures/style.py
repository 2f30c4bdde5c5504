"""The house style, local to what is drawn: nothing global changes, pyplot is never loaded.

Colours are from the palette of Okabe and Ito (2008, Color Universal Design), which people
with the common forms of colour blindness tell apart, and a grey. Those used together differ in
lightness too, and every role has a marker or line style of its own, so that a
photocopy reads the same.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from types import MappingProxyType
from typing import Any, cast

import numpy as np
from matplotlib import style
from matplotlib.axes import Axes
from matplotlib.axis import Axis
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, FuncFormatter, MaxNLocator, NullLocator

from robustrm.figures.labels import tick_text

INK = "#000000"
SUBJECT = "#0072B2"  # blue: what was measured in one subject
ACCENT = "#E69F00"  # orange, always edged in ink: median and estimate
QUIET = "#8C8C8C"  # grey: lines that join, reference lines
BAND = "#EFEFEF"  # light grey: the range beyond a limit

# One and a half columns of a journal page (114 mm). At the width of a phone 8.5 points shrink to
# about the size of a footnote, still readable.
WIDTH = 4.5
TEXT = 8.5
SMALL = 7.5

HOUSE: Mapping[str, Any] = MappingProxyType(
    {
        "font.family": "sans-serif",
        # DejaVu Sans comes with matplotlib. Verdana is about as wide, for a browser without it.
        "font.sans-serif": ["DejaVu Sans", "Verdana"],
        "font.size": TEXT,
        "axes.labelsize": TEXT,
        "legend.fontsize": SMALL,
        "figure.dpi": 100,
        "figure.facecolor": "white",
        "savefig.facecolor": "white",
        # Text stays text: it can be searched, selected and read aloud, and a journal can set it
        # in its own font. The price is that the font of the reader decides the exact shapes.
        "svg.fonttype": "none",
        # Ids are made from this instead of from a random number.
        "svg.hashsalt": "robustrm",
    }
)


@contextmanager
def house() -> Iterator[None]:
    """Draw in the house style whatever the global settings are, and leave these as they were."""
    with style.context(dict(HOUSE), after_reset=True):
        yield


def axes_for(ax: Axes | None, size: tuple[float, float]) -> Axes:
    """Return `ax`, or the axes of a new figure of `size` inches."""
    axes = new_figure(size).add_subplot() if ax is None else ax
    axes.spines[["top", "right"]].set_visible(False)
    # Ticks are made when they are first drawn, outside the local style: they are told here.
    axes.tick_params(labelsize=TEXT, labelfontfamily="sans-serif", length=3, width=0.8)
    return axes


def characters(axes: Axes) -> int:
    """Return about how many characters fit side by side under `axes`."""
    figure = cast(Figure, axes.get_figure(root=True))
    points = axes.get_window_extent().width / figure.dpi * 72
    return int(points / (0.55 * TEXT))


def explain(axes: Axes, *, columns: int) -> None:
    """Explain the symbols above the axes; dots alone explain themselves."""
    if len(axes.get_legend_handles_labels()[0]) > 1:
        axes.legend(loc="lower left", bbox_to_anchor=(0, 1), ncols=columns, frameon=False)


def new_figure(size: tuple[float, float]) -> Figure:
    """Return an empty figure that no pyplot state knows of."""
    return Figure(figsize=size, layout="constrained")


def ticks(axis: Axis, *, log: bool) -> None:
    """Put round ticks on the range that is in view now, written like every other number.

    On a log axis they are numbers that a reader can multiply by: 1, 2, 5; finer when it is short.
    """
    if log:
        low, high = sorted(axis.get_view_interval())
        axis.set_major_locator(FixedLocator(round_positions(low, high)))
        axis.set_minor_locator(NullLocator())
    else:
        axis.set_major_locator(MaxNLocator(nbins=6, steps=[1, 2, 2.5, 5, 10]))
    axis.set_major_formatter(FuncFormatter(tick_text))


def round_positions(low: float, high: float) -> list[float]:
    """Return three to about eight round positive numbers from `low` to `high`.

    Examples
    --------
    >>> round_positions(0.4, 30), round_positions(0.7, 1.6)
    ([0.5, 1.0, 2.0, 5.0, 10.0, 20.0], [0.7, 1.0, 1.5])
    """
    decades = 10.0 ** np.arange(np.floor(np.log10(low)), np.ceil(np.log10(high)) + 1)
    positions: list[float] = []
    for steps in ([1], [1, 2, 5], [1, 1.5, 2, 3, 5, 7]):
        grid = np.outer(decades, steps).ravel()
        positions = grid[(grid >= low) & (grid <= high)].tolist()
        if len(positions) >= 3:
            return positions[:: -(-len(positions) // 8)]
    close = MaxNLocator(nbins=5, steps=[1, 2, 2.5, 5, 10]).tick_values(low, high)
    return [float(value) for value in close if low <= value <= high]
