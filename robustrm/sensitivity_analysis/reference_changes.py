"""Change in one person: every subject's ratios, held against usual variation.

It says whether one person's change is more than usual variation. It says nothing of the reason,
and nothing of the group: the planned contrasts do that.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from robustrm._checks import check_level
from robustrm._format import counted, fixed, level_text, listing, number, percent
from robustrm.errors import ArgumentError
from robustrm.methods.follow_up import declared_pairs
from robustrm.plan import Plan
from robustrm.results import Note, plain
from robustrm.sensitivity_analysis.reference_limits import Limits, Pair, given_limits, own_limits
from robustrm.sensitivity_analysis.variation import Variation
from robustrm.table import OccasionTable

if TYPE_CHECKING:
    import pandas as pd

MORE = "more than usual variation"
WITHIN = "within usual variation"
UNKNOWN = "not known, a value beyond a limit"
MISSING = "no value on one of the occasions"


@dataclass(frozen=True, eq=False)
class ReferenceChanges:
    """Every subject's change in every planned contrast, held against usual variation.

    Parameters
    ----------
    frame : DataFrame
        One row a contrast and subject: ``subject``, ``first``, ``second``, ``value_first``,
        ``value_second``, ``ratio`` (a bound where ``bound`` is ``"at most"`` or ``"at least"``),
        ``low``, ``high``, ``outside`` (None where not known) and ``reading``.
    counts : DataFrame
        One row a contrast: subjects with both values, below, within, above, not known, and how
        many of as many stable people are expected outside.
    low, high : float
        Limits of the ratio.
    level : float
        Share of stable people between them.
    source : str
        Where the coefficients of variation come from, or why the occasions count as stable.
    basis : str
        What the limits rest on, in words.
    variations : tuple of Variation
        What was estimated from the study itself; empty where both CVs were given.
    marker : str
        Name of the marker.
    sentences : tuple of str
        What was found.
    notes : tuple of Note
        What a reader must know.
    """

    frame: pd.DataFrame
    counts: pd.DataFrame
    low: float
    high: float
    level: float
    source: str
    basis: str
    variations: tuple[Variation, ...]
    marker: str
    sentences: tuple[str, ...]
    notes: tuple[Note, ...]

    def to_dict(self) -> dict[str, Any]:
        """Return plain values that any JSON writer takes."""
        return {
            "marker": self.marker,
            "low": plain(self.low),
            "high": plain(self.high),
            "level": self.level,
            "source": self.source,
            "basis": self.basis,
            "variations": [variation.to_dict() for variation in self.variations],
            "counts": plain(self.counts.to_dict("records")),
            "frame": plain(self.frame.to_dict("records")),
            "sentences": list(self.sentences),
            "notes": [note.to_dict() for note in self.notes],
        }

    def __str__(self) -> str:
        return "\n".join([*self.sentences, *(f"Note: {note}" for note in self.notes)])


def reference_changes(
    table: OccasionTable,
    plan: Plan | None = None,
    *,
    cv_within: float | None = None,
    cv_assay: float | None = None,
    stable: Sequence[str] = (),
    source: str | None = None,
    replicates: int | None = None,
    level: float | None = None,
) -> ReferenceChanges:
    """Hold every subject's change in every planned contrast against usual variation.

    Parameters
    ----------
    table : OccasionTable
        The data, on the raw scale.
    plan : Plan, optional
        Names the contrasts; the usual plan compares each later occasion with the first.
    cv_within, cv_assay : float, optional
        Coefficients of variation within a person and of the assay, as fractions. Without
        `cv_assay` that of the assay is found from the replicates of the table.
    stable : sequence of str, optional
        Instead of both: occasions between which nothing happened, from which the variation of
        one person's values, assay included, is found.
    source : str
        Where the CVs come from, or why the occasions count as stable. There is no default for
        any CV: published ones differ by health, marker and assay.
    replicates : int, optional
        Measurements averaged on each occasion, by which the variation of the assay is divided.
        Default: 1 with a `cv_assay` that is given, as it is mostly one between runs; with that of
        the table's own replicates the smallest number of them in any value compared.
    level : float, optional
        Share of stable people between the limits. Default: the level of the plan.

    Returns
    -------
    ReferenceChanges
        A row a subject and contrast, counts, limits, sentences and notes.

    Raises
    ------
    ArgumentError
        When no source is given, the CVs are given twice or not at all, the table is not on the
        raw scale, or the marker is a score.
    DataError
        When a value is zero or negative, which has no ratio.
    TooFewError
        When there are no replicates, or nobody with two values on stable occasions.

    Notes
    -----
    A value beyond a limit bounds the ratio: it is outside only where the bound itself is. The
    values are taken as measured; a limit that applied to somebody else plays no part here.

    With `stable` the limits are exp(±t √2 s) with the degrees of freedom of s: a new pair of a
    stable person falls outside as often as the level says although s is estimated. Replicates
    give the variation of the assay alone, and only within a run; how a person varies cannot be
    had from them.

    Statistics for research. Whether a change matters to somebody is for the responsible
    clinician under the study's protocol.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[9.1, 2.0], [4.0, 3.1], [2.0, 7.5], [6.6, 5.0]],
    ...     occasions=["week 0", "week 6"],
    ...     marker="CRP",
    ... )
    >>> changes = reference_changes(
    ...     table, cv_within=0.42, cv_assay=0.05, source="invented for this example"
    ... )
    >>> print(changes.frame[["subject", "ratio", "reading"]].round(2).to_string(index=False))
    subject  ratio                   reading
         S1   0.22 more than usual variation
         S2   0.78    within usual variation
         S3   3.75 more than usual variation
         S4   0.76    within usual variation
    """
    plan = Plan() if plan is None else plan
    _check_table(table, plan)
    _check_given(cv_within, cv_assay, stable, source)
    level = plan.level if level is None else check_level(level)
    ordered = table.in_natural_order()
    ordered.log()  # a value without a logarithm stops here, with what to do
    pairs = declared_pairs(ordered, plan.contrasts, "contrasts")
    if stable:
        limits = own_limits(ordered, pairs, stable, level)
    else:
        assert cv_within is not None  # _check_given has refused it
        limits = given_limits(ordered, pairs, cv_within, cv_assay, replicates, level)
    frame = _frame(ordered, pairs, limits)
    counts = _counts(frame, pairs, level)
    text = str(source).strip()
    return ReferenceChanges(
        frame=frame,
        counts=counts,
        low=limits.low,
        high=limits.high,
        level=level,
        source=text,
        basis=limits.basis,
        variations=limits.variations,
        marker=table.marker,
        sentences=(_limits_sentence(limits, level, text), *_sentences(counts)),
        notes=(*limits.notes, *_notes(pairs, level)),
    )


def _check_table(table: object, plan: Plan) -> None:
    if not isinstance(table, OccasionTable) or table.scale != "raw":
        seen = table.scale if isinstance(table, OccasionTable) else type(table).__name__
        raise ArgumentError(
            f"`table` must be an OccasionTable on the raw scale, got {seen!r}. Pass the table as "
            "it was read."
        )
    if plan.marker_kind == "score":
        raise ArgumentError(
            "`plan.marker_kind` must be 'concentration' or 'count' for ratios within a person, got "
            "'score': a score has no ratio."
        )


def _check_given(
    cv_within: float | None,
    cv_assay: float | None,
    stable: Sequence[str],
    source: str | None,
) -> None:
    if not (isinstance(source, str) and source.strip()):
        raise ArgumentError(
            f"`source` must say where the CVs come from, or why the occasions count as stable, got "
            f"{source!r}. There is no default CV: name the study of biological variation, or the "
            "protocol."
        )
    given = [
        f"`{name}`"
        for name, cv in (("cv_within", cv_within), ("cv_assay", cv_assay))
        if cv is not None
    ]
    if stable and given:
        raise ArgumentError(
            f"`stable` gives the whole variation of one person's values, got {listing(given)} "
            "beside it. Keep one of them."
        )
    if not stable and cv_within is None:
        raise ArgumentError(
            "`cv_within` must be given with its source, or `stable` occasions declared, got "
            "neither. Replicates give the variation of the assay alone."
        )
    if not stable and cv_within == 0 and cv_assay == 0:
        raise ArgumentError(
            "`cv_within` and `cv_assay` must not both be 0: any change would then be more than "
            "usual variation."
        )


# ── the rows ──────────────────────────────────────────────────────────────────────────


def _frame(table: OccasionTable, pairs: Sequence[Pair], limits: Limits) -> pd.DataFrame:
    import pandas as pd

    rows = [row for pair in pairs for row in _rows(table, pair, limits)]
    frame = pd.DataFrame(rows)
    frame["outside"] = frame["outside"].astype(object)
    return frame


def _rows(table: OccasionTable, pair: tuple[str, str], limits: Limits) -> Iterator[dict[str, Any]]:
    i, j = (table.column("contrasts", occasion) for occasion in pair)
    for row, subject in enumerate(table.subjects):
        first, second = float(table.values[row, i]), float(table.values[row, j])
        bound = _bound(table, row, i, j)
        ratio = math.nan if bound == "none" else second / first
        outside = _outside(ratio, bound, limits)
        yield {
            "subject": subject,
            "first": pair[0],
            "second": pair[1],
            "value_first": first,
            "value_second": second,
            "ratio": ratio,
            "bound": bound,
            "low": limits.low,
            "high": limits.high,
            "outside": outside,
            "reading": _reading(outside, missing=math.isnan(first) or math.isnan(second)),
        }


def _bound(table: OccasionTable, row: int, i: int, j: int) -> str:
    """Return what the two values say of the ratio: it, at most, at least, or none of these."""
    if table.missing[row, i] or table.missing[row, j]:
        return "none"
    at_most = table.below[row, j] or table.above[row, i]
    at_least = table.above[row, j] or table.below[row, i]
    if at_most and at_least:
        return "none"
    return "at most" if at_most else "at least" if at_least else "measured"


def _outside(ratio: float, bound: str, limits: Limits) -> bool | None:
    """Say whether a ratio lies outside; a bound says it only where it is outside itself."""
    if bound == "none":
        return None
    if bound == "at most":
        return True if ratio < limits.low else None
    if bound == "at least":
        return True if ratio > limits.high else None
    return not limits.low <= ratio <= limits.high


def _reading(outside: bool | None, *, missing: bool) -> str:
    if outside is None:
        return MISSING if missing else UNKNOWN
    return MORE if outside else WITHIN


def _counts(frame: pd.DataFrame, pairs: Sequence[Pair], level: float) -> pd.DataFrame:
    import pandas as pd

    rows = []
    for first, second in pairs:
        part = frame[(frame["first"] == first) & (frame["second"] == second)]
        read = part[part["reading"] != MISSING]
        outside = read[read["reading"] == MORE]
        known = int(read["outside"].notna().sum())
        rows.append(
            {
                "first": first,
                "second": second,
                "n": len(read),
                "n_below": int((outside["ratio"] < outside["low"]).sum()),
                "n_within": int((read["reading"] == WITHIN).sum()),
                "n_above": int((outside["ratio"] > outside["high"]).sum()),
                "n_unknown": len(read) - known,
                "n_expected_outside": len(read) * (1 - level),
            }
        )
    return pd.DataFrame(rows)


# ── what is said ──────────────────────────────────────────────────────────────────────


def _limits_sentence(limits: Limits, level: float, source: str) -> str:
    return (
        f"Two values of one stable person usually ({level_text(level)}) have a ratio between "
        f"{number(limits.low)} ({_change(limits.low)}) and {number(limits.high)} "
        f"({_change(limits.high)}), from {limits.basis}. Source, as given: {source.rstrip('.')}."
    )


def _change(ratio: float) -> str:
    sign = "+" if ratio >= 1 else "−"
    return "∞" if math.isinf(ratio) else f"{sign}{percent(abs(ratio - 1))}"


def _sentences(counts: pd.DataFrame) -> Iterator[str]:
    for row in counts.to_dict("records"):
        label = f"{row['second']} vs {row['first']}"
        if not row["n"]:
            yield f"{label}: nobody has both values."
            continue
        outside = row["n_below"] + row["n_above"]
        unknown = f", {row['n_unknown']} not known" if row["n_unknown"] else ""
        yield (
            f"{label}: of {counted(row['n'], 'subject')} with both values, {outside} changed by "
            f"more than usual variation ({row['n_below']} below the lower limit, "
            f"{row['n_above']} above the upper one), {row['n_within']} lie within it{unknown}. Of "
            f"as many stable people about {fixed(row['n_expected_outside'], 1)} would lie outside."
        )


def _notes(pairs: Sequence[Pair], level: float) -> Iterator[Note]:
    yield Note(
        "one person",
        "The limits speak of one person's two values, one person at a time.",
        "More than usual variation names no reason for the change, and a ratio within the limits "
        "may still be a change. How many lie outside is no measure of the group: the planned "
        "contrasts are.",
        "Statistics for research, not a diagnosis: a value that may need clinical follow-up goes "
        "to the responsible clinician under the study's protocol.",
    )
    yield Note(
        "usual variation",
        "The limits suppose lognormal values of people in a steady state who all vary alike.",
        "A person who varies more than the CV says falls outside more often.",
    )
    m = len(pairs)
    if m > 1:
        chance = min(1.0, m * (1 - level))
        yield Note(
            "more than two results",
            f"Each person has {m} comparisons, each held against limits of its own level.",
            f"By usual variation alone up to {percent(chance)} of stable people lie outside in at "
            "least one of them: false positives add up.",
            f"Limits at level {number(1 - (1 - level) / m, 4)} would hold all {m} together.",
        )
