"""P values of a list of tests on many data sets at once.

The permutation tests of a data set share its rearrangements, which are drawn anew for every data
set; so do the tests that mirror. The bootstrap-t of the trimmed means has resamples of its own.
Without ties Friedman's test, the signed-rank test and the sign test are looked up in their exact
law. The pair tests compare the last occasion with the first.

Simulated values are continuous, tied only where they are set to a limit. Equality is therefore that
of floats; the methods, which see real tables, judge it in whole multiples of the reporting step.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import special

from robustrm._checks import check_choice, check_count
from robustrm.kernels import anova, hotelling, rank_model, scores, trimmed
from robustrm.kernels.bootstrap import resampled_rows, rows_in_block
from robustrm.kernels.null.engine import law
from robustrm.kernels.null.forms import centring, linear
from robustrm.kernels.null.results import Law
from robustrm.kernels.null.shared import shared_flip_p, shared_permutation_p
from robustrm.kernels.null.tables import permutation_tables, sign_tables
from robustrm.kernels.score_statistics import between
from robustrm.simulation import BLOCK, TRIM, Design, draw_block, stream

Floats = NDArray[np.float64]
Progress = Callable[[int, int], object]

DRAWS = 999
# Share Winsorized at each end, the default of the method.
_WINSORIZED = 0.1

# Tests by permutation within subjects: from values (..., n, k) to scores.
PERMUTED: dict[str, Callable[[Floats], Floats]] = {
    "friedman": scores.rank_scores,
    "quade": lambda values: scores.quade_scores(values, np.ptp(values, axis=-1)),
    "aligned_ranks": lambda values: scores.aligned_scores(scores.mean_scores(values)),
    "normal_scores": scores.normal_scores,
    "mean_permutation": scores.mean_scores,
    "winsorized_permutation": lambda values: scores.winsorized_scores(
        scores.mean_scores(values), _WINSORIZED
    ),
}
# Tests by mirroring: from values to score vectors (..., n, d).
MIRRORED: dict[str, Callable[[Floats], Floats]] = {
    "row_flip": scores.mean_scores,
    "signed_rank": lambda values: _signed_ranks(values)[..., None],
    "sign_test": lambda values: np.sign(_change(values))[..., None],
    "sign_flip": lambda values: _change(values)[..., None],
}
OMNIBUS = (*PERMUTED, "row_flip", "anova")
PAIRS = ("signed_rank", "sign_test", "sign_flip", "paired_t")
TESTS = (*OMNIBUS, *PAIRS)
# Overall tests that ask neither for exchangeable occasions nor for a common covariance.
BOOTSTRAP = "trimmed_anova, bootstrap"
FURTHER = ("trimmed_anova", BOOTSTRAP, "rank_anova", "hotelling")


def p_values(
    design: Design,
    tests: Sequence[str],
    datasets: int,
    *,
    draws: int = DRAWS,
    seed: int,
    progress: Progress | None = None,
) -> Floats:
    """Simulate a design and give the p value of every test on every data set.

    Parameters
    ----------
    design : Design
    tests : sequence of str
        Among `TESTS` and `FURTHER`.
    datasets : int
        How many data sets.
    draws : int, default 999
        Rearrangements, or resamples, of each data set.
    seed : int
        Root of all streams. Neither the other tests in the list nor the number of data sets
        changes the p value of a test on a data set.
    progress : callable, optional
        Called with (data sets done, data sets).

    Returns
    -------
    ndarray, shape (datasets, len(tests))
    """
    for test in tests:
        check_choice("tests", test, (*TESTS, *FURTHER))
    check_count("datasets", datasets)
    found = []
    for block in range(math.ceil(datasets / BLOCK)):
        size = min(BLOCK, datasets - block * BLOCK)
        values = draw_block(design, block, seed=seed)[:size]
        found.append(
            p_values_of(
                values,
                tests,
                draws=draws,
                permutations=stream(seed, f"permutations: {design.key}", block),
                mirrors=stream(seed, f"mirrors: {design.key}", block),
                resamples=stream(seed, f"resamples: {design.key}", block),
                tied=design.limit > 0,
            )
        )
        if progress is not None:
            progress(block * BLOCK + size, datasets)
    return np.concatenate(found)


def p_values_of(
    values: Floats,
    tests: Sequence[str],
    *,
    draws: int,
    permutations: np.random.Generator,
    mirrors: np.random.Generator,
    resamples: np.random.Generator,
    tied: bool,
) -> Floats:
    """Give the p value of every test on given data sets.

    Parameters
    ----------
    values : ndarray, shape (B, n, k)
    tests : sequence of str
    draws : int
    permutations, mirrors, resamples : numpy.random.Generator
        Where the rearrangements and resamples come from; each data set takes the next ones.
    tied : bool
        Whether values may be tied: then no test is looked up in its untied law.

    Returns
    -------
    ndarray, shape (B, len(tests))
    """
    looked_up = _looked_up(*values.shape[-2:], tied=tied)
    found = {test: looked_up[test](values) for test in tests if test in looked_up}
    permuted = [test for test in tests if test in PERMUTED and test not in found]
    if permuted:
        stacked = np.stack([PERMUTED[test](values) for test in permuted], axis=1)
        shared = [shared_permutation_p(each, draws, permutations) for each in stacked]
        found |= dict(zip(permuted, np.transpose(shared), strict=True))
    mirrored = [test for test in tests if test in MIRRORED and test not in found]
    if mirrored:
        found |= dict(zip(mirrored, _mirrored_p(values, mirrored, draws, mirrors), strict=True))
    if BOOTSTRAP in tests:
        found[BOOTSTRAP] = bootstrap_t_p(values, draws, resamples)
    return np.stack([found[test] for test in tests], axis=1)


def needs_draws(test: str, design: Design) -> bool:
    """Whether the p value of a test comes from random rearrangements of each data set."""
    return test not in _looked_up(design.n, design.k, tied=design.limit > 0)


def _looked_up(n: int, k: int, *, tied: bool) -> dict[str, Callable[[Floats], Floats]]:
    """Return the tests whose p values need no rearrangement of the data set."""
    found: dict[str, Callable[[Floats], Floats]] = {
        "anova": anova_p,
        "paired_t": paired_t_p,
        "trimmed_anova": trimmed_anova_p,
        "rank_anova": rank_anova_p,
        "hotelling": hotelling_p,
    }
    if not tied:
        found |= {"signed_rank": signed_rank_exact, "sign_test": sign_test_exact}
        if _friedman_law(n, k) is not None:
            found["friedman"] = friedman_exact
    return found


def _mirrored_p(
    values: Floats, tests: Sequence[str], draws: int, rng: np.random.Generator
) -> Floats:
    """Return p values of tests that mirror, (tests, B); short vectors are filled with zeros."""
    vectors = [MIRRORED[test](values) for test in tests]
    widest = max(vector.shape[-1] for vector in vectors)
    filled = np.zeros((len(values), len(tests), values.shape[1], widest))
    for place, vector in enumerate(vectors):
        filled[:, place, :, : vector.shape[-1]] = vector
    return np.stack([shared_flip_p(each, draws, rng) for each in filled], axis=1)


def _change(values: Floats) -> Floats:
    """Last less first occasion, (..., n)."""
    return np.asarray(values[..., -1] - values[..., 0])


def _signed_ranks(values: Floats) -> Floats:
    change = _change(values)
    return scores.signed_ranks(np.abs(change), np.sign(change))


def _upper_tails(null: Law | None, observed: Floats) -> Floats:
    """P(statistic >= observed) by an exact law of whole numbers."""
    assert null is not None
    tails = np.append(np.cumsum(null.probabilities[::-1])[::-1], 0.0)
    return np.asarray(tails[np.searchsorted(null.values, observed - null.slack)])


@functools.lru_cache(maxsize=64)
def _friedman_law(n: int, k: int) -> Law | None:
    """Exact law without ties, None beyond the work budget of the engine."""
    ranks = np.tile(2.0 * np.arange(k) - (k - 1), (n, 1))
    return law(permutation_tables(ranks), centring(k))


@functools.lru_cache(maxsize=64)
def _signed_rank_law(n: int) -> Law | None:
    return law(sign_tables(2 * np.arange(1.0, n + 1)), linear(1.0))


def friedman_exact(values: Floats) -> Floats:
    """Give Friedman's exact p values of data sets (B, n, k) without ties."""
    n, k = values.shape[-2:]
    return _upper_tails(_friedman_law(n, k), between(scores.rank_scores(values)))


def signed_rank_exact(values: Floats) -> Floats:
    """Give the exact two-sided signed-rank p values, last against first, without ties."""
    line = _signed_ranks(values).sum(axis=-1)
    # the law is symmetric about zero, so both tails are twice the one that was reached
    tail = _upper_tails(_signed_rank_law(values.shape[-2]), np.abs(line))
    return np.minimum(1.0, 2 * tail)


def sign_test_exact(values: Floats) -> Floats:
    """Give the exact two-sided sign-test p values, last against first, without ties."""
    n = values.shape[-2]
    rises = np.count_nonzero(_change(values) > 0, axis=-1)
    tail: Floats = special.bdtr(np.minimum(rises, n - rises), n, 0.5)
    return np.minimum(1.0, 2 * tail)


def anova_p(values: Floats) -> Floats:
    """Give the Greenhouse-Geisser p values of the within-subject analysis of variance."""
    n, k = values.shape[-2:]
    f = anova.sums_of_squares(values).f_ratio(n, k)
    epsilon = anova.epsilon_greenhouse_geisser(anova.contrast_covariance(values))
    return anova.f_tail(f, epsilon * (k - 1), epsilon * (k - 1) * (n - 1))


def paired_t_p(values: Floats) -> Floats:
    """Give the two-sided p values of the paired t test, last against first; NaN for 0/0."""
    change = _change(values)
    n = change.shape[-1]
    with np.errstate(invalid="ignore", divide="ignore"):
        t = change.mean(axis=-1) / (change.std(axis=-1, ddof=1) / math.sqrt(n))
    return np.asarray(2 * special.stdtr(n - 1, -np.abs(t)))


def trimmed_anova_p(values: Floats) -> Floats:
    """Give the p values of the F form of the trimmed-mean analysis of variance, 20% trimmed."""
    n, k = values.shape[-2:]
    h = trimmed.left(n, TRIM)
    _, epsilon = trimmed.trimmed_epsilons(values, TRIM)
    f = trimmed.trimmed_squares(values, TRIM).f_ratio(h)
    return anova.f_tail(f, epsilon * (k - 1), epsilon * (k - 1) * (h - 1))


def bootstrap_t_p(values: Floats, draws: int, rng: np.random.Generator) -> Floats:
    """Give the p values (b + 1)/(B + 1) of the bootstrap-t of the same F."""
    n = values.shape[-2]
    block = rows_in_block(values[0].size)
    counts = [
        trimmed.bootstrap_t_exceedances(each, TRIM, resampled_rows(rng, n, draws, block)).at_least
        for each in values
    ]
    return (np.array(counts) + 1) / (draws + 1)


def rank_anova_p(values: Floats) -> Floats:
    """Give the p values of the ANOVA-type statistic of overall ranks: F on infinite df2."""
    f, df = rank_model.anova_type(rank_model.overall_midranks(values))
    return np.asarray(special.chdtrc(df, f * df))


def hotelling_p(values: Floats) -> Floats:
    """Give the p values of Hotelling's T² of the contrasts between the occasions."""
    n, k = values.shape[-2:]
    return anova.f_tail(hotelling.to_f(hotelling.t_squared(values), n, k), k - 1, n - k + 1)
