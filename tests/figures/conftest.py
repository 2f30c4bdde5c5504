"""Small tables and hand-made results: what is drawn is known without any method."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from robustrm.results import Comparison, Estimate, FollowUps, TestResult
from robustrm.table import OccasionTable

NAN = math.nan


@pytest.fixture
def table() -> OccasionTable:
    """Five subjects, three occasions: two values below 0.5, a gap inside and one at the end."""
    return OccasionTable.from_array(
        [[8.0, 4.0, 2.0], [3.0, 0.5, 0.5], [20.0, NAN, 10.0], [1.0, 1.5, NAN], [6.0, 6.0, 3.0]],
        below=np.array([[0, 0, 0], [0, 1, 1], [0, 0, 0], [0, 0, 0], [0, 0, 0]], dtype=bool),
        occasions=["week 0", "week 6", "week 12"],
        subjects=["Ann", "Ben", "Cleo", "Dan", "Eve"],
        marker="ferritin",
        unit="µg/L",
    )


@pytest.fixture
def signed() -> OccasionTable:
    """Values on both sides of zero."""
    return OccasionTable.from_array(
        [[-1.0, 2.0], [0.0, 4.0], [3.0, 1.0]], occasions=["before", "after"], unit="points"
    )


@pytest.fixture
def make_comparison() -> Callable[..., Comparison]:
    return comparison


@pytest.fixture
def make_family() -> Callable[..., FollowUps]:
    return family


def comparison(
    first: str = "week 0",
    second: str = "week 6",
    *,
    scale: Any = "log",
    interval: tuple[float, float] | None = (0.4, 1.1),
    value: float | None = 0.7,
    subjects: tuple[str, ...] = ("Ann", "Ben", "Dan", "Eve"),
    p: float = 0.25,
) -> Comparison:
    low, high = interval if interval is not None else (None, None)
    level = None if interval is None else 0.9375
    unit = None if scale == "log" else "µg/L"
    estimate = None
    if value is not None:
        estimate = Estimate("shift", value, low, high, level, "exact", unit, scale)
    result = TestResult(
        method="signed_rank",
        statistic=3.0,
        statistic_name="T⁺",
        df=(),
        p_value=p,
        null="exact",
        n_subjects=len(subjects),
        n_occasions=2,
        hypothesis="No change.",
        estimand="shift",
        scale=scale,
        estimate=estimate,
        subjects=subjects,
    )
    return Comparison(first, second, result, p)


def family(*members: Comparison, intervals: str = "separate", adjust: str = "holm") -> FollowUps:
    return FollowUps(members, "signed_rank", "named", adjust, intervals, 0.95, 0.125, 0.25)
