"""``python -m robustrm.trials level``: remake the shipped level tables."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Sequence
from pathlib import Path

from robustrm.trials.evidence import write_evidence
from robustrm.trials.level import Run, level_tables
from robustrm.trials.p_values import DRAWS


def main(arguments: Sequence[str] | None = None) -> None:
    """Simulate the level tables and write them to a folder."""
    parser = argparse.ArgumentParser(prog="python -m robustrm.trials", description=__doc__)
    commands = parser.add_subparsers(dest="command", required=True)
    level = commands.add_parser("level", help="level and familywise error of the tests")
    level.add_argument("--datasets", type=int, default=2000, help="data sets a cell")
    level.add_argument("--draws", type=int, default=DRAWS, help="rearrangements of a data set")
    level.add_argument("--seed", type=int, default=1, help="root of all streams")
    level.add_argument("--out", type=Path, required=True, help="folder of level.csv and level.md")
    chosen = parser.parse_args(arguments)
    run = Run(datasets=chosen.datasets, seed=chosen.seed, draws=chosen.draws)
    rows = level_tables(run, progress=_tell)
    write_evidence(rows, chosen.out)


def _tell(done: int, cells: int) -> None:
    sys.stderr.write(f"\r{done} of {cells} cells" + ("\n" if done == cells else ""))
    sys.stderr.flush()


if __name__ == "__main__":
    main()
