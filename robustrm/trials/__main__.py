"""``python -m robustrm.trials TABLE``: remake a shipped table of evidence."""

from __future__ import annotations

import argparse
import sys
import time
from collections.abc import Callable, Sequence
from pathlib import Path

from robustrm.trials import grid, joint
from robustrm.trials.coverage import coverage_table
from robustrm.trials.coverage_page import write_coverage
from robustrm.trials.evidence import write_evidence
from robustrm.trials.grid_page import write_record
from robustrm.trials.joint_page import write_joint
from robustrm.trials.level import Run, level_tables
from robustrm.trials.location import location_table
from robustrm.trials.location_page import write_location
from robustrm.trials.p_values import DRAWS


def main(arguments: Sequence[str] | None = None) -> None:
    """Simulate a table and write it to a folder."""
    parser = argparse.ArgumentParser(prog="python -m robustrm.trials", description=__doc__)
    commands = parser.add_subparsers(dest="command", required=True)
    for name, about in _ABOUT.items():
        command = commands.add_parser(name, help=about)
        command.add_argument("--datasets", type=int, default=2000, help="data sets a cell")
        draws = {"advice": grid.DRAWS, "grid": joint.DRAWS}.get(name, DRAWS)
        command.add_argument(
            "--draws", type=int, default=draws, help="rearrangements or resamples of a data set"
        )
        command.add_argument("--seed", type=int, default=1, help="root of all streams")
        command.add_argument(
            "--out", type=Path, required=True, help="folder of the .csv and the .md"
        )
        if name == "advice":
            command.add_argument("--record", type=Path, help="folder of record.csv, if another")
    chosen = parser.parse_args(arguments)
    run = Run(datasets=chosen.datasets, seed=chosen.seed, draws=chosen.draws)
    if chosen.command == "level":
        write_evidence(level_tables(run, progress=_telling("cells")), chosen.out)
    elif chosen.command == "location":
        write_location(location_table(run, progress=_telling("data sets")), chosen.out)
    elif chosen.command == "grid":
        write_joint(joint.joint_table(run, progress=_telling("tables")), chosen.out)
    elif chosen.command == "advice":
        _make_record(run, chosen.out, chosen.record or chosen.out)
    else:
        write_coverage(coverage_table(run, progress=_telling("data sets")), chosen.out)


def _make_record(run: Run, page: Path, record: Path) -> None:
    """Simulate the grid and print how long it took."""
    started = time.perf_counter()
    rows = grid.grid_table(
        run.datasets, draws=run.draws, seed=run.seed, progress=_telling("data sets")
    )
    write_record(rows, page, record)
    seconds = time.perf_counter() - started
    count = sum(grid.datasets_of(cell, run.datasets) for cell in grid.cells())
    sys.stderr.write(f"{count} data sets in {seconds:.0f} s: {count / seconds:.0f} a second\n")


_ABOUT = {
    "advice": "level, power and regret of the advised test, beside what else is done",
    "level": "level and familywise error of the tests",
    "location": "level of the overall tests under equal trimmed means and unequal spread",
    "grid": "level of the joint test of a specification grid",
    "coverage": "coverage and width of every kind of interval",
}


def _telling(what: str) -> Callable[[int, int], None]:
    """Return a progress function that rewrites one line on stderr."""

    def tell(done: int, whole: int) -> None:
        sys.stderr.write(f"\r{done} of {whole} {what}" + ("\n" if done == whole else ""))
        sys.stderr.flush()

    return tell


if __name__ == "__main__":
    main()
