"""A row of an analysis made again: on the other scale, without somebody, with another substitute.

Everything else stays as the plan has it, so that what moves is what was changed.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from robustrm.analysis import ALL_OCCASIONS, Row, family_of, overall
from robustrm.errors import DataError, TooFewError
from robustrm.methods.follow_up import smallest_p
from robustrm.methods.registry import method as registered
from robustrm.plan import Plan
from robustrm.results import Scale
from robustrm.table import OccasionTable

FLIPPED = frozenset({"rank_pair", "row_flip", "sign_flip"})
"""Tests that go through the flips of whole subjects one by one: slow from about 20 subjects."""

MANY_ARRANGEMENTS = 2**18
"""With more, a test of `FLIPPED` that counts them all is repeated by random draws."""


@dataclass(frozen=True, slots=True)
class Recipe:
    """How a row came about, apart from the data.

    Parameters
    ----------
    method, scale, adjust, role
        As in the row.
    is_overall : bool
        Whether all occasions are compared at once.
    is_bootstrap : bool
        Whether the null distribution is that of the bootstrap.
    is_slow : bool
        Whether a repeat draws arrangements, where the row itself counted all.
    """

    method: str
    scale: Scale
    adjust: str | None
    role: Any
    is_overall: bool
    is_bootstrap: bool = False
    is_slow: bool = False

    @classmethod
    def of(cls, row: Row) -> Recipe:
        """Return how a row of an analysis was made."""
        result = row.result
        many = result.null == "exact" and (result.arrangements or 0) > MANY_ARRANGEMENTS
        return cls(
            method=result.method,
            scale=result.scale,
            adjust=row.adjust,
            role=row.role,
            is_overall=row.label == ALL_OCCASIONS,
            is_bootstrap=result.null == "bootstrap",
            is_slow=many and result.method in FLIPPED,
        )

    @property
    def takes_substitute(self) -> bool:
        """Whether a number enters for a value below a limit."""
        return self.adjust == "closed" or "substitute" in registered(self.method).options

    def options(self, substitute: float | None) -> dict[str, Any]:
        """Return the options that stand in place of the plan's."""
        given: dict[str, Any] = {}
        if self.is_bootstrap:
            given["null"] = "bootstrap"
        if self.is_slow:
            given["null"] = "monte carlo"
        if substitute is not None and self.takes_substitute:
            given["substitute"] = substitute
        return given


@dataclass(frozen=True)
class Outcome:
    """The rows of one recipe on some data, by what they compare.

    Parameters
    ----------
    rows : mapping of str to Row
        A row a contrast, or the one of all occasions.
    floors : mapping of str to float
        The smallest P that each row could have had; 0 where there is none.
    floor_adjusted : float
        The smallest adjusted P of the family.
    """

    rows: Mapping[str, Row]
    floors: Mapping[str, float]
    floor_adjusted: float


@dataclass
class Repeats:
    """Makes rows again, each once.

    Parameters
    ----------
    table : OccasionTable
        The data of the analysis on the raw scale.
    plan : Plan
        The plan; the first of its stages of draws is used.
    root : int
        Root of the random streams, that of the analysis.
    """

    table: OccasionTable
    plan: Plan
    root: int
    _made: dict[Any, Outcome | None] = field(default_factory=dict)
    _tables: dict[Any, OccasionTable | None] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self.plan = self.plan.replace(stages=self.plan.stages[:1])

    def outcome(
        self,
        recipe: Recipe,
        *,
        subjects: tuple[str, ...] | None = None,
        scale: Scale | None = None,
        substitute: float | None = None,
    ) -> Outcome | None:
        """Return the rows on some subjects, scale or substitute; None where they cannot be made."""
        kept = self.table.subjects if subjects is None else subjects
        used: Scale = scale or recipe.scale
        key = (recipe, kept, used, substitute)
        if key not in self._made:
            table = self.on(kept, used)
            made = None
            if table is not None:
                made = outcome_of(recipe, table, self.plan, self.root, substitute=substitute)
            self._made[key] = made
        return self._made[key]

    def without(self, recipe: Recipe, subject: str) -> Outcome | None:
        """Return the rows with one subject left out."""
        return self.outcome(recipe, subjects=tuple(s for s in self.table.subjects if s != subject))

    def on(self, subjects: tuple[str, ...], scale: Scale) -> OccasionTable | None:
        """Return the table of some subjects on a scale; None where a value has no logarithm."""
        key = (subjects, scale)
        if key not in self._tables:
            try:
                self._tables[key] = self.table.select(subjects=subjects).on_scale(scale)
            except DataError:
                self._tables[key] = None
        return self._tables[key]


def outcome_of(
    recipe: Recipe,
    table: OccasionTable,
    plan: Plan,
    root: int,
    *,
    substitute: float | None = None,
) -> Outcome | None:
    """Return the rows of a recipe on a table of its scale; None with too few subjects."""
    options = recipe.options(substitute)
    try:
        if recipe.is_overall:
            result = overall(table, plan, recipe.method, root, **options)
            floor = float(result.details.get("smallest_p") or 0.0)
            row = Row(recipe.role, ALL_OCCASIONS, result)
            return Outcome({row.label: row}, {row.label: floor}, floor)
        family = family_of(table, plan, recipe.method, recipe.adjust, root, **options)
    except TooFewError:
        return None
    return Outcome(
        rows={
            c.label: Row(recipe.role, c.label, c.result, c.p_adjusted, family.adjust)
            for c in family
        },
        floors={c.label: smallest_p(c) for c in family},
        floor_adjusted=family.smallest_p_adjusted,
    )


def kept_rows(table: OccasionTable, plan: Plan) -> OccasionTable:
    """Return the rows that the plan compares, in natural order."""
    ordered = table.in_natural_order()
    return ordered.complete() if plan.missing == "complete" else ordered
