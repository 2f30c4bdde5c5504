"""More than half of an occasion beyond a limit: counts, no shift, by whatever test."""

from __future__ import annotations

import pytest

from robustrm.methods.registry import METHODS
from robustrm.table import OccasionTable

SHIFTS = [m for m in METHODS if m.kind == "pair" and "substitute" in m.options]


def halves(n_below: int) -> OccasionTable:
    rows = [[0.3 if i < n_below else 1.0 + i, 2.0 + i * i] for i in range(8)]
    below = [[i < n_below, False] for i in range(8)]
    return OccasionTable.from_array(rows, occasions=["w0", "w1"], below=below)


@pytest.mark.parametrize("method", SHIFTS, ids=lambda m: m.name)
def test_half_is_still_estimated_and_more_is_not(method):
    """Common practice (EPA QA/G-9, band of 50%, value from memory)."""
    at_half = method.load()(halves(4).log(), "w0", "w1")
    above = method.load()(halves(5).log(), "w0", "w1")
    assert at_half.estimate is not None
    assert above.estimate is None
    assert "mostly beyond the limit" in [note.code for note in above.notes]
    assert 0 < above.p_value <= 1
