"""What a reader must know of an analysis as a whole."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from robustrm._format import counted, listing, number, percent
from robustrm.methods.summary import OccasionSummary
from robustrm.plan import Plan
from robustrm.results import Note
from robustrm.table import OccasionTable


def analysis_notes(
    table: OccasionTable, plan: Plan, summary: Sequence[OccasionSummary]
) -> tuple[Note, ...]:
    """Return the notes of reading, then those of the plan and the table."""
    candidates = (
        _exploratory_note(plan),
        _design_note(plan),
        _missing_note(table, plan),
        _limit_note(table, plan),
        _given_up_note(table),
        _spread_note(summary),
    )
    return (*table.notes, *(note for note in candidates if note is not None))


def _exploratory_note(plan: Plan) -> Note | None:
    if plan.purpose != "exploratory":
        return None
    return Note(
        "exploratory",
        "The study is declared exploratory.",
        "Estimates and intervals come first; p values are exploratory.",
        "A change of this size needs confirming in a study planned for it.",
    )


def _design_note(plan: Plan) -> Note | None:
    if plan.design != "single-arm":
        return None
    return Note(
        "single arm",
        "The study had no control group.",
        "A change over time cannot be attributed to any intervention.",
        "Selection of people on a high value, season, handling of samples and the passing of "
        "time can move a marker as well.",
    )


def _missing_note(table: OccasionTable, plan: Plan) -> Note | None:
    incomplete = np.flatnonzero(table.missing.any(axis=1)).tolist()
    if not incomplete:
        return None
    who = listing([table.subjects[i] for i in incomplete])
    count = counted(len(incomplete), "subject")
    return Note(
        "missing occasions",
        f"{count} of {table.n_subjects} without all occasions: {who}.",
        "Left out of the planned comparisons and of the tests that need all occasions."
        if plan.adjust in ("closed", "single-step")
        else "Not in the tests that need all occasions; each comparison uses all who have both.",
        "Ask whether the reason for the gap has to do with the value that is missing.",
    )


def _limit_note(table: OccasionTable, plan: Plan) -> Note | None:
    below, above = int(table.below.sum()), int(table.above.sum())
    if not below + above:
        return None
    shares = [
        f"{table.occasions[j]} {percent(float(share))}"
        for j, share in enumerate(table.censored.sum(axis=0) / (~table.missing).sum(axis=0))
        if share > 0
    ]
    counts = f"{counted(below, 'value')} below and {above} above a limit ({listing(shares)})."
    entered = "Ranked beyond all measured values; where a size is needed, "
    entered += " and ".join(
        words
        for count, words in (
            (below, f"{_SUBSTITUTE_WORDS[plan.substitute]} entered below it"),
            (above, "the limit itself entered above it"),
        )
        if count
    )
    elsewhere = "Means, t and F take that number alone."
    if below and plan.pair == "signed_rank":
        elsewhere = f"The planned comparisons are repeated with other substitutes. {elsewhere}"
    return Note("limits", counts, f"{entered}.", elsewhere)


def _given_up_note(table: OccasionTable) -> Note | None:
    common = table.recensored()
    count = int((common.censored & ~table.censored).sum())
    if not count:
        return None
    return Note(
        "given up",
        f"{counted(count, 'measured value')} beyond the limit that all cells share.",
        "A cell reported only as beyond cannot be compared with them: in every comparison of "
        "occasions they count as beyond the limit, and the substitute enters for them.",
        "Check that the limits are those of each assay and batch.",
    )


_SUBSTITUTE_WORDS = {
    "half": "half the limit",
    "root2": "the limit divided by √2",
    "limit": "the limit",
}


def _spread_note(summary: Sequence[OccasionSummary]) -> Note | None:
    wide = [s for s in summary if s.mean is not None and s.sd is not None and s.sd > s.mean > 0]
    if not wide:
        return None
    shown = listing([f"{s.occasion} ({number(s.sd)} and {number(s.mean)})" for s in wide])
    return Note(
        "sd exceeds mean",
        f"The SD exceeds the mean at {shown}.",
        "Mean (SD) is then not a usable summary.",
        "Report the median with quartiles, or the geometric mean with its factor.",
    )
