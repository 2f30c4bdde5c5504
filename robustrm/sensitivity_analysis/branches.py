"""The branches of a specification grid: every combination that the plan declares."""

from __future__ import annotations

import dataclasses
import itertools
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from robustrm.plan import GridChoices

DIMENSIONS = ("replicates", "scale", "test", "trim", "substitute", "missing", "outliers")
"""Names of the choices, in the order in which branches are listed."""

AS_READ = "as read"
NO_TRIM = "none"
TRIMMED = ("winsorized_permutation", "trimmed_anova")
COMPLETE_ONLY = ("quade", "trimmed_anova", "rank_anova", "hotelling")
"""Not a sum of scores, or with weights that are not comparable between subjects who lack others."""


@dataclass(frozen=True, slots=True)
class Branch:
    """One combination of choices, each as the plan spells it.

    `trim` is None for a test without one, `replicates` None for a table as it was read.
    """

    replicates: str | None
    scale: str
    test: str
    trim: float | None
    substitute: str
    missing: str
    outliers: str

    def words(self) -> dict[str, str]:
        """Return the choices as text, by dimension."""
        return {name: spelled(name, getattr(self, name)) for name in DIMENSIONS}


def spelled(dimension: str, value: str | float | None) -> str:
    """Return one choice as text.

    Examples
    --------
    >>> spelled("trim", 0.2), spelled("trim", None), spelled("replicates", None)
    ('20%', 'none', 'as read')
    """
    if dimension == "trim":
        return NO_TRIM if value is None else f"{round(100 * float(value), 6):g}%"
    return AS_READ if value is None else str(value)


def branches(choices: GridChoices, replicates: Sequence[str | None] = (None,)) -> Iterator[Branch]:
    """Yield every combination: shares only for tests that trim, gaps only for those that take them.

    Examples
    --------
    >>> few = GridChoices(scale=["log"], test=["quade"], substitute=["half"])
    >>> [branch.outliers for branch in branches(few)]
    ['kept', 'winsorized']
    """
    for rule, scale, test in itertools.product(replicates, choices.scale, choices.test):
        trims: Sequence[float | None] = choices.trim if test in TRIMMED else (None,)
        missing = ("complete",) if test in COMPLETE_ONLY else choices.missing
        rest = itertools.product(trims, choices.substitute, missing, choices.outliers)
        for trim, substitute, rows, outliers in rest:
            yield Branch(rule, scale, test, trim, substitute, rows, outliers)


def merged_words(group: Sequence[Branch]) -> dict[str, str]:
    """Return the choices of branches that coincide, those of a dimension joined by commas."""
    spellings = [branch.words() for branch in group]
    return {
        name: ", ".join(dict.fromkeys(words[name] for words in spellings)) for name in DIMENSIONS
    }


def differing(group: Sequence[Branch]) -> tuple[str, ...]:
    """Return the dimensions in which branches that coincide differ."""
    return tuple(
        field.name
        for field in dataclasses.fields(Branch)
        if len({getattr(branch, field.name) for branch in group}) > 1
    )
