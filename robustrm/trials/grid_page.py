"""The page of the record of the advice, and its shipped rows."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from pathlib import Path

from robustrm.trials.grid import (
    ADVISED,
    CHANGE,
    LEVEL_HOLDING,
    LOG,
    RAW,
    REGRET_TIMES,
    GridRow,
)
from robustrm.trials.habits import PRETEST, SMALLEST
from robustrm.trials.level import ALPHA, standard_error, z_of
from robustrm.trials.tabulating import head, joined, line, versions, write_csv

CSV, PAGE = "record.csv", "advice.md"
SHOWN = (ADVISED, "row_flip", "friedman", LOG, RAW, PRETEST, SMALLEST)
# The cell by which gain is judged: the base, with three and with four occasions.
MAX_REGRET, MEAN_REGRET = 0.05, 0.02
POWER_RANGE = (0.60, 0.75)

Key = tuple[object, ...]


def write_record(rows: Sequence[GridRow], page: Path, record: Path) -> None:
    """Write the page into one folder and the rows, which are shipped, into another."""
    page.mkdir(parents=True, exist_ok=True)
    record.mkdir(parents=True, exist_ok=True)
    write_csv(rows, record / CSV)
    (page / PAGE).write_text(page_text(rows), encoding="utf-8")


def page_text(rows: Sequence[GridRow]) -> str:
    """Return the whole page."""
    return joined(
        [
            "# The record of the advice",
            _OPENING.format(made=_made(rows)),
            "## What it says",
            "\n".join(f"- {text}" for text in verdicts(rows)),
            "## Level where occasions are exchangeable",
            _NULL,
            _table(_of(rows, "null"), _design_words),
            "## Level where centres are equal and occasions are not exchangeable",
            _NOT_EXCHANGEABLE,
            _table(_of(rows, "not exchangeable"), _design_words),
            "## Power, and each factor alone",
            _FACTORS,
            _table(_of(rows, "factor"), _factor_words),
            "## Power, pairs of factors",
            _table(_of(rows, "pair"), _factor_words),
            "## Regret",
            _REGRET,
            _regret_table(_of(rows, "regret")),
            "## Every test, where regret is measured",
            _table(_of(rows, "regret"), _design_words, (ADVISED, *LEVEL_HOLDING, LOG, RAW)),
            "## Its limits",
            _LIMITS,
        ]
    )


def verdicts(rows: Sequence[GridRow]) -> list[str]:
    """Say what was asked and what was found."""
    return [
        *_level_verdict("exchangeable null", _of(rows, "null"), (ADVISED,)),
        *_level_verdict("not exchangeable", _of(rows, "not exchangeable"), ("row_flip", LOG)),
        _regret_verdict(_of(rows, "regret")),
        *_gain_verdicts(_of(rows, "factor")),
    ]


def _level_verdict(name: str, rows: Sequence[GridRow], tests: Sequence[str]) -> list[str]:
    cells = len({_key(row) for row in rows})
    found = []
    for test in tests:
        mine = [row for row in rows if row.test == test]
        limit = ALPHA + z_of(cells * len(tests)) * standard_error(mine[0].datasets)
        worst = max(mine, key=lambda row: row.rate)
        mean = sum(row.rate for row in mine) / len(mine)
        may = ALPHA + 3 * standard_error(sum(row.datasets for row in mine))
        verdict = "holds" if worst.rate <= limit and mean <= may else "**does not hold**"
        found.append(
            f"level, {name}, `{test}` {verdict}: {len(mine)} cells, highest {worst.rate:.3f} "
            f"(limit {limit:.3f}, by chance over all cells), mean {mean:.4f} (limit {may:.4f})."
        )
    return found


def _regret_verdict(rows: Sequence[GridRow]) -> str:
    lacks = [row.rate for row in rows if row.test == "regret"]
    mean = sum(lacks) / len(lacks)
    verdict = "holds" if max(lacks) <= MAX_REGRET and mean <= MEAN_REGRET else "**does not hold**"
    return (
        f"regret {verdict}: {len(lacks)} cells, highest {max(lacks):.3f} (limit {MAX_REGRET}), "
        f"mean {mean:.4f} (limit {MEAN_REGRET})."
    )


def _gain_verdicts(rows: Sequence[GridRow]) -> list[str]:
    found = []
    for k in (3, 4):
        cell = {row.test: row.rate for row in rows if _is_reference(row, k)}
        low, high = POWER_RANGE
        holds = low <= cell[ADVISED] <= high and cell[ADVISED] >= 2 * cell[RAW]
        found.append(
            f"reference cell, k = {k}, {'holds' if holds else '**does not hold**'}: power of the "
            f"advised test {cell[ADVISED]:.3f} (asked {low} to {high}), of the Greenhouse-Geisser "
            f"F {cell[LOG]:.3f} on logs and {cell[RAW]:.3f} raw (asked: at most half). The scale "
            f"gains {cell[LOG] - cell[RAW]:.2f}, the exact test on top of it "
            f"{cell[ADVISED] - cell[LOG]:.2f}."
        )
    return found


def _is_reference(row: GridRow, k: int) -> bool:
    plain = row.limit == row.missing == 0 and not row.spread and row.correlation == "exchangeable"
    sds = (row.within_sd, row.between_sd) == (0.6, 1.0)
    return plain and sds and (row.errors, row.n, row.k) == ("lognormal", 14, k) and row.change > 0


# ── tables ────────────────────────────────────────────────────────────────────────────────────


def _of(rows: Iterable[GridRow], group: str) -> list[GridRow]:
    return [row for row in rows if row.group == group]


def _key(row: GridRow) -> Key:
    return (
        row.errors, row.n, row.k, row.within_sd, row.between_sd, row.limit, row.missing,
        row.correlation, row.spread, row.change,
    )  # fmt: skip


def _by_cell(rows: Iterable[GridRow]) -> dict[Key, dict[str, GridRow]]:
    found: dict[Key, dict[str, GridRow]] = {}
    for row in rows:
        found.setdefault(_key(row), {})[row.test] = row
    return found


def _table(
    rows: Sequence[GridRow],
    words: Callable[[GridRow], str],
    tests: Sequence[str] = SHOWN,
) -> str:
    """Return one line a cell, one column a test; a dash where a test has no scale to stand on."""
    lines = head(("errors", "n", "k", "design", *(f"`{test}`" for test in tests)), 4)
    for cell in _by_cell(rows).values():
        one = next(iter(cell.values()))
        rates = (f"{cell[test].rate:.3f}" if test in cell else "–" for test in tests)
        lines.append(line((one.errors, str(one.n), str(one.k), words(one), *rates)))
    return "\n".join(lines)


def _regret_table(rows: Sequence[GridRow]) -> str:
    lines = head(("errors", "n", "k", "regret", "advised", "best single test", "its power"), 3)
    for cell in _by_cell(rows).values():
        best = max((cell[test] for test in LEVEL_HOLDING), key=lambda row: row.rate)
        lines.append(
            line(
                (
                    best.errors,
                    str(best.n),
                    str(best.k),
                    f"{cell['regret'].rate:.3f}",
                    f"{cell[ADVISED].rate:.3f}",
                    f"`{best.test}`",
                    f"{best.rate:.3f}",
                )
            )
        )
    return "\n".join(lines)


def _design_words(row: GridRow) -> str:
    parts = []
    if row.correlation != "exchangeable":
        parts.append(row.correlation)
    if row.spread:
        parts.append(f"spread {row.spread}")
    return ", ".join(parts) or "exchangeable"


def _factor_words(row: GridRow) -> str:
    scale = 1.0 if row.errors.startswith("log") else 0.6
    within, between = row.within_sd * scale, row.between_sd * scale
    parts = [_design_words(row)]
    if round(within, 3) != 0.6:
        parts.append(f"within SD {within:g}")
    if round(between, 3) != 1.0:
        parts.append(f"between SD {between:g}")
    if row.limit:
        parts.append(f"{row.limit:.0%} at a limit")
    if row.missing:
        parts.append(f"{row.missing:.0%} missing")
    if not row.change:
        parts.append("no change")
    return ", ".join(part for part in parts if part != "exchangeable") or "base"


def _made(rows: Sequence[GridRow]) -> str:
    one = next(row for row in rows if row.group == "null")
    cells = len({(row.group, _key(row)) for row in rows})
    return (
        f"{cells} cells, {one.datasets} data sets each and {one.datasets * REGRET_TIMES} where "
        f"regret is measured, {one.draws} rearrangements drawn anew for each data set, seed "
        f"{one.seed}. Made with {versions()}."
    )


_OPENING = """
How often the advised overall test rejects at .05, beside what else is done. This page and
`record.csv`, which ships with the package and from which `robustrm advise` quotes, are made by
one command, and by nothing else:

```bash
python -m robustrm.trials advice --datasets 2000 --seed 1 --out docs/evidence \\
    --record robustrm/advice
```

{made}

The grid is a declared fraction of all combinations: a base cell, each factor varied alone,
named pairs, the exchangeable null, equal centres that are not exchangeable, and the cells of
regret. Errors whose name begins with "log" multiply: the marker is positive, taken as a
concentration, and every test but `anova, raw` works on logarithms. Other errors add: the marker
is a score, and every test works on the values. `anova` is corrected by Greenhouse and Geisser.
The base has 14 subjects, three occasions, lognormal errors of SD 0.6 on logs and subjects of SD
1.0.

Two habits stand beside, offered nowhere: the F test where a Shapiro-Wilk test of the residuals
passes and Friedman's otherwise; and the smallest p of five tests taken as if it were one.
"""

_NULL = """
Here an exact permutation test chosen by occasion-blind figures has its level whatever the
errors are. What is above .05 by more than chance is a test that was chosen by its answer.
"""

_NOT_EXCHANGEABLE = """
Logarithms are normal and their centres equal, but the occasions are not exchangeable: AR(1),
slopes that differ between subjects (SD of the change from one occasion to the next) or unequal
spread. The null of the advised permutation test is false here, and its rate says how far a
small p can come from spread or correlation alone. The whole-row sign flip and the
Greenhouse-Geisser F on logs are asked to hold.
"""

_FACTORS = f"""
A linear change of {CHANGE} within-subject SDs from the first to the last occasion. The first
line is the base, each further line differs from it in what it names.
"""

_REGRET = """
What the advised test lacks in power against the best of a fixed list of tests that hold their
level where occasions are exchangeable. The best is chosen on one half of the data sets and
measured on the other. A negative number is luck of the halves. The best single test is that of
all data sets.
"""

_LIMITS = """
- What is protected is the level of the exact permutation test, under exchangeable occasions.
  The parametric rows, the whole-row sign flip and the coverage of intervals are not, where the
  scale was chosen by data; the rule takes the scale from the kind of marker and so does not
  choose it by data.
- Most of the gain over the F test of raw values is the scale. On logs the F test with its
  correction comes close, and the table says how close.
- These are simulated data. A study's own data may be like none of these cells.
"""
