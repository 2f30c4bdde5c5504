"""Invented data for a first try, and the script that makes them."""

from __future__ import annotations

import os
from importlib.resources import files
from pathlib import Path

from robustrm.errors import ArgumentError

DEMO_FILE = "calprotectin.csv"
"""Name of the invented data set: calprotectin of 14 patients at four weeks of a diet."""

DEMO_OPTIONS = (
    *("--subject", "patient"),
    *("--occasions", "week 0,week 2,week 6,week 12"),
    *("--marker", "faecal calprotectin"),
    *("--unit", "µg/g"),
)
"""Options of the command line that read it."""


def write_demo(folder: str | os.PathLike[str]) -> Path:
    """Write the invented data set into a folder, which is made if it is not there.

    Parameters
    ----------
    folder : str or path
        Where to write ``calprotectin.csv``.

    Returns
    -------
    Path
        The file.

    Raises
    ------
    ArgumentError
        When the folder holds another file of that name; it is left as it is.
    """
    data = files("robustrm.demo").joinpath(DEMO_FILE).read_bytes()
    target = Path(folder) / DEMO_FILE
    if target.exists() and target.read_bytes() != data:
        raise ArgumentError(
            f"`folder` must not hold another {DEMO_FILE}, got {os.fspath(folder)!r} with a "
            "different one. Name another folder, or move the file away."
        )
    target.parent.mkdir(parents=True, exist_ok=True)
    target.write_bytes(data)
    return target
