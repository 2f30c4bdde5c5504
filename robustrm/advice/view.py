"""What advice may see: every subject's values sorted, and who has which occasion.

Rearranging a subject's values over the occasions that the subject has changes nothing here. A
choice made from this view is the same for every rearrangement, so an exact permutation test that
was chosen by it is, on each set of rearrangements, one fixed test: it keeps its level.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from robustrm.errors import ArgumentError
from robustrm.results import Scale
from robustrm.table import OccasionTable
from robustrm.ties import Bools, Floats


@dataclass(frozen=True, slots=True, eq=False)
class BlindView:
    """A table without the knowledge which value belongs to which occasion.

    Parameters
    ----------
    values : array (n, k)
        Each subject's observed values, sorted, then NaN; a value beyond a limit is the limit
        that all cells share. Subjects are sorted too, so that their order tells nothing.
    below, above : array (n, k) of bool
        Which of the sorted values lie beyond a limit.
    missing : array (n, k) of bool
        Which occasions each subject lacks, in the order of the occasions.
    """

    values: Floats
    below: Bools
    above: Bools
    missing: Bools

    @property
    def observed(self) -> Bools:
        """Which places of the sorted rows hold a value."""
        return ~np.isnan(self.values)

    @property
    def censored(self) -> Bools:
        """Which of the sorted values lie beyond a limit."""
        return self.below | self.above


def check_raw(table: object) -> None:
    """Refuse what is not a table on the raw scale."""
    if not isinstance(table, OccasionTable) or table.scale != "raw":
        seen = table.scale if isinstance(table, OccasionTable) else type(table).__name__
        raise ArgumentError(
            f"`table` must be an OccasionTable on the raw scale, got {seen!r}. Pass the table as "
            "it was read."
        )


def blind_view(table: OccasionTable, *, scale: Scale = "raw") -> BlindView:
    """Return what advice may see of a table on the raw scale, its values on `scale`.

    Limits are first made common to all cells, as every comparison of occasions does. Which cells
    are missing is kept in place: the rearrangements leave the gaps where they are.
    """
    common = table.recensored().on_scale(scale)
    # below a limit sorts before the same number measured, above it after
    side = np.where(common.below, -1, np.where(common.above, 1, 0))
    order = np.lexsort((side, common.values), axis=-1)
    values = np.take_along_axis(common.values, order, axis=1)
    below = np.take_along_axis(common.below, order, axis=1)
    above = np.take_along_axis(common.above, order, axis=1)
    missing = common.missing
    keys = np.concatenate([missing, np.nan_to_num(values), below, above], axis=1)
    rows = np.lexsort(keys.T[::-1])
    return BlindView(values[rows], below[rows], above[rows], missing[rows])
