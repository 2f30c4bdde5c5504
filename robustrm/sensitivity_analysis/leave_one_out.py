"""Leaving out one subject at a time: what holds whoever it is, and what hangs on one person."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from robustrm._format import counted, listing
from robustrm.analysis import Progress, Row
from robustrm.errors import TooFewError
from robustrm.methods.registry import method as registered
from robustrm.plan import Plan
from robustrm.results import Estimate, Note, Role, Scale
from robustrm.sensitivity_analysis.frames import records
from robustrm.sensitivity_analysis.influence import Influence, Without
from robustrm.sensitivity_analysis.influence_words import influence_sentence, lead_sentence
from robustrm.sensitivity_analysis.reading import method_words, the
from robustrm.sensitivity_analysis.repeats import Outcome, Recipe, Repeats, kept_rows, outcome_of
from robustrm.table import OccasionTable

if TYPE_CHECKING:
    import pandas as pd

LEAST = 3


@dataclass(frozen=True, eq=False)
class LeaveOneOut:
    """The planned contrasts and the parametric results with every subject left out in turn.

    Parameters
    ----------
    frame : DataFrame
        One row an analysis, comparison and subject left out, unrounded: ``label``, ``title``,
        ``method``, ``role``, ``scale``, ``estimand``, ``left_out``, ``included`` (whether that
        subject is in the analysis at all), ``n``, ``estimate``, ``low``, ``high``, ``level``,
        ``unit``, ``p``, ``p_adjusted`` and ``changes`` (in what the reading changes).
    summary : DataFrame
        One row an analysis and comparison: the same columns on all subjects, then the range of
        estimate and P with one left out (``estimate_min`` to ``p_adjusted_max``),
        ``most_influential``, ``changes_reading`` (identifiers, with commas) and ``holds``.
    influences : tuple of Influence
        The same as results, for a figure.
    sentences : tuple of str
        What holds whoever is left out, and what does not.
    notes : tuple of Note
        What a reader must know.
    """

    frame: pd.DataFrame
    summary: pd.DataFrame
    influences: tuple[Influence, ...]
    sentences: tuple[str, ...]
    notes: tuple[Note, ...]

    def __str__(self) -> str:
        return "\n".join([*self.sentences, *(f"Note: {note}" for note in self.notes)])

    def to_dict(self) -> dict[str, Any]:
        """Return plain values that any JSON writer takes."""
        return {
            "frame": records(self.frame),
            "summary": records(self.summary),
            "sentences": list(self.sentences),
            "notes": [note.to_dict() for note in self.notes],
        }


def leave_one_out(
    table: OccasionTable, plan: Plan, *, root: int, progress: Progress | None = None
) -> LeaveOneOut:
    """Leave out every subject in turn, and say who changes the reading, if anybody.

    Parameters
    ----------
    table : OccasionTable
        The data, on the raw scale.
    plan : Plan
        The plan. Planned contrasts and overall test are repeated, and beside them the paired t
        test and the analysis of variance on both scales.
    root : int
        Root of the random streams of tests that draw.
    progress : callable, optional
        Called with (done, total) after each repeat.

    Returns
    -------
    LeaveOneOut
        Every repeat, a summary, and sentences.

    Raises
    ------
    TooFewError
        With fewer than three subjects.
    DataError
        When the planned scale is logarithmic and a value is zero or negative.

    Notes
    -----
    The reading is the direction of the estimate and the side of the level on which P lies,
    before and after adjustment. It changes when the direction turns or P changes sides. A P that
    could no longer reach the level with one subject fewer says nothing of the person left out:
    such a change is not counted, and a sentence says so.

    The most influential subject is the one without whom the estimate moves furthest, on the scale
    of the analysis (logarithm of a ratio); of an overall test, the logarithm of P. Somebody
    always is: a subject is not wrong, and not to be removed, for being the most influential.

    With n subjects each repeat shares n − 1 with the full data, so that the repeats say how the
    answer hangs on single people, not how it would vary in another sample.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[91, 72], [40, 31], [120, 95], [66, 50], [33, 21], [75, 60], [52, 41], [48, 190]],
    ...     occasions=["before", "after"],
    ... )
    >>> found = leave_one_out(table, Plan(), root=1)
    >>> found.summary[["title", "scale", "most_influential", "changes_reading"]].values.tolist()[:2]
    [['Wilcoxon signed-rank test', 'log', 'S8', 'S8'], ['Paired t test', 'raw', 'S8', 'S8']]
    """
    kept = kept_rows(table, plan)
    if kept.n_subjects < LEAST:
        raise TooFewError(
            f"Leaving one subject out needs at least {LEAST} subjects, got {kept.n_subjects}."
        )
    kept.on_scale(plan.used_scale)  # a planned scale that the data do not have is refused here
    repeats = Repeats(kept, plan, root)
    recipes = _recipes(plan)
    tick = _ticker(progress, len(recipes) * kept.n_subjects)
    found: list[Influence] = []
    undone: list[str] = []
    for recipe in recipes:
        whole = _whole(recipe, kept, plan, root)
        if whole is None:
            undone.append(f"{the(registered(recipe.method).title)} ({recipe.scale} scale)")
            for _ in kept.subjects:
                tick()
            continue
        found.extend(_influences(whole, repeats, plan.alpha, tick))
    return LeaveOneOut(
        frame=_frame(found),
        summary=_summary(found),
        influences=tuple(found),
        sentences=(lead_sentence(found), *map(influence_sentence, found)),
        notes=tuple(_notes(found, undone)),
    )


def _recipes(plan: Plan) -> list[Recipe]:
    """Return the planned analyses, then the parametric ones that are not among them."""
    found = [
        Recipe(plan.pair, plan.used_scale, plan.adjust, "primary", is_overall=False),
        *(_beside("paired_t", scale, plan) for scale in _SCALES),
        Recipe(plan.omnibus, plan.used_scale, None, "supporting", is_overall=True),
        *(_beside("anova", scale, plan) for scale in _SCALES),
    ]
    first = {(recipe.method, recipe.scale): recipe for recipe in reversed(found)}
    return [recipe for recipe in found if first[recipe.method, recipe.scale] is recipe]


_SCALES: tuple[Scale, ...] = ("raw", "log")


def _beside(method: str, scale: Scale, plan: Plan) -> Recipe:
    role: Role = "sensitivity" if scale == plan.used_scale else "supplementary"
    overall = method == "anova"
    return Recipe(method, scale, None if overall else "bonferroni", role, is_overall=overall)


def _whole(recipe: Recipe, kept: OccasionTable, plan: Plan, root: int) -> Outcome | None:
    """Return the rows on all subjects, with all the draws of the plan."""
    repeats = Repeats(kept, plan, root)
    table = repeats.on(kept.subjects, recipe.scale)
    return None if table is None else outcome_of(recipe, table, plan, root)


def _ticker(progress: Progress | None, total: int) -> Callable[[], None]:
    count = 0

    def tick() -> None:
        nonlocal count
        count += 1
        if progress is not None:
            progress(count, total)

    return tick


def _influences(
    whole: Outcome, repeats: Repeats, alpha: float, tick: Callable[[], None]
) -> list[Influence]:
    recipe = max((Recipe.of(row) for row in whole.rows.values()), key=lambda r: r.is_slow)
    made: dict[str, Outcome | None] = {}
    for subject in repeats.table.subjects:
        made[subject] = repeats.without(recipe, subject)
        tick()
    return [
        Influence(
            row,
            tuple(
                Without.of(subject, row, whole, outcome, alpha) for subject, outcome in made.items()
            ),
            alpha,
        )
        for row in whole.rows.values()
    ]


# ── frames ────────────────────────────────────────────────────────────────────────────────


def _frame(found: Sequence[Influence]) -> pd.DataFrame:
    import pandas as pd

    rows = [
        {
            **_head(influence.row),
            "left_out": without.subject,
            "included": without.included,
            **_numbers(without.row),
            "changes": ", ".join(without.changes),
        }
        for influence in found
        for without in influence.repeats
    ]
    return pd.DataFrame(rows)


def _summary(found: Sequence[Influence]) -> pd.DataFrame:
    import pandas as pd

    return pd.DataFrame([_summary_row(influence) for influence in found])


def _summary_row(influence: Influence) -> dict[str, Any]:
    ranges = {
        f"{name}_{end}": value
        for name in ("estimate", "p", "p_adjusted")
        for end, value in zip(("min", "max"), influence.range_of(name), strict=True)
    }
    return {
        **_head(influence.row),
        **_numbers(influence.row),
        **ranges,
        "most_influential": ", ".join(influence.most_influential),
        "changes_reading": ", ".join(without.subject for without in influence.changing),
        "holds": influence.holds,
    }


def _head(row: Row) -> dict[str, Any]:
    return {
        "label": row.label,
        "title": row.title,
        "method": row.result.method,
        "role": row.role,
        "scale": row.result.scale,
        "estimand": row.result.estimand,
    }


def _numbers(row: Row | None) -> dict[str, Any]:
    estimate: Estimate | None = None if row is None else row.result.estimate
    names = ("low", "high", "level")
    ends = {name: None if estimate is None else getattr(estimate, name) for name in names}
    return {
        "n": 0 if row is None else row.result.n_subjects,
        "estimate": math.nan if estimate is None else estimate.value,
        **{name: math.nan if value is None else value for name, value in ends.items()},
        "unit": None if estimate is None else estimate.unit,
        "p": math.nan if row is None else row.result.p_value,
        "p_adjusted": math.nan if row is None or row.p_adjusted is None else row.p_adjusted,
    }


# ── notes ─────────────────────────────────────────────────────────────────────────────────


def _notes(found: Sequence[Influence], undone: Sequence[str]) -> Iterator[Note]:
    yield Note(
        "not a reason to remove",
        "Somebody always moves the answer most.",
        "That is no reason to leave anybody out of the analysis.",
        "Check the values of a subject on whom the reading hangs against the source, and report "
        "both results.",
    )
    if undone:
        yield Note("not repeated", f"Not made on all subjects, so not repeated: {listing(undone)}.")
    failed = [influence for influence in found if influence.failed]
    if failed:
        told = "; ".join(
            f"{influence.row.label}, {method_words(influence.row)}: {listing(influence.failed)}"
            for influence in failed
        )
        yield Note("no repeat", f"Without these subjects nothing could be computed: {told}.")
    drawn = [influence for influence in found if influence.unresolved]
    if drawn:
        count = sum(len(influence.unresolved) for influence in drawn)
        yield Note(
            "draws do not tell",
            f"In {counted(count, 'repeat')} the random draws leave it open on which side of the "
            "level P lies.",
            "Such a repeat is not counted as a change of the reading.",
            "Raise the first stage of the plan.",
        )
