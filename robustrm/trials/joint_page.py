"""The level of the joint test of a grid as files: a CSV, and a page made from its rows."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from robustrm._format import counted
from robustrm.trials import tabulating
from robustrm.trials.joint import JOINT, MEDIAN, READINGS, SMALLEST, JointRow, worst

CSV, PAGE = "joint.csv", "joint.md"


def write_joint(rows: Sequence[JointRow], folder: Path) -> None:
    """Write the CSV and the page."""
    folder.mkdir(parents=True, exist_ok=True)
    tabulating.write_csv(rows, folder / CSV)
    (folder / PAGE).write_text(page(rows, tabulating.versions()), encoding="utf-8")


def page(rows: Sequence[JointRow], made_by: str) -> str:
    """Return the page.

    Parameters
    ----------
    rows : sequence of JointRow
    made_by : str
        Versions, as `tabulating.versions` says them.

    Returns
    -------
    str
    """
    first = rows[0]
    head = _HEAD.format(
        datasets=first.datasets, draws=first.draws, seed=first.seed, versions=made_by
    )
    return tabulating.joined([head, _reading(rows), "## Rates", _table(rows), _TAIL])


def _reading(rows: Sequence[JointRow]) -> str:
    asked = [row for row in rows if row.asked]
    within = sum(bool(row.holds) for row in asked)
    high = worst(rows, JOINT)
    low, top = tabulating.monte_carlo_interval(high.rejections, high.datasets)
    lines = [
        f"The joint P value stays within its limit in {within} of {counted(len(asked), 'cell')}. "
        f"Its highest rate is {high.rate:.4f} [{low:.4f}, {top:.4f}], limit {high.limit:.4f} "
        f"({high.about}, {high.errors}, n = {high.n}, k = {high.k}).",
        "",
        "- The smallest P value of a grid, read as if it were the only one, is at most .05 in up "
        f"to {worst(rows, SMALLEST).rate:.3f} of the tables in which there is nothing to find.",
        "- The median P value, read as if it were a P value, is at most .05 in "
        f"{min(row.rate for row in rows if row.reading == MEDIAN):.3f} to "
        f"{worst(rows, MEDIAN).rate:.3f}. It has no level of its own: how often it is small "
        "depends on how much the specifications agree, which is what the joint test finds out.",
    ]
    return "## What it says\n\n" + "\n".join(lines)


def _table(rows: Sequence[JointRow]) -> str:
    names = ["grid", "errors", "below a limit", "missing", "n", "k", "declared", "different"]
    names += ["joint", "limit", "median", "smallest"]
    lines = tabulating.head(names, 2)
    for start in range(0, len(rows), len(READINGS)):
        group = {row.reading: row for row in rows[start : start + len(READINGS)]}
        row = group[JOINT]
        cells = [row.about, row.errors, f"{row.below_limit:.0%}", f"{row.missing:.0%}"]
        cells += [str(row.n), str(row.k), str(row.declared), f"{row.different:.1f}"]
        cells += [_rate(row), f"{row.limit:.4f}"]
        cells += [f"({group[name].rate:.3f})" for name in (MEDIAN, SMALLEST)]
        lines.append(tabulating.line(cells))
    return "\n".join(lines)


def _rate(row: JointRow) -> str:
    """Write a rate with its interval, bold above the limit."""
    text = f"{row.rate:.4f}" if row.holds else f"**{row.rate:.4f}**"
    low, high = tabulating.monte_carlo_interval(row.rejections, row.datasets)
    return f"{text} [{low:.3f}, {high:.3f}]"


_HEAD = """
# Joint test of a specification grid

How often the joint P value of a [specification grid](../guide/sensitivity_grid.md) is at most .05
when there is nothing to find. This page and `joint.csv`, which has one row a rate, are made by one
command, and by nothing else:

```bash
python -m robustrm.trials grid --datasets {datasets} --draws {draws} --seed {seed} \\
    --out docs/evidence
```

Every cell has exchangeable occasions: exp of (0.8 b + 0.5 e), b the subject's level, standard
normal, and e the error of the occasion, standard normal or Student's t on 3 degrees of freedom over
√3. In one cell 30% of the values lie below a limit, in one 10% of the visits are missing, the same
ones in every table.

Each grid declares twelve branches; those that coincide for the table at hand count once, and
"different" is their mean number. {datasets} tables a cell, {draws} rearrangements drawn anew for
each, seed {seed}. The joint P value is that of the sensitivity analysis itself, from table to P.

Made with {versions}.

The limit of a rate is .05 + 3 √(.05 · .95 / {datasets}). In [square brackets] stands the 95% Monte
Carlo interval (Clopper-Pearson). The rates in (brackets) are of readings that promise nothing: the
median, and the smallest, of the P values of the grid.
"""

_TAIL = """
## Who remakes it

Whoever changes the grid, one of its statistics or the simulation runs the command above and commits
both files. A test compares the page with the CSV and holds the CSV to its limits.

The joint test is exact for exchangeable occasions whatever the grid. Under serial correlation or
unequal spread it inherits what its specifications do: [level](level.md) has their rates.
"""
