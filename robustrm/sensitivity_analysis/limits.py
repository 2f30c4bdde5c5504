"""Values beyond a limit: whether the conclusion depends on what stands in their place."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from robustrm.analysis import ALL_OCCASIONS, Progress
from robustrm.methods.follow_up import declared_pairs
from robustrm.plan import Plan
from robustrm.results import Note, plain
from robustrm.sensitivity_analysis.frames import records
from robustrm.sensitivity_analysis.likelihood import likelihood_contrasts
from robustrm.sensitivity_analysis.limits_entering import (
    COUNT_COLUMNS,
    counts_of,
    is_divisible,
)
from robustrm.sensitivity_analysis.limits_rows import (
    COLUMNS,
    bound_rows,
    likelihood_row,
    range_row,
)
from robustrm.sensitivity_analysis.limits_substitutes import (
    ONE,
    Range,
    apart_ranges,
    family_ranges,
    multiple_ranges,
    overall_apart,
    overall_range,
    overall_tests,
    pair_tests,
    step_rows,
)
from robustrm.sensitivity_analysis.limits_words import (
    closing,
    counts_sentence,
    likelihood_sentence,
    range_sentence,
)
from robustrm.table import OccasionTable

if TYPE_CHECKING:
    import pandas as pd

STEP_COLUMNS = (
    "label", "method", "varied", "times_limit", "estimate", "low", "high", "p", "p_adjusted",
)  # fmt: skip


@dataclass(frozen=True, eq=False)
class Limits:
    """What values beyond a limit may do to the conclusion.

    Parameters
    ----------
    frame : DataFrame
        One row a comparison, test and thing varied: the planned result, and the lowest and
        highest estimate and P; ``changes`` names what of the reading changes, ``changes_below``
        and ``changes_above`` the nearest share (or multiple) of the limit at which it does.
    steps : DataFrame
        One row a substitute that was tried, in times the limit.
    counts : DataFrame
        One row a comparison: the common limits, values beyond, measured values given up, and
        how many fell and rose.
    sentences : tuple of str
        What was found, in words.
    notes : tuple of Note
        What a reader must know.
    """

    frame: pd.DataFrame
    steps: pd.DataFrame
    counts: pd.DataFrame
    sentences: tuple[str, ...]
    notes: tuple[Note, ...] = ()

    def __str__(self) -> str:
        return "\n".join([*self.sentences, *(f"Note: {note}" for note in self.notes)])

    def to_dict(self) -> dict[str, Any]:
        """Return plain values, the frames as lists of rows."""
        return {
            **{name: records(getattr(self, name)) for name in ("frame", "steps", "counts")},
            "sentences": list(self.sentences),
            "notes": plain(self.notes),
        }


def limit_sensitivity(
    table: OccasionTable, plan: Plan, *, root: int, progress: Progress | None = None
) -> Limits:
    """Show how every result moves with what stands for the values beyond a limit.

    Parameters
    ----------
    table : OccasionTable
        The data, on the raw scale.
    plan : Plan
        Contrasts, tests, scale, substitute and level.
    root : int
        Root of the random streams; only tests beyond the budget of exact counting draw.
    progress : callable, optional
        Called with (done, total) after each part.

    Returns
    -------
    Limits
        Without a value beyond a limit its frames are empty and it says so in one sentence.

    Raises
    ------
    DataError
        When the scale is logarithmic and a value is zero or negative.

    Notes
    -----
    **One common limit.** Every test across occasions starts from the largest lower (smallest
    upper) limit of the cells compared. Tests on limits that differ do not hold their level, so
    none is shown; the counts say how many measured values the common limit gave up.

    **Substitutes.** Planned test, signed-rank test, sign flip and paired t, and the overall tests
    that use sizes, are made with 13 shares of the limit between 1% and all of it (overall tests
    with 6). The place where a reading changes is closed in to a thousandth; a change that comes
    and goes between two shares is not seen. On logs a substitute near zero has no bound: nearer
    than 1% of the limit a mean log ratio goes on without end. Where both occasions have values
    below, every two of 6 shares are tried for them apart in the planned test, and the two ends in
    the others: estimates have their ends there, P need not.

    **Any value.** For the signed-rank test the ends are exact (but for ties) with every value free
    beyond its own limit, since T⁺ and the Hodges-Lehmann estimate rise with every difference; on
    the raw scale a value below a positive limit is not taken as negative. Sign test and
    Friedman's test ask for order only: P is bounded over every order that the limits allow
    (``"<5"`` and 3 are open, ``"<5"`` and 5 are not), once with values beyond one limit tied, once
    with these open as well. The P of fully measured values lies between these ends. They are no
    tests of their own.

    **Above a limit.** The limit and up to 10 times the limit enter.

    **More than half beyond.** No shift is given; the counts of falls and rises stand instead.

    The likelihood needs no substitute but a normal model of the logs: see
    :func:`robustrm.sensitivity_analysis.likelihood.likelihood_contrasts`.

    Examples
    --------
    >>> from robustrm.table import OccasionTable
    >>> before = [5.1, 8.3, 2.2, 9.6, 4.4, 6.7, 3.8, 7.5, 5.9, 2.4]
    >>> after = [3.9, 6.0, 1.0, 8.1, 3.7, 4.1, 2.6, 5.2, 1.0, 2.9]
    >>> table = OccasionTable.from_array(
    ...     list(zip(before, after)),
    ...     occasions=["before", "after"],
    ...     below=[(False, value == 1.0) for value in after],
    ... )
    >>> found = limit_sensitivity(table, Plan(), root=1)
    >>> row = found.frame.iloc[0]
    >>> row["method"], round(float(row["p_highest"]), 4), row["changes"]
    ('signed_rank', 0.0098, '')
    """
    raw = table.in_natural_order()
    kept = raw.complete() if plan.missing == "complete" else raw
    pairs = declared_pairs(kept, plan.contrasts, "contrasts")
    counts = [counts_of(kept, f"{b} vs {a}", (a, b)) for a, b in pairs]
    whole = [counts_of(kept, ALL_OCCASIONS, None)] if kept.n_occasions > 2 else []
    scaled = kept.on_scale(plan.used_scale)
    touched = [one for one in (*counts, *whole) if one.is_touched]
    if not touched:
        return _made([], [], [], _NOWHERE, ())
    parts = _Parts(progress)
    ranges, notes = _ranges(scaled, plan, root, parts)
    bounds = list(bound_rows(scaled, plan, counts, root))
    parts.done()
    fitted = [
        contrast
        for contrast, count in zip(likelihood_contrasts(raw, plan), counts, strict=True)
        if count.is_touched
    ]
    parts.done()
    rows = [
        *(range_row(found, plan) for found in ranges),
        *(row for row, _ in bounds),
        *map(likelihood_row, fitted),
    ]
    sentences = (
        *map(counts_sentence, touched),
        *(range_sentence(found, plan) for found in ranges if _is_told(found)),
        *(text for _, text in bounds if text),
        *(likelihood_sentence(contrast) for contrast in fitted if contrast.estimate is not None),
        *closing(ranges, plan),
    )
    told = dict.fromkeys((*notes, *(note for contrast in fitted for note in contrast.notes)))
    return _made(rows, step_rows(ranges), [c.row() for c in touched], sentences, tuple(told))


_NOWHERE = ("No value that is compared lies beyond a limit.",)
_NOT_DIVISIBLE = Note(
    "limit not positive",
    "A limit is zero or negative on the raw scale.",
    "A share of it does not lie between zero and the limit, so no substitutes are tried.",
    "Read the tests by order.",
)


class _Parts:
    """Counts finished parts for a progress callback."""

    def __init__(self, progress: Progress | None) -> None:
        self.progress, self.count, self.total = progress, 0, 4

    def done(self) -> None:
        self.count += 1
        if self.progress is not None:
            self.progress(self.count, self.total)


def _ranges(
    scaled: OccasionTable, plan: Plan, root: int, parts: _Parts
) -> tuple[list[Range], list[Note]]:
    if not is_divisible(scaled.recensored()):
        return [], [_NOT_DIVISIBLE]
    found: list[Range] = []
    for name, adjust in pair_tests(plan):
        found += family_ranges(scaled, plan, name, adjust, root)
        found += apart_ranges(scaled, plan, name, adjust, root)
        found += multiple_ranges(scaled, plan, name, adjust, root)
    parts.done()
    for name in overall_tests(plan):
        one = overall_range(scaled, plan, name, root)
        if one is not None:
            found.append(one)
            each = overall_apart(scaled, plan, one, root) if name == plan.omnibus else None
            found += [] if each is None else [each]
    parts.done()
    return found, []


def _is_told(found: Range) -> bool:
    """Say whether a range is put into words: of the planned tests, or with a place of change."""
    return found.planned.role in ("primary", "supporting") or (
        found.varied == ONE and bool(found.changes)
    )


def _made(
    rows: Sequence[dict[str, Any]],
    steps: Sequence[dict[str, Any]],
    counts: Sequence[dict[str, Any]],
    sentences: Sequence[str],
    notes: tuple[Note, ...],
) -> Limits:
    import pandas as pd

    return Limits(
        frame=pd.DataFrame(rows, columns=list(COLUMNS)),
        steps=pd.DataFrame(steps, columns=list(STEP_COLUMNS)),
        counts=pd.DataFrame(counts, columns=list(COUNT_COLUMNS)),
        sentences=tuple(sentences),
        notes=notes,
    )
