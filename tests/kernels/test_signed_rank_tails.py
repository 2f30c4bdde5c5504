"""Tails of the signed-rank law against the list of all sign patterns."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from robustrm.kernels import signed_rank_tails
from robustrm.kernels.signed_rank_tails import lower_tails


def enumerated(weights: np.ndarray, bound: int) -> float:
    sums = [np.dot(weights, picks) for picks in itertools.product((0, 1), repeat=len(weights))]
    return float(np.mean([total <= bound for total in sums]))


def test_tails_are_those_of_all_sign_patterns(monkeypatch: pytest.MonkeyPatch):
    rng = np.random.default_rng(1)
    ranks = np.stack([np.sort(rng.choice([0, 2, 3, 3, 5, 5, 8, 12], 7)) for _ in range(30)])
    ranks = np.concatenate([ranks, [[14, 2, 4, 6, 8, 10, 12]], np.zeros((1, 7), int)])
    bounds = np.array([rng.integers(0, 1 + row.sum()) for row in ranks])
    expected = [enumerated(row, bound) for row, bound in zip(ranks, bounds, strict=True)]
    np.testing.assert_allclose(lower_tails(ranks, bounds), expected, rtol=1e-13)
    monkeypatch.setattr(signed_rank_tails, "BLOCK", 40)
    np.testing.assert_allclose(lower_tails(ranks, bounds), expected, rtol=1e-13)
