"""Specifications: what each branch of a grid makes of the cells, and its statistic.

Everything that a branch does to the data before its statistic (common limit, logarithms,
substitutes, pulling in outliers, centring, ranking) treats the cells of a subject alike whatever
their order. Rearranging the cells first and doing it anew gives the same numbers in the rearranged
places, so it is done once and its outcome is rearranged; nothing of it depends on which occasion a
value belongs to, nor does whether two specifications coincide. What does depend on it (sums by
occasion, cuts and covariances of the occasions) is computed anew in every rearranged table.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from robustrm.errors import ArgumentError, DataError, TooFewError
from robustrm.kernels import gapped_scores, hotelling, rank_model, trimmed
from robustrm.kernels.location import cut
from robustrm.kernels.null.forms import Quadratic
from robustrm.kernels.null.joint import rearranged, rearrangements
from robustrm.kernels.scores import block_scores
from robustrm.methods import mean_permutation, skillings_mack
from robustrm.methods.additive import AdditiveProblem
from robustrm.methods.registry import method as registered
from robustrm.methods.trimming import check_left
from robustrm.results import Note
from robustrm.sensitivity_analysis.branches import Branch
from robustrm.sensitivity_analysis.grid_tables import Sources, variant
from robustrm.table import OccasionTable
from robustrm.ties import MERGE, Floats, merged, power_of_two

Ints = NDArray[np.int64]
Progress = Callable[[int, int], None]

# An undefined statistic lies below every other, so that its p value is 1.
UNDEFINED = -1.0


@dataclass(frozen=True, eq=False)
class Specification:
    """What a branch computes on one arrangement of the cells.

    Parameters
    ----------
    cells : array (m, k)
        What is rearranged: scores, values or ranks; scores are zero where a visit is missing.
    rows : array (m,) of int
        Their rows among those that are rearranged.
    kind : {"sum", "trimmed", "ranks", "hotelling"}
        Statistic: a quadratic form of the sums of scores, the F of trimmed means, the F of overall
        ranks, Hotelling's T².
    projection : array (q, k), optional
        Of a sum: rows of L in |L s|.
    largest : float
        Of a sum: what |L s| cannot exceed.
    trim : float, optional
        Share cut at each end.
    statistic, symbol : float and str
        The statistic of the table as it is, in its usual form.
    n_pulled : int
        Cells pulled in as outliers.
    """

    cells: Floats
    rows: Ints
    kind: Literal["sum", "trimmed", "ranks", "hotelling"]
    statistic: float
    symbol: str
    projection: Floats | None = None
    largest: float = 0.0
    trim: float | None = None
    n_pulled: int = 0

    @property
    def n_subjects(self) -> int:
        """Subjects that enter."""
        return len(self.cells)

    def scaled(self, orders: Ints) -> Floats:
        """Return the statistic of rearranged tables (b, n, k), made monotone in [0, 1]."""
        tables = rearranged(self.cells, orders[:, self.rows])
        if self.kind == "sum":
            assert self.projection is not None
            sums = tables.sum(axis=1) @ self.projection.T
            return np.asarray(np.linalg.norm(sums, axis=-1) / (self.largest or 1.0))
        n = self.n_subjects
        if self.kind == "trimmed":
            assert self.trim is not None
            f = trimmed.trimmed_squares(tables, self.trim).f_ratio(trimmed.left(n, self.trim))
        elif self.kind == "ranks":
            f, _ = rank_model.anova_type(tables)
        else:
            f = hotelling.t_squared(tables) / (n - 1)
        return _into_unit(f)

    def coincides(self, other: Specification) -> bool:
        """Whether another one gives the same p value in every arrangement: cells in proportion."""
        if (self.kind, self.trim) != (other.kind, other.trim):
            return False
        return (
            np.array_equal(self.rows, other.rows)
            and _in_proportion(self.cells, other.cells)
            and _in_proportion(_gram(self), _gram(other))
        )


def _into_unit(f: Floats) -> Floats:
    """Map F in [0, ∞] to F/(1 + F), and what is not defined below it."""
    with np.errstate(invalid="ignore"):
        share = np.where(np.isinf(f), 1.0, f / (1 + f))
    return np.where(np.isnan(share), UNDEFINED, share)


def _gram(one: Specification) -> Floats:
    return np.zeros((1, 1)) if one.projection is None else one.projection.T @ one.projection


def _in_proportion(one: Floats, other: Floats) -> bool:
    """Whether two arrays agree but for a positive factor, to rounding."""
    if one.shape != other.shape:
        return False
    sizes = [float(np.max(np.abs(each), initial=0.0)) for each in (one, other)]
    if not all(sizes):
        return not any(sizes)
    return bool(np.max(np.abs(one / sizes[0] - other / sizes[1])) <= MERGE)


# ── one branch ────────────────────────────────────────────────────────────────────────────────


def specification(source: Sources, branch: Branch) -> Specification:
    """Return what a branch computes.

    Raises
    ------
    TooFewError
        When the test needs more subjects than the branch has.
    DataError, ArgumentError, KeyError
        As for `variant`.
    """
    table, n_pulled = variant(source, branch)
    if branch.test == "trimmed_anova" and cut(table.n_subjects, branch.trim or 0.0):
        found = _of_trimmed(source, table, branch.trim or 0.0)
    elif branch.test == "rank_anova":
        cells = rank_model.overall_midranks(table.order_codes())
        f = float(rank_model.anova_type(cells)[0])
        found = Specification(cells, source.rows(table.subjects), "ranks", f, "F")
    elif branch.test == "hotelling":
        found = _of_hotelling(source, table)
    else:
        found = _of_problem(source, _problem(table, branch))
    return replace(found, n_pulled=n_pulled)


def _problem(table: OccasionTable, branch: Branch) -> AdditiveProblem:
    """Return a sum of scores: the test itself on complete rows, its likeness on others."""
    if table.missing.any():
        return skillings_mack.problem_with_gaps(table, _scores_with_gaps(table, branch))
    if branch.test == "trimmed_anova":  # nobody is cut: the F of the means
        return mean_permutation.problem(table, substitute=branch.substitute)
    entry = registered(branch.test)
    offered = {"substitute": branch.substitute, "winsorize": branch.trim}
    options = {name: value for name, value in offered.items() if name in entry.options}
    found: AdditiveProblem = entry.module().problem(table, **options)
    return found


def _scores_with_gaps(table: OccasionTable, branch: Branch) -> Floats:
    if branch.test == "friedman":
        return block_scores(table.order_codes())
    if branch.test == "normal_scores":
        return gapped_scores.normal_scores(table.order_codes())
    c = gapped_scores.centred(table.values / power_of_two(np.nan_to_num(table.values)))
    c = merged(c, MERGE * float(np.nanmax(np.abs(c))))
    if branch.test == "aligned_ranks":
        return gapped_scores.aligned_scores(c)
    if branch.test == "winsorized_permutation":
        return gapped_scores.winsorized_scores(c, branch.trim or 0.0)
    return gapped_scores.mean_scores(c)


def _of_problem(source: Sources, problem: AdditiveProblem) -> Specification:
    form = problem.form
    assert isinstance(form, Quadratic)
    return Specification(
        cells=problem.scores,
        rows=source.rows(problem.used.subjects),
        kind="sum",
        statistic=problem.observed_statistic,
        symbol=problem.symbol,
        projection=form.projection,
        largest=form.largest(problem.tables),
    )


def _of_trimmed(source: Sources, table: OccasionTable, trim: float) -> Specification:
    n, k = table.values.shape
    check_left(n, trim, title="The trimmed-mean test", whom=f"with all {k} occasions")
    cells = table.values / power_of_two(table.values)
    f = float(trimmed.trimmed_squares(cells, trim).f_ratio(trimmed.left(n, trim)))
    return Specification(cells, source.rows(table.subjects), "trimmed", f, "F", trim=trim)


def _of_hotelling(source: Sources, table: OccasionTable) -> Specification:
    n, k = table.values.shape
    if n < k:
        raise TooFewError(f"Hotelling's T² test needs at least {k} complete subjects, got {n}.")
    cells = table.values / power_of_two(table.values)
    f = float(hotelling.to_f(hotelling.t_squared(cells), n, k))
    return Specification(cells, source.rows(table.subjects), "hotelling", f, "F")


@dataclass(frozen=True, eq=False)
class Specified:
    """A specification with the declared branches that coincide in it, the first one standing."""

    branches: tuple[Branch, ...]
    what: Specification


def specified(
    source: Sources, declared: Sequence[Branch], first: Callable[[Branch], bool] = lambda _: False
) -> tuple[tuple[Specified, ...], tuple[Note, ...]]:
    """Return the different specifications of declared branches, and why branches are left out.

    Parameters
    ----------
    source : Sources
    declared : sequence of Branch
    first : callable
        Which branch stands for those that coincide with it; else the first declared.

    Returns
    -------
    tuple of Specified and tuple of Note
    """
    groups: list[tuple[list[Branch], Specification]] = []
    left_out: dict[str, int] = {}
    for branch in declared:
        try:
            found = specification(source, branch)
        except (TooFewError, DataError, ArgumentError) as error:
            text = error.problems[0].message if isinstance(error, DataError) else str(error)
            left_out[text] = left_out.get(text, 0) + 1
            continue
        except KeyError:  # said by the notes of the source
            continue
        for members, what in groups:
            if what.coincides(found):
                members.append(branch)
                break
        else:
            groups.append(([branch], found))
    notes = tuple(
        Note("branches left out", f"{count} of {len(declared)} declared branches: {text}")
        for text, count in left_out.items()
    )
    ordered = (
        Specified(tuple(sorted(members, key=lambda b: not first(b))), what)
        for members, what in groups
    )
    return tuple(ordered), notes


# ── all of them on the same rearranged tables ─────────────────────────────────────────────────


def statistics(
    source: Sources,
    whats: Sequence[Specification],
    draws: int,
    rng: np.random.Generator,
    *,
    block: int | None = None,
    progress: Progress | None = None,
) -> Floats:
    """Return the scaled statistics of the observed and of the rearranged tables.

    Returns
    -------
    array (draws + 1, specifications)
        The observed table first. A block of rearrangements is in memory at a time.
    """
    found: list[Floats] = []
    done = 0
    for orders in rearrangements(source.observed, draws, rng, block=block):
        found.append(np.stack([what.scaled(orders) for what in whats], axis=1))
        done += len(orders)
        if progress is not None:
            progress(done, draws + 1)
    return np.concatenate(found)
