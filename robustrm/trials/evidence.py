"""The level tables as files: a CSV for machines, and a page for readers made from its rows."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from statistics import fmean

from robustrm._format import counted
from robustrm.trials import tabulating
from robustrm.trials.families import FAMILIES
from robustrm.trials.level import Row, mean_level, z_of
from robustrm.trials.p_values import PERMUTED, TESTS

CSV, PAGE = "level.csv", "level.md"
# Subjects from which Holm's procedure on signed ranks can reach .05 in table C.
ENOUGH = 10


def write_evidence(rows: Sequence[Row], folder: Path) -> None:
    """Write the CSV and the page."""
    folder.mkdir(parents=True, exist_ok=True)
    tabulating.write_csv(rows, folder / CSV)
    (folder / PAGE).write_text(page(rows, tabulating.versions()), encoding="utf-8")


def read_csv(path: Path) -> list[Row]:
    """Read the rows back."""
    return tabulating.read_csv(path, Row)


def page(rows: Sequence[Row], made_by: str) -> str:
    """Return the page of all three tables.

    Parameters
    ----------
    rows : sequence of Row
    made_by : str
        Versions, as `versions` says them.

    Returns
    -------
    str
    """
    a, b, c = ([row for row in rows if row.table == table] for table in "ABC")
    first = rows[0]
    draws = max(row.draws for row in rows)
    parts = [
        _HEAD.format(datasets=first.datasets, draws=draws, seed=first.seed, versions=made_by),
        _reading(rows),
        *("## A. Exchangeable occasions", _A, _limits(a), _level_table(a)),
        *("## B. Equal centres, not exchangeable", _B, _limits(b), _level_table(b)),
        *("## C. All pairs of occasions", _C, _limits(c), _family_table(c)),
        _TAIL,
    ]
    return tabulating.joined(parts)


def _reading(rows: Sequence[Row]) -> str:
    """Say what was asked, and name every rate that was asked to hold and did not."""
    asked = [row for row in rows if row.asked]
    missed = [row for row in asked if not row.holds]
    lines = [
        f"Of {counted(len(asked), 'rate')} that were asked to hold, "
        f"{len(asked) - len(missed)} stay within their limit.",
        *([""] if missed else []),
    ]
    lines += [
        f"- above it: {row.test}, table {row.table}, {', '.join(_cell(row))}: "
        f"{row.rate:.4f} against {row.limit:.4f}"
        for row in missed
    ]
    lines += ["", *_beyond(rows), *_found(rows)]
    return "## What they say\n\n" + "\n".join(lines)


def _beyond(rows: Sequence[Row]) -> list[str]:
    """Say how far the permutation tests go where their null does not hold."""
    highest = {
        test: max(row.rate for row in rows if (row.table, row.test) == ("B", test))
        for test in PERMUTED
    }
    named = ", ".join(f"`{test}` {rate:.3f}" for test, rate in highest.items())
    return [
        f"- Table B, outside the null of the permutation tests, highest rates: {named}. "
        "A small p of theirs does not say by itself that the means differ."
    ]


def _found(rows: Sequence[Row]) -> list[str]:
    """Compare the procedures for all pairs where each is inside its null and can reach .05."""
    alike = [
        row
        for row in rows
        if row.table == "C" and row.correlation == "exchangeable" and row.n >= ENOUGH
    ]
    lines = []
    for family in FAMILIES:
        errors = [r.rate for r in alike if (r.test, r.measure) == (family, "familywise")]
        power = [r.rate for r in alike if (r.test, r.measure) == (family, "power")]
        lines.append(
            f"- Table C, exchangeable but for the shift, n ≥ {ENOUGH}, {family}: highest error "
            f"{max(errors):.3f}, mean error {fmean(errors):.3f}, mean power {fmean(power):.3f}."
        )
    return lines


def _limits(rows: Sequence[Row]) -> str:
    asked = [row for row in rows if row.asked]
    return (
        f"{counted(len(asked), 'rate')} asked to hold, z = {z_of(len(asked)):.2f}, "
        f"limit {asked[0].limit:.4f}."
    )


def _cell(row: Row) -> tuple[str, str, str, str]:
    """Errors, dependence, subjects and occasions of a row, in words."""
    errors = f"{row.errors}, {row.below_limit:.0%} below" if row.below_limit else row.errors
    spread = f"spread {row.spread}" if row.spread else ""
    between = "" if row.correlation == "exchangeable" and spread else row.correlation
    dependence = " and ".join(part for part in (between, spread) if part)
    return errors, dependence, f"n = {row.n}", f"k = {row.k}"


def _rate(row: Row) -> str:
    """Write a rate: in brackets outside the null of the test, bold above the limit."""
    text = f"{row.rate:.3f}"
    text = text if row.inside else f"({text})"
    return text if row.holds is not False else f"**{text}**"


def _level_table(rows: Sequence[Row]) -> str:
    """One line a cell, one column a test, and the mean over the cells that were asked."""
    head = ["errors", "dependence", "n", "k", *(f"`{test}`" for test in TESTS)]
    lines = tabulating.head(head, 2)
    for start in range(0, len(rows), len(TESTS)):
        group = rows[start : start + len(TESTS)]
        errors, dependence, *_ = _cell(group[0])
        lines.append(
            tabulating.line(
                [errors, dependence, str(group[0].n), str(group[0].k), *map(_rate, group)]
            )
        )
    means, bounds = ["mean of the asked", "", "", ""], ["may reach", "", "", ""]
    for test in TESTS:
        asked = [row for row in rows if row.test == test and row.asked]
        mean, bound = mean_level(asked) if asked else (None, None)
        means.append("" if mean is None else f"{mean:.4f}")
        bounds.append("" if bound is None else f"{bound:.4f}")
    return "\n".join([*lines, tabulating.line(means), tabulating.line(bounds)])


def _family_table(rows: Sequence[Row]) -> str:
    """One line a cell: familywise error, then power, of every procedure."""
    head = ["errors", "dependence", "n", "k", "shift"]
    head += [f"error, {family}" for family in FAMILIES] + [
        f"power, {family}" for family in FAMILIES
    ]
    lines = tabulating.head(head, 2)
    cells: dict[tuple[str, ...], dict[tuple[str, str], Row]] = {}
    key: tuple[str, ...]
    for row in rows:
        key = (*_cell(row)[:2], str(row.n), str(row.k), row.shift.rpartition(":")[2] or "0")
        cells.setdefault(key, {})[row.measure, row.test] = row
    for key, found in cells.items():
        errors = [_rate(found["familywise", family]) for family in FAMILIES]
        power = [
            f"{found['power', family].rate:.3f}" if ("power", family) in found else ""
            for family in FAMILIES
        ]
        lines.append(tabulating.line([*key, *errors, *power]))
    return "\n".join(lines)


_HEAD = """
# Level

How often each test rejects at .05 on simulated data in which there is nothing to find. This page
and `level.csv`, which has one row a rate, are made by one command, and by nothing else:

```bash
python -m robustrm.trials level --datasets {datasets} --draws {draws} --seed {seed} \\
    --out docs/evidence
```

{datasets} data sets a cell, {draws} rearrangements drawn anew for each data set and shared by its
permutation tests, seed {seed}. Without ties `friedman`, `signed_rank` and `sign_test` are looked up
in their exact law. Made with {versions}.

A number in (brackets) lies outside the null hypothesis of its test: nothing is promised there, and
the number says what happens. A **bold** number is above its limit. By chance a rate may reach
.05 + z √(.05 · .95 / data sets), z being the two-sided Bonferroni quantile over the rates of the
table that are asked to hold. Asked are the rates inside the null of their test, and those of the
two parametric tests wherever the errors are symmetric. The mean of independent cells may reach
.05 + 3 standard errors. Exact tests of small samples stay below .05 because their p values come in
steps.

The tests see the values as they are drawn, so `lognormal` is a skewed marker whose logarithm was
**not** taken (SD of the logarithms .8 between subjects and .5 within); on logs it is the line
`normal`. The other errors have SD 1, as the subjects' levels have: t on 3 degrees of freedom, and
normal with one in ten of threefold SD.
"""

_A = """
Every subject's values are exchangeable over the occasions, which is the null hypothesis of the
permutation tests. `row_flip` asks for symmetric contrasts, which skewed values do not have:
exchangeable occasions alone are not enough for it. In the last lines 30% of the cells lie below a
limit and are tied. The pair tests compare the last occasion with the first.
"""

_B = """
The centres are equal and the contrasts symmetric, but the occasions are not exchangeable: errors
with serial correlation .7, trends that differ between subjects (SD .5 of the error SD for each
step), or error SDs in the proportion shown. Here only `row_flip`, the tests of one pair and the
parametric tests are asked to hold; the brackets show how far the permutation tests go wrong when
they are read as tests of equal means.
"""

_C = """
The last occasion is shifted (in SDs of the errors of the normal and t lines; in log units for
`lognormal`), the others are alike. The error is the share of data sets in which any pair of equal
occasions is declared different; with shift 0 every pair is equal. Power is the mean share of the
differing pairs that are found. `closed` is closed permutation testing on the values (`sign_flip`)
or on aligned ranks, `holm` is Holm's procedure on exact signed-rank tests. Closed testing asks that
swapping two equal occasions changes nothing, given the others; with serial correlation and trends
that is not so. With 6 subjects Holm's procedure cannot reach .05: the smallest signed-rank p is
.031, and there are three pairs or more.
"""

_TAIL = """
## Who remakes it

Whoever changes a test, the simulation or the shared rearrangements runs the command above and
commits both files. A test compares the page with the CSV and holds the CSV to its limits; slow
tests remake two cells to the last count and four from other seeds.

[Location under unequal spread](location.md) has the tests of trimmed means, and what the others do
beside them. [Coverage](coverage.md) has the intervals.

Simulation shows that a test does what it says in these cells. It does not show that a study meets
the assumptions.
"""
