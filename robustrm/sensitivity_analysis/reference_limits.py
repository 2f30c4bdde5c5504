"""Limits of usual variation: from coefficients that are given, or from the study itself."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from scipy import special

from robustrm._format import counted, listing, percent
from robustrm.errors import ArgumentError
from robustrm.results import Note
from robustrm.sensitivity_analysis.reference_change import reference_change
from robustrm.sensitivity_analysis.variation import Variation, assay_variation, stable_variation
from robustrm.table import OccasionTable

Pair = tuple[str, str]


@dataclass(frozen=True, slots=True)
class Limits:
    """Limits of the ratio, what they rest on, and what was estimated for them."""

    low: float
    high: float
    basis: str
    variations: tuple[Variation, ...] = ()
    notes: tuple[Note, ...] = ()


def given_limits(
    table: OccasionTable,
    pairs: Sequence[Pair],
    cv_within: float,
    cv_assay: float | None,
    replicates: int | None,
    level: float,
) -> Limits:
    """Return the limits from a given CV within a person, and a given or own one of the assay."""
    own: tuple[Variation, ...] = ()
    if cv_assay is None:
        own = (assay_variation(table, level=level),)
    cv = cv_assay if cv_assay is not None else own[0].cv
    fewest = _fewest(table, pairs)
    m = replicates if replicates is not None else fewest if own else 1
    low, high = reference_change(cv_within, cv, replicates=m, level=level)
    assay = "that of the assay held in it" if cv_assay == 0 else f"of the assay of {percent(cv, 1)}"
    basis = f"a CV within a person of {percent(cv_within, 1)} and {assay}"
    if m > 1:
        basis += f", the mean of {m} measurements"
    notes = [_assay_note(own[0])] if own else []
    if not own and replicates is None and fewest > 1:
        notes.append(_single_note(fewest))
    return Limits(low, high, basis, own, tuple(notes))


def _single_note(fewest: int) -> Note:
    return Note(
        "single measurements",
        f"Values are means of {fewest} or more replicates; the limits are those of single "
        "measurements.",
        "Averaging narrows variation within a run alone, and a CV of the assay is mostly one "
        "between runs.",
        f"With a CV within a run give `replicates={fewest}`.",
    )


def _fewest(table: OccasionTable, pairs: Sequence[Pair]) -> int:
    """Return the smallest number of replicates behind any value that is compared."""
    sizes = {(r.subject, r.occasion): len(r.values) for r in table.replicates}
    used = {occasion for pair in pairs for occasion in pair}
    found = [
        sizes.get((subject, occasion), 1)
        for i, subject in enumerate(table.subjects)
        for j, occasion in enumerate(table.occasions)
        if occasion in used and not table.missing[i, j] and not table.censored[i, j]
    ]
    return min(found, default=1)


def _assay_note(own: Variation) -> Note:
    return Note(
        "own assay cv",
        f"{own}.",
        "Replicates measured side by side differ less than samples of two runs, so the limits are "
        "too narrow where occasions were assayed in different runs.",
        "Use the laboratory's CV between runs where it is known.",
    )


def own_limits(
    table: OccasionTable, pairs: Sequence[Pair], stable: Sequence[str], level: float
) -> Limits:
    """Return the limits exp(±t √2 s) from the variation between stable occasions."""
    own = stable_variation(table, stable, level=level)
    if own.low is None:
        raise ArgumentError(
            f"`stable` must name occasions at which values vary, got {listing(list(stable))} with "
            "equal values in every person. Give `cv_within` and `cv_assay` with their source."
        )
    # (log ratio of a new pair)/(√2 s) has Student's t distribution when logs are normal
    t = -float(special.stdtrit(own.df, (1 - level) / 2))
    reach = t * math.sqrt(2 * own.variance)
    both = [f"{b} vs {a}" for a, b in pairs if a in stable and b in stable]
    notes = [
        Note(
            "own variation",
            f"{own}. The user declares these occasions stable.",
            "The limits take it as it stands, assay included: what of it is the person's own is "
            "not told apart. With few degrees of freedom they are wide and uncertain.",
            "A shift between the occasions, or between runs, would widen them.",
        )
    ]
    if own.n_left_out:
        notes.append(
            Note(
                "own variation, limits",
                f"{counted(own.n_left_out, 'value')} beyond a limit left out of the variation.",
                "What varies around a limit is then missing from it: the limits may be too narrow.",
            )
        )
    if both:
        notes.append(
            Note(
                "own variation, same values",
                f"Both occasions of {listing(both)} count as stable.",
                "The limits come from the very values that are held against them.",
            )
        )
    basis = f"the variation between {listing(list(stable))} (CV {percent(own.cv, 1)})"
    return Limits(_exp(-reach), _exp(reach), basis, (own,), tuple(notes))


def _exp(value: float) -> float:
    return math.exp(value) if value < 709 else math.inf
