"""The tables that the branches of a grid start from, before their tests."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import cast

import numpy as np
from numpy.typing import NDArray

from robustrm.errors import ArgumentError, TooFewError
from robustrm.kernels import gapped_scores
from robustrm.kernels.location import madn
from robustrm.methods import skillings_mack
from robustrm.results import Note, Scale
from robustrm.sensitivity_analysis.branches import Branch
from robustrm.table import OccasionTable
from robustrm.ties import MERGE, Bools

Ints = NDArray[np.int64]

BEYOND = 2.24
"""Deviations from the median, in MADN, beyond which a value counts as an outlier: √χ²(.975, 1)."""


@dataclass(frozen=True, eq=False)
class Sources:
    """The comparable tables of a grid, by replicate rule and missing rule, and why some lack.

    Parameters
    ----------
    tables : mapping of (replicate rule, missing rule) to OccasionTable
        At their common limits, on the raw scale.
    order : tuple of str
        Subjects that are rearranged, in their order.
    observed : array (n, k) of bool
        Which of their cells hold a value.
    notes : tuple of Note
        Why a missing rule has no table.
    """

    tables: Mapping[tuple[str | None, str], OccasionTable]
    order: tuple[str, ...]
    observed: Bools
    notes: tuple[Note, ...]

    def rows(self, subjects: Sequence[str]) -> Ints:
        """Return the places of subjects among those that are rearranged."""
        places = {subject: place for place, subject in enumerate(self.order)}
        return np.array([places[subject] for subject in subjects], dtype=np.int64)


def sources(tables: Mapping[str | None, OccasionTable]) -> Sources:
    """Return the tables that the branches start from.

    Raises
    ------
    ArgumentError
        When the tables differ in subjects, occasions or missing cells.
    TooFewError
        When neither complete nor connected incomplete rows are there.
    """
    first, *others = tables.values()
    for other in others:
        _check_alike(first, other)
    found: dict[tuple[str | None, str], OccasionTable] = {}
    notes: list[Note] = []
    for rule, table in tables.items():
        complete = table.comparable()
        if complete.n_subjects > 1:
            found[rule, "complete"] = complete
        try:
            found[rule, "available"] = skillings_mack.problem(table).used
        except TooFewError as error:
            notes.append(Note("no incomplete rows", str(error), "Complete subjects are used."))
    if not found:
        raise TooFewError(
            f"A specification grid needs at least 2 subjects with all {first.n_occasions} "
            f"occasions, got {first.complete().n_subjects}."
        )
    rule = next(iter(tables))
    if (rule, "complete") not in found:
        fact = f"{first.complete().n_subjects} of {first.n_subjects} subjects have all occasions."
        notes.append(Note("too few complete", fact, "Branches of complete subjects are left out."))
    frame = found.get((rule, "available")) or found[rule, "complete"]
    return Sources(found, frame.subjects, ~frame.missing, tuple(dict.fromkeys(notes)))


def _check_alike(one: OccasionTable, other: OccasionTable) -> None:
    place = {subject: i for i, subject in enumerate(other.subjects)}
    alike = one.occasions == other.occasions and set(one.subjects) == set(other.subjects)
    if alike:
        rows = [place[subject] for subject in one.subjects]
        alike = bool(np.array_equal(one.missing, other.missing[rows]))
    if not alike:
        raise ArgumentError(
            "`table` must hold the same subjects, occasions and missing cells under every "
            "replicate rule, got tables that differ. Read the same file with each rule."
        )


def variant(source: Sources, branch: Branch) -> tuple[OccasionTable, int]:
    """Return the table of a branch before its test, and how many cells were pulled in.

    Raises
    ------
    DataError
        When a logarithm does not exist.
    ArgumentError
        When the substitute has no meaning for these limits.
    KeyError
        When there are no such rows.
    """
    table = source.tables[branch.replicates, branch.missing]
    entered = table.on_scale(cast(Scale, branch.scale)).substitute(branch.substitute)
    return pulled_in(entered) if branch.outliers == "winsorized" else (entered, 0)


def pulled_in(table: OccasionTable) -> tuple[OccasionTable, int]:
    """Pull in the values whose subject-centred value is an outlier among all of them.

    With c the values less their subject's mean, M and MADN the median and the scaled median
    absolute deviation of all c together, c is pulled in to M ± 2.24 MADN (the MAD-median rule of
    Wilcox, *Introduction to Robust Estimation and Hypothesis Testing*, section 3.4.2). Neither
    depends on how a subject's values are arranged. Where MADN is zero the rule is not defined, and
    nothing is pulled in.
    """
    values = table.values
    c = gapped_scores.centred(values)
    pooled = c[~np.isnan(c)]
    middle, reach = float(np.median(pooled)), BEYOND * float(madn(pooled))
    noise = MERGE * float(np.max(np.abs(pooled), initial=0.0))
    if reach <= noise:
        return table, 0
    outside = np.abs(c - middle) > reach + noise
    if not outside.any():
        return table, 0
    moved = np.where(outside, values - c + np.clip(c, middle - reach, middle + reach), values)
    nowhere, none = np.full(values.shape, np.nan), np.zeros(values.shape, dtype=bool)
    plain = replace(
        table,
        values=moved,
        below=none,
        above=none,
        lower_limit=nowhere,
        upper_limit=nowhere,
        units=None,
        step=None,
        entered=None,
    )
    return plain, int(outside.sum())
