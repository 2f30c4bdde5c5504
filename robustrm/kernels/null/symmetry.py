"""Which occasions may be relabelled, and what that saves.

Sorting the sums, or fixing one subject, is right only under relabellings that leave **every**
subject's table and the form as they are. These are found from the tables themselves: two occasions
belong to one class if exchanging them changes nothing. Complete permuted rows with the centring
form have one class; blocks and missing cells split it; mirror images usually leave none.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from robustrm.kernels.null.forms import Form
from robustrm.kernels.null.tables import Array, ListedRow, PermutedRow, Table, merge_rows, reduced

Classes = tuple[tuple[int, ...], ...]


def exchangeable(tables: Sequence[Table], form: Form) -> Classes:
    """Partition of the occasions into classes that can be relabelled freely."""
    allowed = form.swaps()
    for table in {id(table): table for table in tables}.values():
        allowed &= table.swaps()
        if not (allowed & ~np.eye(len(allowed), dtype=bool)).any():
            break
    # Exchanges compose, so "can be exchanged" is an equivalence and its first member names a class.
    names = allowed.argmax(axis=1)
    return tuple(tuple(np.flatnonzero(names == name).tolist()) for name in np.unique(names))


def sort_within(vectors: Array, classes: Classes) -> Array:
    """Sort each vector, (m, d), ascending within every class."""
    ordered = vectors.copy()
    for members in classes:
        if len(members) > 1:
            ordered[:, members] = np.sort(vectors[:, members], axis=1)
    return ordered


def fold(table: ListedRow, classes: Classes) -> ListedRow:
    """One vector for each orbit under relabelling within the classes, weighted by its orbit."""
    ordered = sort_within(table.vectors, classes)
    return reduced(*merge_rows(ordered, table.weights), table.arrangements)


def is_one_orbit(table: Table, classes: Classes) -> bool:
    """Whether relabelling within the classes turns any arrangement of the row into any other."""
    if isinstance(table, PermutedRow):
        return all(any(set(group) <= set(members) for members in classes) for group in table.groups)
    return fold(table, classes).size == 1
