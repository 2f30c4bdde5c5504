"""Every method beside the planned one, and what brings together the rows that disagree."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from robustrm._format import capital, counted, declared, listing
from robustrm.analysis import Analysis, Progress, Row, apart, references
from robustrm.results import Note, plain
from robustrm.sensitivity_analysis.drivers import Driver, Pair, drivers_of, parted_words
from robustrm.sensitivity_analysis.frames import records
from robustrm.sensitivity_analysis.reading import (
    is_resolved,
    method_words,
    numbers_words,
    parts,
    reading_of,
)
from robustrm.sensitivity_analysis.repeats import Recipe, Repeats, kept_rows

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, slots=True)
class Disagreement:
    """A row that does not read like the planned one, and what brings the two together.

    Parameters
    ----------
    label : str
        What is compared.
    planned, other : str
        The two methods, with scale and n.
    parted : tuple of str
        What parts: ``"direction"``, ``"p"`` (before adjustment), ``"p_adjusted"``.
    drivers : tuple of Driver
        Every change with which they read alike; else what each is about.
    sentence : str
        All of it in words.
    """

    label: str
    planned: str
    other: str
    parted: tuple[str, ...]
    drivers: tuple[Driver, ...]
    sentence: str


@dataclass(frozen=True, eq=False)
class Beside:
    """All rows of an analysis in one table, and every disagreement with the planned ones.

    Parameters
    ----------
    frame : DataFrame
        One row a method and comparison, unrounded: ``label``, ``title``, ``method``, ``role``,
        ``scale``, ``estimand``, ``n``, ``estimate``, ``low``, ``high``, ``level``, ``unit``,
        ``p``, ``p_adjusted``, ``adjust``, ``differs_in`` (in what the row is not like the
        planned one: n, scale, estimand) and ``reads_like_planned``; missing where one of the two
        has no P.
    disagreements : tuple of Disagreement
        One a row that reads otherwise.
    sentences : tuple of str
        What was found, in words.
    notes : tuple of Note
        What a reader must know.
    """

    frame: pd.DataFrame
    disagreements: tuple[Disagreement, ...]
    sentences: tuple[str, ...]
    notes: tuple[Note, ...]

    def __str__(self) -> str:
        return "\n".join([*self.sentences, *(f"Note: {note}" for note in self.notes)])

    def to_dict(self) -> dict[str, Any]:
        """Return plain values that any JSON writer takes."""
        return {
            "frame": records(self.frame),
            "disagreements": plain(self.disagreements),
            "sentences": list(self.sentences),
            "notes": [note.to_dict() for note in self.notes],
        }


def beside(analysis: Analysis, *, progress: Progress | None = None) -> Beside:
    """Set every result of an analysis beside the planned one, and look into disagreements.

    Parameters
    ----------
    analysis : Analysis
        A finished analysis.
    progress : callable, optional
        Called with (done, total) after each disagreement.

    Returns
    -------
    Beside
        The table, the disagreements with what brings the rows together, and the sentences.

    Notes
    -----
    A row *reads* as its direction (a fall, a rise) and as the side of the level on which its P
    lies, before and after adjustment. Two rows disagree when their directions are opposite, or
    when one P lies at or below the level and the other above, before or after adjustment.
    The planned row of all occasions is the overall test of the plan.

    For every disagreement both rows are made again, one change at a time: the method of one row
    on the scale of the other; one subject left out; another share of the limit for the values
    below it; the subjects that both have; the adjustment. A change with which the rows read alike
    is told with its numbers, and all that hold are told. Subjects are named where at most half of
    them do it. It is not told where the rows meet only
    because too few subjects are left to reach the level, or where drawn arrangements do not tell
    the side of the level. Nothing is counted as votes, and no row is chosen.

    A change that brings two rows together says where the disagreement lies in these data. It does
    not say which row is right. P near the level changes sides easily: then many changes hold.

    Examples
    --------
    >>> from robustrm.analysis import analyze
    >>> from robustrm.plan import Plan
    >>> from robustrm.table import OccasionTable
    >>> table = OccasionTable.from_array(
    ...     [[91, 72], [40, 31], [120, 95], [66, 50], [33, 21], [75, 60], [52, 41], [48, 190]],
    ...     occasions=["before", "after"],
    ... )
    >>> found = beside(analyze(table, Plan(companions=("sign_test",))))
    >>> [(one.parted, [driver.kind for driver in one.drivers]) for one in found.disagreements]
    [(('direction',), ['scale', 'one subject'])]
    >>> found.disagreements[0].drivers[1].subjects
    ('S8',)
    """
    alpha, rows = analysis.plan.alpha, analysis.rows()
    planned = references(rows)
    pairs = [
        pair
        for row in rows
        if row is not planned[row.label] and (pair := Pair(planned[row.label], row, alpha)).parted
    ]
    repeats = Repeats(
        kept_rows(analysis.table, analysis.plan), analysis.plan, int(analysis.record["seed"])
    )
    found = []
    for done, pair in enumerate(pairs, start=1):
        found.append(_disagreement(pair, drivers_of(pair, repeats)))
        if progress is not None:
            progress(done, len(pairs))
    return Beside(
        frame=_frame(rows, planned, alpha),
        disagreements=tuple(found),
        sentences=tuple(_sentences(rows, found, alpha)),
        notes=tuple(_notes(rows, pairs, alpha)),
    )


def _frame(rows: Sequence[Row], planned: dict[str, Row], alpha: float) -> pd.DataFrame:
    import pandas as pd

    frame = pd.DataFrame([_cells(row, planned[row.label], alpha) for row in rows])
    return frame.astype({"reads_like_planned": "boolean"})


def _cells(row: Row, planned: Row, alpha: float) -> dict[str, Any]:
    result = row.result.row()
    return {
        "label": row.label,
        "title": row.title,
        "method": row.result.method,
        "role": row.role,
        "scale": row.result.scale,
        "estimand": row.result.estimand,
        "n": row.result.n_subjects,
        **{name: result[name] for name in ("estimate", "low", "high", "level", "unit")},
        "p": row.result.p_value,
        "p_adjusted": math.nan if row.p_adjusted is None else row.p_adjusted,
        "adjust": row.adjust,
        "differs_in": ", ".join(apart(row.result, planned.result)),
        "reads_like_planned": _reads_like(row, planned, alpha),
    }


def _reads_like(row: Row, planned: Row, alpha: float) -> bool | None:
    readings = [reading_of(each, alpha) for each in (planned, row)]
    return None if None in [r.p for r in readings] else not parts(*readings)


def _disagreement(pair: Pair, drivers: tuple[Driver, ...]) -> Disagreement:
    planned, other = pair.rows
    numbers = [f"{method_words(row)} gives {numbers_words(row, pair.alpha)}" for row in pair.rows]
    head = f"{planned.label}: {numbers[0]}; beside it {numbers[1]}. {capital(parted_words(pair))}."
    return Disagreement(
        label=planned.label,
        planned=method_words(planned),
        other=method_words(other),
        parted=pair.parted,
        drivers=drivers,
        sentence=" ".join([head, *(driver.sentence for driver in drivers)]),
    )


def _sentences(rows: Sequence[Row], found: Sequence[Disagreement], alpha: float) -> Iterator[str]:
    """Give every comparison its sentences, in the order of the table."""
    planned = references(rows)
    for label, row in planned.items():
        others = [other for other in rows if other.label == label and other is not row]
        compared = [other for other in others if _reads_like(other, row, alpha) is not None]
        parted = [one.sentence for one in found if one.label == label]
        yield from parted
        if not others:
            continue
        if not compared:
            yield f"{label}: there is no P to compare with that of another row."
        elif not parted:
            whole = (
                "the other row reads"
                if len(compared) == 1
                else (f"all {len(compared)} other rows read")
            )
            yield (
                f"{label}: {whole} like {method_words(row)}, in direction and in P against "
                f"{declared(alpha)}. Nothing disagrees."
            )


def _notes(rows: Sequence[Row], pairs: Sequence[Pair], alpha: float) -> Iterator[Note]:
    open_rows = [f"{method_words(row)}, {row.label}" for row in rows if not is_resolved(row, alpha)]
    if open_rows:
        yield Note(
            "draws do not tell",
            f"The random draws leave it open on which side of {declared(alpha)} P lies: "
            f"{listing(open_rows)}.",
            "Its reading is that of the P printed.",
            "Raise the stages of the plan.",
        )
    slow = {row.title for pair in pairs for row in pair.rows if Recipe.of(row).is_slow}
    if slow:
        yield Note(
            "repeated by draws",
            f"{counted(len(slow), 'method')} repeated by random arrangements where the row "
            f"itself counts all: {listing(sorted(slow))}.",
        )
