"""One set of random rearrangements for all the tests of one data set.

Many tests on one table (panels, grids of specifications, level tables) ask how their statistics
move when the same subjects are rearranged in the same way. The score vectors of all tests are laid
side by side, so that one random number rearranges them together; tables of a few subjects are
added up beforehand, so that it rearranges several subjects at once.

A p value is (b + 1) / (B + 1) with b of the B draws at least as large as the observed statistic
(Phipson & Smyth 2010), which keeps P(p <= a) <= a whatever B is. Equality is judged on the scale of
the scores, as in `forms`.
"""

from __future__ import annotations

import functools
from collections.abc import Iterator, Sequence

import numpy as np
import numpy.typing as npt

from robustrm.kernels.null.forms import TOLERANCE, centring
from robustrm.kernels.null.tables import Array, permutation_table

Blocks = tuple[tuple[int, ...], ...]

# Numbers in the sums that are held at once: 2^20 float64 are 8 MB.
BLOCK = 1 << 20


def shared_permutation_p(
    scores: Array,
    draws: int,
    rng: np.random.Generator,
    *,
    blocks: Sequence[Sequence[int]] | None = None,
    block: int | None = None,
) -> Array:
    """Give the Monte Carlo p values of quadratic statistics under shared permutations.

    Parameters
    ----------
    scores : ndarray, shape (tests, n, k)
        Scores of each test, subject and occasion; k at most 7 (all k! orders are listed).
    draws : int
        Rearrangements of the data set, the same for every test.
    rng : numpy.random.Generator
    blocks : sequence of sequences of int, optional
        Partition of the occasions; a subject's scores move only within a block, and the statistic
        is the sum over the blocks of the squared length of the block's centred sum. Default: one
        block, T = sum_j (S_j - mean)^2.
    block : int, optional
        Draws held at once; changes no result.

    Returns
    -------
    ndarray, shape (tests,)
    """
    orders, basis = _group(scores.shape[-1], _frozen(blocks))
    return _p_values(scores @ basis, scores[..., orders] @ basis, _reach(scores), draws, rng, block)


def shared_flip_p(
    scores: Array, draws: int, rng: np.random.Generator, *, block: int | None = None
) -> Array:
    """Give the Monte Carlo p values of |S|^2 when whole subjects are mirrored together.

    Parameters
    ----------
    scores : ndarray, shape (tests, n, d)
        Score vectors, S their sum over the subjects: rows of d centred values, or one difference
        (d = 1, where |S| counts both tails).
    draws : int
        Mirrorings of the data set, the same for every test.
    rng : numpy.random.Generator
    block : int, optional
        Draws held at once; changes no result.

    Returns
    -------
    ndarray, shape (tests,)
    """
    mirrored = np.stack([scores, -scores], axis=2)
    return _p_values(scores, mirrored, _reach(scores), draws, rng, block)


def _reach(scores: Array) -> Array:
    """Largest length a sum of the score vectors can have, an upper bound, (tests,)."""
    return np.asarray(np.linalg.norm(scores, axis=-1).sum(axis=-1))


def _frozen(blocks: Sequence[Sequence[int]] | None) -> Blocks | None:
    return None if blocks is None else tuple(tuple(block) for block in blocks)


@functools.lru_cache(maxsize=256)
def _group(k: int, blocks: Blocks | None) -> tuple[npt.NDArray[np.int64], Array]:
    """Orders of the occasions within the blocks, (m, k), and the basis of the contrasts, (k, q)."""
    orders = permutation_table(np.arange(k), blocks=blocks).listed().vectors.astype(np.int64)
    return orders, centring(k, blocks=blocks).projection.T


def _p_values(
    observed: Array,
    tables: Array,
    reach: Array,
    draws: int,
    rng: np.random.Generator,
    block: int | None,
) -> Array:
    """P values from observed vectors (tests, n, q) and their arrangements (tests, n, m, q)."""
    statistic = np.square(observed.sum(axis=1)).sum(axis=-1)
    length = np.sqrt(statistic) - TOLERANCE * reach
    floor = np.where(length > 0, length**2, -np.inf)
    hits = np.zeros(len(observed), dtype=np.int64)
    for drawn in _statistics(tables, draws, rng, block):
        hits += np.count_nonzero(drawn >= floor, axis=0)
    return np.asarray((hits + 1) / (draws + 1))


def _statistics(
    tables: Array, draws: int, rng: np.random.Generator, block: int | None
) -> Iterator[Array]:
    """Draw the statistics of all tests, (rows, tests) at a time."""
    tests, n, m, q = tables.shape
    # coordinates before tests, so that the squares of all tests are added in long rows
    side_by_side = tables.transpose(1, 2, 3, 0).reshape(n, m, q * tests)
    grouped = list(_pre_added(side_by_side, draws))
    most = block or max(1, BLOCK // (q * tests))
    for start in range(0, draws, most):
        uniform = rng.random((min(most, draws - start), len(grouped)))
        sums = np.zeros((len(uniform), q * tests))
        taken = np.empty_like(sums)
        for vectors, column in zip(grouped, uniform.T, strict=True):
            # Floor of u * m: no probability is off by more than 1e-11 of itself.
            index = (column * len(vectors)).astype(np.int64)
            np.take(vectors, index, axis=0, out=taken, mode="clip")
            sums += taken
        yield np.square(sums).reshape(-1, q, tests).sum(axis=1)


def _pre_added(tables: Array, draws: int) -> Iterator[Array]:
    """Add up the tables, (n, m, d), of g neighbouring subjects into (m^g, d).

    The largest g with m^g at most `draws`: adding up then costs less than it saves.
    """
    n, m, _ = tables.shape
    g = 1
    while m ** (g + 1) <= draws and g < n:
        g += 1
    whole = n - n % g
    yield from _added(tables[:whole].reshape(-1, g, *tables.shape[1:]))
    if whole < n:
        yield from _added(tables[None, whole:])


def _added(tables: Array) -> Array:
    """Add one vector from each of g tables, (groups, g, m, d) -> (groups, m^g, d)."""
    groups, g, _, d = tables.shape
    sums = tables[:, 0]
    for subject in range(1, g):
        sums = (sums[:, :, None] + tables[:, subject, None]).reshape(groups, -1, d)
    return sums
