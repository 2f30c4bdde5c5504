"""Skillings-Mack test: ranks within subjects when some visits are missing."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from scipy import special

from robustrm._format import listing
from robustrm.errors import TooFewError
from robustrm.kernels.null.forms import Quadratic, quadratic
from robustrm.kernels.null.tables import permutation_tables
from robustrm.kernels.scores import block_scores
from robustrm.methods.additive import AdditiveProblem, NullOptions, Rng, omnibus_result
from robustrm.results import Note, TestResult
from robustrm.table import OccasionTable
from robustrm.ties import Bools, Floats


def skillings_mack(
    table: OccasionTable,
    *,
    null: str = "auto",
    draws: int | Sequence[int] | None = None,
    thresholds: Sequence[float] = (0.05,),
    rng: Rng = None,
) -> TestResult:
    """Test whether the occasions rank alike, using subjects with missing visits too.

    Parameters
    ----------
    table : OccasionTable
        Subjects with at least two occasions are used. Only the order of a subject's own
        values counts, so the scale plays no part.
    null : {"auto", "exact", "monte carlo", "importance sampling"}, default "auto"
        Exact within the stated work budget, Monte Carlo beyond it.
        Importance sampling is for far tails.
    draws : int or sequence of int, optional
        Monte Carlo draws, or their stages.
    thresholds : sequence of float, default (0.05,)
        Levels that the p value is compared with.
    rng : Generator, SeedSequence, int or None
        Randomness of Monte Carlo draws.

    Returns
    -------
    TestResult
        Statistic T with its permutation p value. ``details`` holds ``p_chi2``,
        ``adjusted_sums`` (in the order of the occasions), ``statistic_1981`` and ``p_1981``
        (with the covariance of the 1981 paper), ``n_complete`` and ``smallest_p``.

    Raises
    ------
    TooFewError
        When no subject has two occasions, or when the occasions fall into groups that no
        subject connects.
    BudgetError
        With ``null="exact"`` beyond the work budget.

    See Also
    --------
    friedman : The same without missing visits.

    Notes
    -----
    A subject with k_i values scores s_ij = √(12/(k_i+1)) (r_ij − (k_i+1)/2) on the occasions
    it has; with A the sums of the scores, T = A' V⁻ A. V is the covariance of A given each
    subject's ties and pattern, Σ_i [Σ_j s_ij²/(k_i−1)] (I − J/k_i), so T is Friedman's χ²
    with its tie correction when nobody lacks a visit. The covariance of the 1981 paper does
    not correct for ties and is given beside.

    The null permutes each subject's values over the occasions it has: it asks that visits
    are missing for reasons unrelated to the values, and that the occasions are exchangeable.
    After drop-out on a high value neither this test nor pairwise ones hold their level.

    References
    ----------
    .. [1] Skillings, J. H. and Mack, G. A. (1981). On the use of a Friedman-type statistic in
       balanced and unbalanced block designs. Technometrics 23, 171-177.

    Examples
    --------
    Nine assemblers and four methods (Skillings & Mack 1981, values from memory): T = 15.493.

    >>> nan = float("nan")
    >>> minutes = [
    ...     [3.2, 4.1, 3.8, 4.2],
    ...     [3.1, 3.9, 3.4, 4.0],
    ...     [4.3, 3.5, 4.6, 4.8],
    ...     [3.5, 3.6, 3.9, 4.0],
    ...     [3.6, 4.2, 3.7, 3.9],
    ...     [4.5, 4.7, 3.7, nan],
    ...     [nan, 4.2, 3.4, nan],
    ...     [4.3, 4.6, 4.4, 4.9],
    ...     [3.5, nan, 3.7, 3.9],
    ... ]
    >>> table = OccasionTable.from_array(minutes, occasions=["A", "B", "C", "D"])
    >>> result = skillings_mack(table, draws=9999, rng=1)
    >>> round(result.statistic, 3), round(result.details["p_chi2"], 4)
    (15.493, 0.0014)
    """
    found = problem(table)
    observed = ~found.used.missing
    rank = len(found.form.projection) if isinstance(found.form, Quadratic) else 0
    return omnibus_result(
        found,
        NullOptions(null, draws, thresholds, rng),
        method="skillings_mack",
        df=(rank,),
        hypothesis=(
            "For each subject every order of the values over the occasions it has is equally "
            "likely, and visits are missing for reasons unrelated to the values."
        ),
        estimand="consistency of the rank order of the occasions within subjects",
        notes=_left_note(table, found.used),
        details={
            "p_chi2": float(special.chdtrc(rank, found.observed_statistic)),
            "adjusted_sums": tuple(found.observed.tolist()),
            **_paper_of_1981(found.scores, observed),
            "n_complete": int(observed.all(axis=1).sum()),
        },
    )


def problem(table: OccasionTable) -> AdditiveProblem:
    """Return the test on a table: each subject's scores permuted over the occasions it has."""
    used = _used(table)
    return problem_with_gaps(used, block_scores(used.order_codes()))


def problem_with_gaps(used: OccasionTable, scores: Floats) -> AdditiveProblem:
    """Let scores (n, k), zero where missing, be permuted over each subject's own occasions.

    The statistic is A' V⁻ A with V the covariance of the sums A over these permutations, whatever
    the scores are.
    """
    observed = ~used.missing
    form = quadratic(_root_of_inverse(conditional_covariance(scores, observed)))
    tables = permutation_tables(scores, observed=observed)
    # where every subject is tied throughout there is no covariance to divide by
    factor = 1.0 if len(form.projection) else np.nan
    return AdditiveProblem(used, scores, tables, form, lambda t: np.asarray(factor * t), "T")


def conditional_covariance(scores: Floats, observed: Bools) -> Floats:
    """Return the covariance (k, k) of the score sums given every subject's ties and pattern."""
    sizes = observed.sum(axis=1)
    spread = np.sum(scores**2, axis=1) / (sizes - 1)
    return _summed_blocks(spread, observed)


def _summed_blocks(weights: Floats, observed: Bools) -> Floats:
    """Return Σ_i w_i (I_Oi − J_Oi / k_i) over the observed cells O_i of each subject."""
    seen = observed.astype(np.float64)
    sizes = observed.sum(axis=1)
    return np.asarray(np.diag(weights @ seen) - (seen * (weights / sizes)[:, None]).T @ seen)


def _root_of_inverse(covariance: Floats) -> Floats:
    """Return L (rank, k) with L'L the generalized inverse of a covariance: T = |L A|²."""
    values, vectors = np.linalg.eigh(covariance)
    kept = values > 1e-10 * max(values[-1], 1.0)
    return np.asarray(vectors[:, kept].T / np.sqrt(values[kept])[:, None])


def _paper_of_1981(scores: Floats, observed: Bools) -> dict[str, Any]:
    root = _root_of_inverse(_summed_blocks(observed.sum(axis=1).astype(np.float64), observed))
    statistic = float(np.sum((root @ scores.sum(axis=0)) ** 2))
    return {"statistic_1981": statistic, "p_1981": float(special.chdtrc(len(root), statistic))}


def _used(table: OccasionTable) -> OccasionTable:
    """Return the subjects with two occasions or more, on occasions that they connect."""
    present = (~table.missing).sum(axis=1)
    kept = [s for s, count in zip(table.subjects, present, strict=True) if count > 1]
    if not kept:
        raise TooFewError("The Skillings-Mack test needs a subject with at least 2 occasions.")
    used = table.select(subjects=kept).comparable(complete=False)
    groups = _connected(~used.missing)
    if len(groups) > 1:
        named = "; ".join(listing([used.occasions[j] for j in group]) for group in groups)
        raise TooFewError(
            "The Skillings-Mack test needs occasions that subjects connect, got groups that no "
            f"subject links: {named}. Leave out the occasions of the smaller group."
        )
    return used


def _left_note(table: OccasionTable, used: OccasionTable) -> tuple[Note, ...]:
    left = [s for s in table.ids if s not in set(used.subjects)]
    if not left:
        return ()
    fact = f"{listing(left)} left: fewer than two occasions, so no order within the subject."
    return (Note("single occasion", fact),)


def _connected(observed: Bools) -> list[list[int]]:
    """Return the groups of occasions that are linked through subjects who have both."""
    k = observed.shape[1]
    reach = (observed.T.astype(int) @ observed.astype(int) > 0) | np.eye(k, dtype=np.bool_)
    for _ in range(k):
        reach = (reach.astype(int) @ reach.astype(int)) > 0
    return [
        np.flatnonzero(row).tolist() for j, row in enumerate(reach) if np.flatnonzero(row)[0] == j
    ]
