"""What a sensitivity analysis found, as text for a terminal."""

from __future__ import annotations

import textwrap
from typing import Any

from robustrm._format import Style, aligned, restyled
from robustrm.report.sensitivity_sheets import sensitivity_sheets
from robustrm.report.text import COLUMNS, printable
from robustrm.sensitivity_analysis import PARTS, TITLES

Document = dict[str, Any]


def sensitivity_text(document: Document, style: Style = "medical") -> str:
    """Return what holds and what does not on one screen, then what each part found.

    Parameters
    ----------
    document : dict
        From :func:`robustrm.report.document.document`, with its sensitivity analysis.
    style : {"medical", "apa"}, default "medical"
        How p values are written.

    Returns
    -------
    str
        With a newline at its end; control characters in labels are replaced.
    """
    safe = printable(document)
    parts = [_part(TITLES[name], safe["sensitivity"][name]["sentences"], style) for name in PARTS]
    screen = sensitivity_sheets(safe, style)["overview"]
    rows = [line.cells for line in screen.lines]
    table = aligned(screen.headings, rows, words=tuple(screen.words))
    return "\n\n".join([f"{screen.caption}\n{table}", *(part for part in parts if part)]) + "\n"


def _part(title: str, sentences: list[str], style: Style) -> str:
    lines = [
        textwrap.fill(restyled(text, style), COLUMNS, initial_indent="- ", subsequent_indent="  ")
        for text in sentences
    ]
    return "\n".join([title, *lines]) if lines else ""
