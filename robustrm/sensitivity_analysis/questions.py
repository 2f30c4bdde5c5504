"""Three questions asked of every study, printed with their answers or as open.

Were people selected on a high value, was each occasion assayed in a run of its own, and what would
count as no relevant change? None can be answered from the values alone, and each decides what a
change over time may be taken for.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from robustrm._format import listing
from robustrm.methods.follow_up import declared_pairs
from robustrm.plan import Plan
from robustrm.results import Note, plain
from robustrm.sensitivity_analysis.margin import (
    COLUMNS,
    margin_bounds,
    margin_rows,
    margin_sentences,
    margin_text,
)
from robustrm.table import OccasionTable

if TYPE_CHECKING:
    import pandas as pd

Pair = tuple[str, str]

SELECTED = "Were people selected on a high value of this marker?"
OWN_RUNS = "Was each occasion assayed in a run of its own?"
MARGIN = "What would count as no relevant change?"


@dataclass(frozen=True, slots=True)
class Answer:
    """One question with its answer, or left open.

    Parameters
    ----------
    key : str
        Key of the plan that answers it.
    question : str
        The question.
    answer : str
        The answer in a word or two; ``"open"`` where there is none.
    meaning : str
        What the answer, or its absence, means for the results.
    notes : tuple of Note
        What a reader must know with it.
    """

    key: str
    question: str
    answer: str
    meaning: str
    notes: tuple[Note, ...] = ()

    @property
    def sentence(self) -> str:
        """Question, answer and meaning in one line."""
        return f"{self.question} {self.answer[:1].upper()}{self.answer[1:]}. {self.meaning}"


@dataclass(frozen=True, eq=False)
class Questions:
    """The three questions, and every planned contrast against the margin.

    Parameters
    ----------
    frame : DataFrame
        One row a question: ``key``, ``question``, ``answer``, ``meaning``.
    margins : DataFrame
        One row a planned contrast where a margin is declared, unrounded: occasions, estimand,
        scale, role, n, estimate, low, high, level, margin_low, margin_high, reading, and whether
        another substitute changes the reading.
    sentences : tuple of str
        One a question, then one a contrast.
    notes : tuple of Note
        What a reader must know.
    """

    frame: pd.DataFrame
    margins: pd.DataFrame
    sentences: tuple[str, ...]
    notes: tuple[Note, ...]

    def to_dict(self) -> dict[str, Any]:
        """Return plain values that any JSON writer takes."""
        return {
            "frame": plain(self.frame.to_dict("records")),
            "margins": plain(self.margins.to_dict("records")),
            "sentences": list(self.sentences),
            "notes": [note.to_dict() for note in self.notes],
        }


def questions(
    table: OccasionTable,
    plan: Plan,
    *,
    root: int,
    progress: Callable[[int, int], None] | None = None,
) -> Questions:
    """Answer what is asked of every study, or leave it open in words.

    Parameters
    ----------
    table : OccasionTable
        The data, on the raw scale.
    plan : Plan
        Its keys `selected`, `own_runs`, `margin` and `margin_reason` hold the answers.
    root : int
        Root of the random streams, for a method of comparison that draws.
    progress : callable, optional
        Called with (done, total) after each question.

    Returns
    -------
    Questions
        The answers, and the 90% interval of every planned contrast against the margin.

    Raises
    ------
    DataError
        When the scale is logarithmic and a value is zero or negative.

    Notes
    -----
    Selection on a high value makes the next value lie lower on average: part of the high value was
    chance. By how much depends on the mean and the spread of the people among whom they were
    selected, whom the table does not hold, so the direction is told and no size.

    A margin is read by the 90% interval of the planned method, whatever the level of the plan: an
    interval within the margin is two one-sided tests at 5% [1]_. One that reaches across an end of
    the margin leaves the question open.

    References
    ----------
    .. [1] Schuirmann, D. J. (1987). A comparison of the two one-sided tests procedure and the
       power approach for assessing the equivalence of average bioavailability. Journal of
       Pharmacokinetics and Biopharmaceutics 15, 657-680.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[9.1, 8.8], [4.0, 4.1], [2.0, 1.9], [6.6, 6.9], [3.2, 3.1], [5.0, 5.1]],
    ...     occasions=["week 0", "week 6"],
    ... )
    >>> plan = Plan(margin=1.25, margin_reason="agreed beforehand", selected=False)
    >>> found = questions(table, plan, root=1)
    >>> found.frame["answer"].tolist()
    ['no', 'open', 'a ratio of 1/1.25 to 1.25']
    >>> found.margins["reading"].tolist()
    ['lies within the margin']
    """
    import pandas as pd

    pairs = declared_pairs(table, plan.contrasts, "contrasts")
    answers = [_selected(table, plan, pairs), _own_runs(table, plan, pairs)]
    if progress is not None:
        progress(2, 3)
    margins = pd.DataFrame(margin_rows(table, plan, root), columns=COLUMNS)
    answers.append(_margin(plan, len(margins)))
    if progress is not None:
        progress(3, 3)
    frame = pd.DataFrame(
        [(a.key, a.question, a.answer, a.meaning) for a in answers],
        columns=["key", "question", "answer", "meaning"],
    )
    return Questions(
        frame=frame,
        margins=margins,
        sentences=(*(a.sentence for a in answers), *margin_sentences(margins, plan)),
        notes=tuple(note for a in answers for note in a.notes),
    )


# ── selection ─────────────────────────────────────────────────────────────────────────


def _selected(table: OccasionTable, plan: Plan, pairs: Sequence[Pair]) -> Answer:
    first = table.occasions[0]
    concerned = [f"{b} vs {a}" for a, b in pairs if first in (a, b)]
    if plan.selected is None:
        return Answer(
            "selected",
            SELECTED,
            "open",
            "If they were, later values are expected to lie lower without any change of the "
            "person. Declare `selected` in the plan.",
        )
    if not plan.selected:
        meaning = "No fall is expected from selection alone."
        return Answer("selected", SELECTED, "no", meaning)
    if not concerned:
        meaning = f"No planned contrast has the first occasion, {first}, in it."
        return Answer("selected", SELECTED, "yes", meaning)
    meaning = f"A fall after {first} is expected from that alone (regression to the mean)."
    note = Note(
        "regression to the mean",
        f"People were selected on a high value, and {first} is in {listing(concerned)}.",
        f"Where the value at {first} is the one they were selected on, later values are expected "
        "to lie lower without any change of the person: part of a high value is chance. By how "
        "much cannot be told from these data; it takes the mean and the spread of the people "
        "among whom they were selected.",
        "Compare with a value taken after the selection and before the start, or with a control "
        "group selected in the same way.",
    )
    return Answer("selected", SELECTED, "yes", meaning, (note,))


# ── runs ──────────────────────────────────────────────────────────────────────────────


def _own_runs(table: OccasionTable, plan: Plan, pairs: Sequence[Pair]) -> Answer:
    seen = table.source.get("plate")
    if isinstance(seen, Mapping) and not seen["single"]:
        return _runs_seen(seen, plan, pairs)
    told = {
        None: (
            "open",
            "If it was, a difference between runs enters every comparison of occasions and cannot "
            "be told from a change. Ask the laboratory; read a long file with `plate`, or declare "
            "`own_runs` in the plan.",
        ),
        True: (
            "yes",
            "A difference between runs enters every comparison of occasions and cannot be told "
            "from a change.",
        ),
        False: ("no", "A difference between runs does not go along with the occasions."),
    }
    answer, meaning = told[plan.own_runs]
    notes = (_runs_note(meaning),) if plan.own_runs else ()
    return Answer("own_runs", OWN_RUNS, answer, meaning, notes)


def _runs_seen(seen: Mapping[str, Any], plan: Plan, pairs: Sequence[Pair]) -> Answer:
    """Answer from the column of plates, which goes before the word of the plan."""
    apart = {frozenset(pair) for pair in seen["apart"]}
    hit = [f"{b} vs {a}" for a, b in pairs if frozenset((a, b)) in apart]
    source = f"by column {seen['column']!r}"
    if len(hit) == len(pairs):
        answer = f"yes, {source}"
        meaning = (
            "A difference between runs enters every planned contrast and cannot be told from a "
            "change."
        )
    elif hit:
        answer = f"some, {source}"
        meaning = (
            f"A difference between runs enters {listing(hit)} and cannot be told from a change; "
            "the other contrasts share runs."
        )
    else:
        answer = f"no, {source}"
        meaning = "The occasions of every planned contrast share runs."
    if plan.own_runs is not None and plan.own_runs != bool(hit):
        meaning += " The plan says otherwise: correct one of them."
    notes = (_runs_note(meaning),) if hit else ()
    return Answer("own_runs", OWN_RUNS, answer, meaning, notes)


def _runs_note(meaning: str) -> Note:
    return Note(
        "own runs",
        "Occasions were assayed in runs of their own.",
        meaning,
        "Assaying some samples again, side by side, shows how far the runs differ.",
    )


# ── the margin ────────────────────────────────────────────────────────────────────────


def _margin(plan: Plan, n_contrasts: int) -> Answer:
    bounds = margin_bounds(plan)
    if bounds is None:
        return Answer(
            "margin",
            MARGIN,
            "open",
            "Without a margin no change can be called too small to matter, however wide or narrow "
            "its interval. Declare `margin` and `margin_reason` in the plan.",
        )
    what = "ratio" if plan.used_scale == "log" else "difference"
    reason = str(plan.margin_reason).rstrip(".")
    notes = (
        Note(
            "margin",
            "Each 90% interval is held against the margin alone.",
            "That all contrasts lie within it needs no adjustment; that one of several does would.",
            "An interval that reaches across an end of the margin leaves open whether the change "
            "is relevant.",
        ),
    )
    return Answer(
        "margin",
        MARGIN,
        f"a {what} of {margin_text(plan)}",
        f"Reason: {reason}.",
        notes if n_contrasts > 1 else (),
    )
