"""Draw the pictures of the documentation from the invented demo data.

Run ``python docs/images/make_images.py`` after a change to the figures.
"""

from __future__ import annotations

import sys
import tempfile
from pathlib import Path

import robustrm as rm
from robustrm.demo import write_demo
from robustrm.figures import pictures

HERE = Path(__file__).parent
PREFIX = "calprotectin"
SHOWN = ("trajectories", "change-3", "comparisons")


def demo_analysis() -> rm.Analysis:
    """Return the analysis that the README shows."""
    with tempfile.TemporaryDirectory() as folder:
        table = rm.read_table(
            write_demo(folder),
            subject="patient",
            occasions=["week 0", "week 2", "week 6", "week 12"],
            marker="faecal calprotectin",
            unit="µg/g",
        )
    return rm.analyze(table)


def main() -> None:
    """Write the pictures beside this script."""
    shown = [picture for picture in pictures(demo_analysis()) if picture.name in SHOWN]
    for picture in shown:
        target = HERE / f"{PREFIX}-{picture.name}.svg"
        target.write_bytes(picture.to_bytes("svg"))
        sys.stdout.write(f"wrote {target.name}\n")


if __name__ == "__main__":
    main()
