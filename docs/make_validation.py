"""Make `validation.md` from the cases of tests/reference.

Run ``python docs/make_validation.py`` after a case has changed.
"""

from __future__ import annotations

import importlib.util
import sys
from collections import defaultdict
from pathlib import Path
from types import ModuleType
from typing import Any

ROOT = Path(__file__).resolve().parents[1]
CASES = ROOT / "tests" / "reference" / "cases.py"
TARGET = Path(__file__).with_name("validation.md")

HEAD = """\
# Validation

What robustrm computes, and against what it is checked. This page is made from the files in
`tests/reference/` by `docs/make_validation.py`; a test fails when it is out of date.

Each case holds its data, the values printed by its source, and the same values recomputed by
independent code (enumeration, SciPy, statsmodels), not by this package. Printed values are held
to half a unit of their last digit, recomputed ones to nine digits. "From memory" means that the
case was written down without the source at hand; where printed and recomputed values disagree,
the printed ones are not relied on.

A validated formula is not a validated study. Check the plan, the data and the fitness of the method
with a qualified statistician.
"""
BEYOND = """\
## What else is checked

- Exact null distributions against the full list of arrangements on small tables, ties included.
- SciPy and statsmodels, where they compute the same thing.
- Properties that must hold for any data: subjects in another order, or with other labels, give
  the same result; a monotone transform does not move a rank test; low ≤ estimate ≤ high;
  0 < p ≤ 1.
- The worked example of every method page runs as a test.
"""


def page() -> str:
    """Return the text of the page."""
    cases = _reference()
    reasons = cases.not_used()
    return "\n".join(
        [HEAD, _compared(cases, reasons), _absent(reasons), _fields(reasons["fields"]), BEYOND]
    )


def _reference() -> ModuleType:
    spec = importlib.util.spec_from_file_location("reference_cases", CASES)
    if spec is None or spec.loader is None:
        raise FileNotFoundError(CASES)
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module  # its dataclasses look their module up
    spec.loader.exec_module(module)
    return module


def _compared(cases: ModuleType, reasons: dict[str, dict[str, str]]) -> str:
    lines = [
        "## Cases and what is compared\n",
        "| case | what | source | printed values | recomputed values | where they come from |",
        "| --- | --- | --- | --- | --- | --- |",
    ]
    for name, entry in cases.all_cases().items():
        counts = _counts(cases, name, reasons)
        cells = [f"`{name}`", entry.method, entry.citation, *map(str, counts), entry.source]
        lines.append(f"| {' | '.join(_cell(text) for text in cells)} |")
    return "\n".join(lines) + "\n"


def _counts(cases: ModuleType, name: str, reasons: dict[str, dict[str, str]]) -> tuple[Any, Any]:
    """Return how many printed and recomputed fields of a case are compared."""
    left = [key.partition(":")[2] for key in reasons["fields"] if key.startswith(f"{name}:")]
    used = [
        leaf
        for leaf in cases.leaves(name)
        if not any(leaf == key or leaf.startswith((f"{key}/", f"{key}.")) for key in left)
    ]
    printed = sum(leaf.startswith("published.") for leaf in used)
    return printed, len(used) - printed


def _absent(reasons: dict[str, dict[str, str]]) -> str:
    lines = ["## Cases not used\n", "| case | reason |", "| --- | --- |"]
    lines += [f"| `{name}` | {_cell(why)} |" for name, why in reasons["cases"].items()]
    return "\n".join(lines) + "\n"


def _fields(fields: dict[str, str]) -> str:
    """Return the values not used, one line a reason."""
    by_reason: dict[str, list[str]] = defaultdict(list)
    for key, why in fields.items():
        by_reason[why].append(f"`{key}`")
    lines = [
        "## Values not used\n",
        "Parts of the cases above that no test compares, each with its reason.\n",
    ]
    lines += [f"- {why} ({', '.join(keys)})" for why, keys in by_reason.items()]
    return "\n".join(lines) + "\n"


def _cell(text: str) -> str:
    return " ".join(text.split()).replace("|", "\\|")


if __name__ == "__main__":
    TARGET.write_text(page(), encoding="utf-8", newline="\n")
