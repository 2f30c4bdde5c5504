"""The coverage of the intervals as files: a CSV, and a page made from its rows."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from robustrm._format import counted
from robustrm.trials import tabulating
from robustrm.trials.coverage import SUBJECTS, Coverage
from robustrm.trials.intervals import ALL_SUBSETS, KINDS, SUBSETS
from robustrm.trials.level import z_of

CSV, PAGE = "coverage.csv", "coverage.md"


def write_coverage(rows: Sequence[Coverage], folder: Path) -> None:
    """Write the CSV and the page."""
    folder.mkdir(parents=True, exist_ok=True)
    tabulating.write_csv(rows, folder / CSV)
    (folder / PAGE).write_text(page(rows, tabulating.versions()), encoding="utf-8")


def page(rows: Sequence[Coverage], made_by: str) -> str:
    """Return the page.

    Parameters
    ----------
    rows : sequence of Coverage
    made_by : str
        Versions, as `tabulating.versions` says them.

    Returns
    -------
    str
    """
    head = _HEAD.format(
        datasets=rows[0].datasets,
        draws=max(row.draws for row in rows),
        seed=rows[0].seed,
        z=z_of(sum(row.is_given for row in rows)),
        all_subsets=ALL_SUBSETS,
        subsets=SUBSETS,
        versions=made_by,
    )
    parts = [head, _reading(rows), "## The intervals", _KINDS, _kinds(rows)]
    for law, (title, words) in _LAWS.items():
        of_law = [row for row in rows if row.errors == law]
        parts += [f"## {title}", words, _table(of_law)]
    return tabulating.joined([*parts, _TAIL])


def _reading(rows: Sequence[Coverage]) -> str:
    """Say what was asked, and where an interval covers less than it states."""
    asked = [row for row in rows if row.asked]
    missed = [row for row in asked if not row.reached]
    rough = [row for row in rows if row.is_given and not row.asked]
    short = [row for row in rough if not row.reached]
    outside = [row for row in rows if not row.is_given]
    lines = [
        f"Of {counted(len(asked), 'coverage')} of intervals that promise their level, where what "
        f"they ask for is given, {len(asked) - len(missed)} reach their limit.",
        "",
        *(f"- **below**: {_where(row)}, limit {row.limit:.4f}" for row in missed),
        f"- Of {counted(len(rough), 'coverage')} of approximate intervals, {len(short)} lie below "
        "their limit. The lowest of each interval:",
        *_lowest(short),
        "- Where what an interval asks for is not given, the lowest of each:",
        *_lowest(outside),
    ]
    return "## What they say\n\n" + "\n".join(lines)


def _lowest(rows: Sequence[Coverage]) -> list[str]:
    """Return the lowest coverage of each kind of interval."""
    return [
        f"    - {_where(min((r for r in rows if _key(r) == key), key=lambda r: r.coverage))}"
        for key in _keys(rows)
    ]


def _key(row: Coverage) -> tuple[str, str]:
    return row.interval, row.estimand


def _keys(rows: Sequence[Coverage]) -> list[tuple[str, str]]:
    """Return the kinds of interval that occur, in the order of the list."""
    there = set(map(_key, rows))
    return [(k.name, k.estimand) for k in KINDS if (k.name, k.estimand) in there]


def _where(row: Coverage) -> str:
    return (
        f"`{row.interval}` ({_spelled(row.estimand)}), {row.errors}, n = {row.n}: "
        f"{row.coverage:.3f}"
    )


def _spelled(estimand: str) -> str:
    return {"means": "three mean differences together"}.get(estimand, estimand)


def _kinds(rows: Sequence[Coverage]) -> str:
    """One line a kind: estimand, what it asks, what it promises, and the levels it states."""
    names = ["interval", "estimand", "asks for", "promises its level"]
    lines = tabulating.head([*names, *(f"level, n = {n}" for n in SUBJECTS)], len(names))
    for key in _keys(rows):
        of_kind = [row for row in rows if _key(row) == key]
        stated = {row.n: f"{row.stated:.4g}" for row in of_kind}
        first = of_kind[0]
        words = [f"`{first.interval}`", _spelled(first.estimand), first.asks, first.promise]
        lines.append(tabulating.line([*words, *(stated.get(n, "not given") for n in SUBJECTS)]))
    return "\n".join(lines)


def _table(rows: Sequence[Coverage]) -> str:
    """One line a kind of interval: coverage, then width, by n."""
    names = ["interval", "estimand", "truth", "what it asks for is given"]
    columns = [f"n = {n}" for n in SUBJECTS] + [f"width, n = {n}" for n in SUBJECTS]
    lines = tabulating.head([*names, *columns], len(names))
    for key in _keys(rows):
        found = {row.n: row for row in rows if _key(row) == key}
        first = next(iter(found.values()))
        given = "yes" if first.is_given else "no"
        words = [f"`{first.interval}`", _spelled(first.estimand), first.truth, given]
        shares = [_share(found[n]) if n in found else "" for n in SUBJECTS]
        widths = [f"{found[n].median_width:.3g}" if n in found else "" for n in SUBJECTS]
        lines.append(tabulating.line([*words, *shares, *widths]))
    return "\n".join(lines)


def _share(row: Coverage) -> str:
    """Write a coverage with its interval: in brackets where not given, bold below the limit."""
    text = f"{row.coverage:.3f}"
    text = text if row.is_given else f"({text})"
    text = text if row.reached is not False else f"**{text}**"
    return f"{text} [{row.low:.3f}, {row.high:.3f}]"


_HEAD = """
# Coverage

How often each kind of interval holds its estimand on simulated data, and how wide it is. This page
and `coverage.csv`, which has one row a coverage and also counts the intervals that lie wholly below
or above the truth, are made by one command, and by nothing else:

```bash
python -m robustrm.trials coverage --datasets {datasets} --draws {draws} --seed {seed} \\
    --out docs/evidence
```

{datasets} data sets a cell, seed {seed}; intervals from the bootstrap have {draws} resamples of
whole subjects, drawn anew for each data set and shared by its intervals. Four occasions: the first
two are alike, the third and the last are shifted by 1/2 and 1 SD of the errors. Unless said
otherwise an interval is about the change from the first to the last occasion. The sign-flip
interval takes the means of all subsets up to {all_subsets} subjects, of {subsets} random ones
beyond. The truth each interval is held to is computed by quadrature and stands in the table.
Trimming is 20% at each end; 8 subjects lose 1 at each end, which is 12.5%, and 12 lose 2, which is
16.7%, while the truth is that of 20%.

Made with {versions}.

A coverage in (brackets) belongs to an interval whose demands on the data are not met: nothing is
promised there, and the number says what happens. In [square brackets] stands the 95% Monte Carlo
interval (Clopper-Pearson). A **bold** coverage lies below its limit: the stated level c less
z √(c (1 − c) / data sets), z = {z:.2f} being the two-sided Bonferroni quantile over all coverages
without brackets. A data set without an interval counts as not covered. Width is the median over the
data sets, in the unit of the estimand.
"""

_KINDS = """
All ask for independent subjects. "exact" promises the level as stated, "at least" that level or
more, "approximate" the level in large samples. Exact intervals of small samples attain levels in
steps, and state the one they attain. Mean, median and trimmed mean are those of the differences;
bootstrap-t takes the standard error by formula. The robust standardized difference is given from 10
subjects. The rank-biserial correlation and Kendall's W are held to their values in an infinite
population, from which they differ on average in small samples.
"""

_LAWS = {
    "normal": (
        "Normal",
        """
Normal errors, SD 1, as the subjects' levels have. This is also what intervals on logs meet when the
marker is lognormal.
""",
    ),
    "t3": (
        "t on 3 degrees of freedom",
        """
Errors t on 3 degrees of freedom, scaled to SD 1. Differences are symmetric with heavy tails.
""",
    ),
    "contaminated": (
        "Contaminated",
        """
Normal errors, one in ten of threefold SD, scaled to SD 1. Differences are symmetric.
""",
    ),
    "lognormal": (
        "Lognormal",
        """
A skewed marker whose logarithm was **not** taken: SD of the logarithms .8 between subjects and .5
within, the shift on logs. Differences are skewed, so mean, median, pseudo-median and trimmed mean
are different numbers. What asks for symmetric or normal differences does not have it.
""",
    ),
}

_TAIL = """
## Who remakes it

Whoever changes an interval, the simulation or the resamples runs the command above and commits both
files. A test compares the page with the CSV and holds the CSV to its limits; a slow test remakes a
cell to the last count. [Level](level.md) has the tests.

Simulation shows what an interval does in these cells. It does not show that a study meets the
assumptions.
"""
