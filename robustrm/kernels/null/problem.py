"""A null distribution to be computed: tables and form, with what is derived from both, once."""

from __future__ import annotations

import functools
import math
from dataclasses import dataclass

import numpy as np

from robustrm.kernels.null.forms import Form, Linear, Quadratic
from robustrm.kernels.null.symmetry import Classes, exchangeable, fold, is_one_orbit, sort_within
from robustrm.kernels.null.tables import Array, ListedRow, PermutedRow, Table, list_all
from robustrm.kernels.null.two_halves import Half, folded_halves

# The longest table an exact answer lists: 8 occasions.
LONGEST_TABLE = 40_320


@dataclass(frozen=True, eq=False)
class Problem:
    """Score tables and the form of their sum."""

    tables: tuple[Table, ...]
    form: Form

    @functools.cached_property
    def arrangements(self) -> int:
        """Product over the subjects, nothing fixed and nothing merged."""
        return math.prod(table.arrangements for table in self.tables)

    @functools.cached_property
    def is_finite(self) -> bool:
        """Whether every score is a number."""
        return all(math.isfinite(table.norm) for table in self.tables)

    @functools.cached_property
    def exact(self) -> bool:
        """Whether the statistic can be compared in whole numbers."""
        return self.form.is_exact(self.tables)

    @functools.cached_property
    def is_listable(self) -> bool:
        """Whether every table is short enough to be listed."""
        return all(table.size <= LONGEST_TABLE for table in self.tables)

    @functools.cached_property
    def rows(self) -> tuple[ListedRow, ...]:
        """Listed tables: of the single score c . s for a linear form, else of the score vectors."""
        listed = list_all(self.tables)
        if isinstance(self.form, Quadratic):
            return listed
        lines = {id(row): row for row in listed}
        projected = {key: self.form.project(row) for key, row in lines.items()}
        return tuple(projected[id(row)] for row in listed)

    @functools.cached_property
    def classes(self) -> Classes:
        """Occasions that may be relabelled; a linear form leaves one dimension and no choice."""
        if isinstance(self.form, Linear):
            return ((0,),)
        return exchangeable(self.tables, self.form)

    @functools.cached_property
    def sizes(self) -> tuple[int, ...]:
        """Number of distinct vectors (scores, for a linear form) of each subject."""
        source = self.rows if isinstance(self.form, Linear) else self.tables
        return tuple(table.size for table in source)

    @functools.cached_property
    def orbits(self) -> tuple[int, ...]:
        """Number of vectors of each subject that differ by more than a relabelling."""
        if all(len(members) == 1 for members in self.classes):
            return self.sizes
        known: dict[int, int] = {}
        for table in self.tables:
            if id(table) not in known:
                known[id(table)] = self._count_orbits(table)
        return tuple(known[id(table)] for table in self.tables)

    def _count_orbits(self, table: Table) -> int:
        if isinstance(table, PermutedRow) and is_one_orbit(table, self.classes):
            return 1
        return fold(table.listed(), self.classes).size

    @functools.cached_property
    def fixed(self) -> int:
        """The subject whose folding saves most."""
        savings = [size / orbit for size, orbit in zip(self.sizes, self.orbits, strict=True)]
        return int(np.argmax(savings))

    @functools.cached_property
    def halves(self) -> tuple[Half, Half]:
        """Projected half sums of a quadratic form, the fixed subject folded."""
        assert isinstance(self.form, Quadratic)
        rows = list(self.rows)
        rows[self.fixed] = fold(rows[self.fixed], self.classes)
        return folded_halves(rows, self.fixed, self.classes, self.form.projection)

    def aligned_sum(self) -> Array | None:
        """Sum with all rows sorted alike, where T is largest; None if sorting is no arrangement.

        T of a centred sum is a constant plus twice the inner products of all pairs of rows, each
        of which is largest when both rows are sorted alike.
        """
        if not all(is_one_orbit(table, self.classes) for table in self.tables):
            return None
        members = np.array([table.any_vector for table in self.tables])
        return np.asarray(sort_within(members, self.classes).sum(axis=0))
