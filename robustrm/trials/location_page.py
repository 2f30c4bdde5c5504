"""The table of location as files: a CSV, and a page made from its rows."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from robustrm._format import counted
from robustrm.trials import tabulating
from robustrm.trials.level import Row
from robustrm.trials.location import LAWS, NULLS, SUBJECTS, TIMES

CSV, PAGE = "location.csv", "location.md"


def write_location(rows: Sequence[Row], folder: Path) -> None:
    """Write the CSV and the page."""
    folder.mkdir(parents=True, exist_ok=True)
    tabulating.write_csv(rows, folder / CSV)
    (folder / PAGE).write_text(page(rows, tabulating.versions()), encoding="utf-8")


def page(rows: Sequence[Row], made_by: str) -> str:
    """Return the page.

    Parameters
    ----------
    rows : sequence of Row
    made_by : str
        Versions, as `tabulating.versions` says them.

    Returns
    -------
    str
    """
    fewest, most = min(row.datasets for row in rows), max(row.datasets for row in rows)
    head = _HEAD.format(
        datasets=fewest,
        judged=most,
        times=TIMES,
        draws=max(row.draws for row in rows),
        seed=rows[0].seed,
        versions=made_by,
    )
    tables: list[str] = []
    for law in LAWS:
        of_law = [row for row in rows if row.errors == law]
        tables += [f"## {law.capitalize()}", _LAWS[law], _table(of_law)]
    return tabulating.joined([head, _reading(rows), *tables, _TAIL])


def _reading(rows: Sequence[Row]) -> str:
    """Say what was asked, and how far the tests go that are outside their null."""
    asked = [row for row in rows if row.asked]
    missed = [row for row in asked if not row.holds]
    lines = [
        f"Of {counted(len(asked), 'rate')} with a limit, {len(asked) - len(missed)} stay within.",
        "",
    ]
    lines += [
        f"- {'within' if row.holds else '**above**'}: `{row.test}`, {row.errors}, n = {row.n}: "
        f"{row.rate:.4f} [{', '.join(f'{end:.4f}' for end in _interval(row))}], "
        f"limit {row.limit:.3f}"
        for row in asked
    ]
    outside = [row for row in rows if not row.inside]
    highest = {
        test: max(row.rate for row in outside if row.test == test)
        for test in dict.fromkeys(row.test for row in outside)
    }
    named = ", ".join(f"`{test}` {rate:.3f}" for test, rate in highest.items())
    lines.append(
        f"- highest rates outside the null of the test: {named}. A small p of these does not say "
        "that the trimmed means differ."
    )
    return "## What it says\n\n" + "\n".join(lines)


def _table(rows: Sequence[Row]) -> str:
    """One line a test: its null, whether the design lies inside, and the rates by n."""
    names = ["test", "its null hypothesis", "inside"]
    names += [f"n = {n}" for n in SUBJECTS] + [f"limit, n = {n}" for n in SUBJECTS]
    lines = tabulating.head(names, 3)
    for test, null in NULLS.items():
        found = {row.n: row for row in rows if row.test == test}
        of_test = [found[n] for n in SUBJECTS]
        limits = ["none" if row.limit is None else f"{row.limit:.3f}" for row in of_test]
        inside = "yes" if of_test[0].inside else "no"
        lines.append(
            tabulating.line([f"`{test}`", null.words, inside, *map(_rate, of_test), *limits])
        )
    return "\n".join(lines)


def _rate(row: Row) -> str:
    """Write a rate with its interval: in brackets outside the null, bold above the limit."""
    text = f"{row.rate:.3f}"
    text = text if row.inside else f"({text})"
    text = text if row.holds is not False else f"**{text}**"
    low, high = _interval(row)
    return f"{text} [{low:.3f}, {high:.3f}]"


def _interval(row: Row) -> tuple[float, float]:
    return tabulating.monte_carlo_interval(row.rejections, row.datasets)


_HEAD = """
# Location under unequal spread

How often the overall tests reject at .05 when the **trimmed means are equal** and the spread is
not. This page and `location.csv`, which has one row a rate, are made by one command, and by nothing
else:

```bash
python -m robustrm.trials location --datasets {datasets} --draws {draws} --seed {seed} \\
    --out docs/evidence
```

Four occasions, 10 or 20 subjects. The value of a subject is spread × (x − c), where
x = (a + e)/√2, or its exponential; a, the subject's level, and e, the error of the occasion, are
independent standard normal, so that (a + e)/√2 correlates by 1/2 between occasions; c is the 20%
trimmed mean of the law of x (0), or of its exponential; spread is 1, 1, 2 and 4.

{datasets} data sets a cell, {judged} ({times} times as many) in the lognormal cell with 10
subjects; {draws} rearrangements or resamples drawn anew for each data set, seed {seed}. The tests
by permutation share their rearrangements. Trimmed means are trimmed by 20% at each end.
`trimmed_anova` is the F form, `trimmed_anova, bootstrap` the bootstrap-t of the same F; `anova` is
corrected by Greenhouse and Geisser. Without ties `friedman` is looked up in its exact law where it
is short enough.

Made with {versions}.

**Inside** says whether the design lies inside the null hypothesis of the test; (approximate) marks
a test whose level is approximate even there. A rate in (brackets) lies outside: nothing is promised
there, and the number says what happens. In [square brackets] stands the 95% Monte Carlo interval
(Clopper-Pearson); a rate within its limit whose interval reaches beyond it leaves open on which
side the level lies. A **bold** rate is above its limit. Limits are set for the trimmed means in the
lognormal cell with 10 subjects, and for Hotelling's test where its assumption holds exactly; no
limit is set where the null is false.
"""

_LAWS = {
    "normal": """
The contrasts are normal, so means, medians and trimmed means are equal. Spreads and hence the
marginal distributions differ, which is outside the null of the rank tests and of every permutation.
""",
    "lognormal": """
The values are skewed. Trimmed means are equal, and because the spread differs nothing else is:
means, medians and distributions differ between the occasions. Only tests of trimmed means are
inside their null.
""",
}

_TAIL = """
## Who remakes it

Whoever changes one of the tests, the simulation or the shared rearrangements runs the command above
and commits both files. A test compares the page with the CSV and holds the CSV to its limits; a
slow test remakes a cell to the last count. [Level](level.md) has the cells in which the
permutation tests are exact, [coverage](coverage.md) the intervals.

Simulation shows that a test does what it says in these cells. It does not show that a study meets
the assumptions.
"""
