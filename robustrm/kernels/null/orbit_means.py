"""Means of exp(c . s) over all relabellings of the occasions, without going through them.

The sum over all orders of q occasions of exp(sum of c_j s_order(j)) is the permanent of the matrix
exp(c_j s_l). It is built up over the subsets of the columns, a row at a time, in q 2^(q-1) products
instead of q! (Ryser 1963 writes the permanent over subsets too; this sum has positive terms only,
so that nothing cancels).

References
----------
Ryser HJ (1963). Combinatorial Mathematics. Carus Mathematical Monographs 14, chapter 2.
"""

from __future__ import annotations

import math

import numpy as np

from robustrm.kernels.null.symmetry import Classes
from robustrm.kernels.null.tables import Array


def log_orbit_means(tilts: Array, sums: Array, classes: Classes) -> Array:
    """Logarithm of the mean of exp(tilt . sum) over relabellings within the classes.

    Parameters
    ----------
    tilts : ndarray, shape (t, d)
    sums : ndarray, shape (b, d)
        Both sorted ascending within every class (`symmetry.sort_within`).
    classes : tuple of tuple of int

    Returns
    -------
    ndarray, shape (b, t)
    """
    total = np.zeros((len(sums), len(tilts)))
    for members in classes:
        # Column by column and not as a matrix product, whose last digits depend on the shape.
        for j in members:
            total += np.multiply.outer(sums[:, j], tilts[:, j])
        if len(members) > 1:
            total += _log_mean(tilts[:, members], sums[:, members])
    return total


def _log_mean(c: Array, s: Array) -> Array:
    """Logarithm of the mean over the orders, relative to both sorted alike, where it is largest.

    Rows and columns are scaled by the dual solution of the assignment problem, so that the sorted
    order has factors of 1 and no factor exceeds 1.
    """
    q = c.shape[1]
    factors = _scaled(c, s)
    parts = {0: np.ones((len(s), len(c)))}
    for row in range(q):
        wider: dict[int, Array] = {}
        for subset, part in parts.items():
            for column in range(q):
                if not subset >> column & 1:
                    term = part * factors[row][column]
                    key = subset | 1 << column
                    wider[key] = wider[key] + term if key in wider else term
        parts = wider
    return np.asarray(np.log(parts[(1 << q) - 1] / math.factorial(q)))


def _scaled(c: Array, s: Array) -> list[list[Array]]:
    """Factors exp(c_j s_l - a_j - b_l), each (b, t), with b_(l+1) = b_l + c_l (s_(l+1) - s_l)."""
    q = c.shape[1]
    gaps = np.diff(s, axis=1)
    shift = [np.zeros((len(s), len(c)))]
    for column in range(q - 1):
        shift.append(shift[-1] + np.multiply.outer(gaps[:, column], c[:, column]))
    return [
        [
            np.exp(
                np.multiply.outer(s[:, column] - s[:, row], c[:, row]) + shift[row] - shift[column]
            )
            for column in range(q)
        ]
        for row in range(q)
    ]


def numbers_held(classes: Classes) -> int:
    """Numbers held at once for one sum and one tilt."""
    longest = max(len(members) for members in classes)
    return 2 + (longest**2 + 2**longest if longest > 1 else 0)
