"""Missing visits: who is missing, and whether the conclusion depends on how that is handled."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from robustrm._format import counted
from robustrm.analysis import Progress
from robustrm.plan import Plan
from robustrm.results import Note, plain
from robustrm.sensitivity_analysis.frames import records
from robustrm.sensitivity_analysis.missing_bounds import bounds_sentences, rank_bounds
from robustrm.sensitivity_analysis.missing_patterns import (
    EARLIER_COLUMNS,
    PATTERN_COLUMNS,
    earlier_rows,
    earlier_sentences,
    pattern_rows,
    pattern_sentences,
)
from robustrm.sensitivity_analysis.missing_rows import (
    AVAILABLE,
    COMPLETE,
    ROW_COLUMNS,
    contrast_sentences,
    contrasts,
    is_planned,
    likelihood_rows,
    overall_row,
    overall_rows,
    overall_sentences,
)
from robustrm.sensitivity_analysis.missing_tipping import TIPPING_COLUMNS, tipping_rows
from robustrm.sensitivity_analysis.missing_words import tipping_sentences
from robustrm.table import OccasionTable

if TYPE_CHECKING:
    import pandas as pd

ASSUMPTIONS = (
    "Complete cases, available pairs and the Skillings-Mack test need gaps that have nothing to do "
    "with the values. The likelihood needs gaps that go with measured values at most, not with "
    "the missing ones (missing at random), and normal logs; it estimates a ratio of geometric "
    "means. The data cannot show which of these holds; the reasons for the gaps can speak for or "
    "against it."
)
PAIRS_ALONE = Note(
    "pairs alone",
    "The plan tests the contrasts as a family at once, on complete rows.",
    "Here each pair is tested alone, so that available pairs can stand beside complete cases; the "
    "rows are not those of the plan.",
)


@dataclass(frozen=True, eq=False)
class Missing:
    """What missing visits may do to the conclusion.

    Parameters
    ----------
    frame : DataFrame
        One row a result: planned contrasts of complete cases, of all available pairs and by
        likelihood; overall tests; and lowest and highest p (``p_low``, ``p_high``) with the
        missing values at either end of the ranks. Unrounded.
    patterns : DataFrame
        One row a pattern of missing occasions, with its subjects and reasons.
    earlier : DataFrame
        What those who left and those who stayed had shown until then, in raw units.
    tipping : DataFrame
        Two rows a contrast: how far the missing values would have to lie, to either side, for
        it to read otherwise.
    sentences : tuple of str
        What was found, in words.
    notes : tuple of Note
        What a reader must know.
    """

    frame: pd.DataFrame
    patterns: pd.DataFrame
    earlier: pd.DataFrame
    tipping: pd.DataFrame
    sentences: tuple[str, ...]
    notes: tuple[Note, ...] = ()

    def __str__(self) -> str:
        return "\n".join([*self.sentences, *(f"Note: {note}" for note in self.notes)])

    def to_dict(self) -> dict[str, Any]:
        """Return plain values, the frames as lists of rows."""
        frames = ("frame", "patterns", "earlier", "tipping")
        return {
            **{name: records(getattr(self, name)) for name in frames},
            "sentences": list(self.sentences),
            "notes": plain(self.notes),
        }


def missing_sensitivity(
    table: OccasionTable, plan: Plan, *, root: int, progress: Progress | None = None
) -> Missing:
    """Show what is missing, and how the planned contrasts read under other handling of it.

    Parameters
    ----------
    table : OccasionTable
        The data, on the raw scale.
    plan : Plan
        Contrasts, tests, scale and level.
    root : int
        Root of the random streams; only tests beyond the budget of exact counting draw.
    progress : callable, optional
        Called with (done, total) after each part.

    Returns
    -------
    Missing
        Without a missing cell its frames are empty and it says so in one sentence.

    Raises
    ------
    DataError
        When the scale is logarithmic and a value is zero or negative.

    Notes
    -----
    **Rows.** Complete cases, available pairs and the test of Skillings and Mack (1981) ask that
    gaps have nothing to do with the values. The likelihood asks that they go with measured
    values at most (missing at random) and supposes a normal model. No row is picked.

    **Tipping points.** A missing member of a pair is filled so that the subject's change is the
    Hodges-Lehmann estimate of those who have both, times a factor on the log scale or plus a
    shift on the raw one, the same for all; the plan's limits and substitute hold for filled
    values too. Factors go from 1/100 to 100 in ten steps a decade, shifts up to ten times the
    range of the observed differences; the first change of direction or of the side of the
    level on which the adjusted P lies is closed in by halving. A change that comes and goes
    between two steps is not seen. The other contrasts of the family keep their P. Subjects
    with neither value are not filled. Nothing is drawn at random, so P after filling carries
    no uncertainty of the filled values and is no result. Nothing is carried forward.

    **Worst and best ranks.** Every missing difference of a pair is a rise or a fall of the
    largest size; for Friedman's test every missing value ranks below or above all of its
    subject, ties shared. The lowest and the highest P over all these placements are found
    exactly. Values between the ends may give a signed-rank or Friedman P outside of the range.
    Where too many placements differ, the missing values of an occasion go together, and the
    row says so. P is not adjusted.

    References
    ----------
    .. [1] National Research Council (2010). The Prevention and Treatment of Missing Data in
       Clinical Trials. National Academies Press, chapter 5.
    .. [2] Skillings, J. H. and Mack, G. A. (1981). On the use of a Friedman-type statistic in
       balanced and unbalanced block designs. Technometrics 23, 171-177.
    .. [3] Rubin, D. B. (1976). Inference and missing data. Biometrika 63, 581-592.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[91, 72, 60], [40, 31, 25], [120, 125, 80], [66, 50, 59], [33, 21, 20], [75, 60, 44]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ... )
    >>> print(missing_sensitivity(table, Plan(), root=1))
    No value is missing: all 6 subjects have all 3 occasions.
    """
    if not table.missing.any():
        n, k = table.values.shape
        whole = f"No value is missing: all {counted(n, 'subject')} have all {k} occasions."
        return _made([], [], [], [], (whole,), ())
    ordered = table.in_natural_order()
    scaled = ordered.on_scale(plan.used_scale)
    steps = _Steps(progress, total=5)

    patterns, earlier = pattern_rows(ordered), earlier_rows(ordered, plan.substitute)
    steps.done()
    whole_rows = contrasts(scaled, plan, root, COMPLETE)
    pair_rows = contrasts(scaled, plan, root, AVAILABLE)
    tests, test_notes = overall_rows(scaled, plan, root)
    steps.done()
    model_rows, model_notes = likelihood_rows(ordered, plan)
    steps.done()
    rows = [*whole_rows, *pair_rows, *model_rows]
    planned = whole_rows if plan.missing == "complete" else pair_rows
    tipping, tipping_notes = tipping_rows(ordered, plan, root, planned)
    steps.done()
    bounds = rank_bounds(scaled, plan, root)
    steps.done()
    sentences = (
        *pattern_sentences(ordered),
        ASSUMPTIONS,
        *contrast_sentences(scaled, plan, root, rows),
        *overall_sentences(tests, plan.alpha),
        *earlier_sentences(ordered, earlier),
        *tipping_sentences(tipping, plan, ordered.unit),
        *bounds_sentences(bounds, plan.alpha),
    )
    framed = [r.row() for r in rows] + [overall_row(r) for r in tests]
    framed += [b.row(plan.used_scale) for b in bounds]
    alone = () if is_planned(plan) else (PAIRS_ALONE,)
    notes = (*alone, *test_notes, *model_notes, *tipping_notes)
    return _made(framed, patterns, earlier, tipping, sentences, notes)


Rows = Sequence[dict[str, Any]]


def _made(
    framed: Rows,
    patterns: Rows,
    earlier: Rows,
    tipping: Rows,
    sentences: tuple[str, ...],
    notes: tuple[Note, ...],
) -> Missing:
    import pandas as pd

    return Missing(
        frame=pd.DataFrame(framed, columns=list(ROW_COLUMNS)),
        patterns=pd.DataFrame(patterns, columns=list(PATTERN_COLUMNS)),
        earlier=pd.DataFrame(earlier, columns=list(EARLIER_COLUMNS)),
        tipping=pd.DataFrame(tipping, columns=list(TIPPING_COLUMNS)),
        sentences=sentences,
        notes=notes,
    )


class _Steps:
    """Counts finished parts for a progress callback."""

    def __init__(self, progress: Progress | None, total: int) -> None:
        self.progress, self.total, self.count = progress, total, 0

    def done(self) -> None:
        self.count += 1
        if self.progress is not None:
            self.progress(self.count, self.total)
