"""A figure as the bytes of a file, the same bytes every time."""

from __future__ import annotations

import io
from typing import Literal, cast

from matplotlib.figure import Figure

from robustrm._checks import check_choice
from robustrm.figures import style

Kind = Literal["svg", "png"]
DPI = 300

# None leaves out what would differ between two runs or two installations.
_METADATA: dict[Kind, dict[str, str | None]] = {
    "svg": {"Date": None, "Creator": None},
    "png": {"Software": None},
}


def figure_bytes(figure: Figure, kind: str = "svg") -> bytes:
    """Return `figure` as a file.

    Parameters
    ----------
    figure : Figure
        What to save; it is not changed, but for its layout, which is made up to date.
    kind : {"svg", "png"}, default "svg"
        SVG, or PNG at 300 dots an inch.

    Returns
    -------
    bytes
        Equal for equal figures: no date, no version and no random identifier is in them.

    Raises
    ------
    ArgumentError
        When the kind is another.
    """
    asked = cast(Kind, check_choice("kind", kind, ("svg", "png")))
    target = io.BytesIO()
    with style.house():
        # The layout is made here, at the figure's own resolution. Made anew while saving, it
        # would depend on the kind of file and on what was saved before.
        _lay_out(figure)
        _settle(figure)
        engine = figure.get_layout_engine()
        figure.set_layout_engine("none")
        try:
            figure.savefig(target, format=asked, dpi=DPI, metadata=_METADATA[asked])
        finally:
            figure.set_layout_engine(engine)
    return target.getvalue()


def _settle(figure: Figure) -> None:
    """Round the places of the axes: the last bits depend on where the layout lies in memory."""
    for axes in figure.axes:
        left, bottom, width, height = axes.get_position(original=True).bounds
        axes.set_position((round(left, 9), round(bottom, 9), round(width, 9), round(height, 9)))
        axes.set_in_layout(True)  # a place that is set leaves the layout, if it is not told to stay


def _lay_out(figure: Figure) -> None:
    """Lay out until nothing moves: a change in the last bit would show in the ids of an SVG."""
    before: list[tuple[float, float, float, float]] = []
    for _ in range(10):
        figure.draw_without_rendering()
        now = [axes.get_position().bounds for axes in figure.axes]
        if now == before:
            return
        before = now
