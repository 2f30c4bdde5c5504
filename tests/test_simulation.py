"""Simulated data: closed-form laws and moments, and streams that depend on nothing else.

Tolerances are five standard errors of the number drawn, from the closed form of the law.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import special

from robustrm.errors import ArgumentError
from robustrm.simulation import BLOCK, Design, Errors, draw, draw_block, stream

DATASETS = 1_000

# P(error <= x), from the definition of each law.
CDF: dict[str, Callable[[float], float]] = {
    "normal": special.ndtr,
    "t3": lambda x: float(special.stdtr(3, x * math.sqrt(3))),
    "contaminated": lambda x: (
        0.9 * special.ndtr(x * math.sqrt(1.8)) + 0.1 * special.ndtr(x * math.sqrt(1.8) / 3)
    ),
    "skewed": lambda x: 1 - math.exp(-max(x + 1, 0)),
}
# Fourth moments of the standardised laws: 3; (0.9·3 + 0.1·3·3⁴)/1.8²; exponential: 9.
FOURTH = {"normal": 3.0, "contaminated": 27 / 3.24, "skewed": 9.0}


def errors_of(name: Errors) -> np.ndarray:
    return draw(Design(n=10, k=3, errors=name, between_sd=0.0), DATASETS, seed=4)


@pytest.mark.parametrize("name", CDF)
@pytest.mark.parametrize("x", [-1.5, -0.6, 0.0, 0.4, 1.2, 2.5])
def test_errors_follow_their_law(name: Errors, x: float):
    values, expected = errors_of(name), CDF[name](x)
    standard_error = math.sqrt(expected * (1 - expected) / values.size)
    assert abs((values <= x).mean() - expected) <= 5 * standard_error + 1e-12


@pytest.mark.parametrize("name", CDF)
def test_errors_have_mean_zero_and_variance_one(name: Errors):
    values = errors_of(name)
    assert abs(values.mean()) <= 5 / math.sqrt(values.size)
    if name in FOURTH:  # t on 3 degrees of freedom has no fourth moment
        standard_error = math.sqrt((FOURTH[name] - 1) / values.size)
        assert abs((values**2).mean() - 1) <= 5 * standard_error


@pytest.mark.parametrize("name", ["lognormal", "log-t3"])
def test_a_log_law_is_the_exponential_of_its_symmetric_one(name: Errors):
    design = Design(n=10, k=2, errors=name, between_sd=0.0, within_sd=0.5, shift=(0.0, 0.7))
    logs = np.log(draw(design, DATASETS, seed=4))
    law = CDF["normal" if name == "lognormal" else "t3"]
    for occasion, centre in enumerate(design.shift):
        standardised = (logs[..., occasion] - centre) / 0.5
        expected = law(0.4)
        standard_error = math.sqrt(expected * (1 - expected) / standardised.size)
        assert abs((standardised <= 0.4).mean() - expected) <= 5 * standard_error


@pytest.mark.parametrize(
    "options",
    [
        {},
        {"between_sd": 2.0, "within_sd": 0.5},
        {"rho": 0.7},
        {"rho": -0.4, "spread": (1.0, 1.0, 2.0, 4.0)},
        {"slope_sd": 0.5},
        {"slope_sd": 1.0, "rho": 0.3, "between_sd": 0.0, "spread": (1.0, 2.0, 1.0, 3.0)},
    ],
)
def test_normal_designs_have_their_closed_form_mean_and_covariance(options):
    # cov(y_ia, y_ib) = between² + slope² a b + within² spread_a spread_b ρ^|a − b|
    design = Design(n=10, k=4, shift=(0.0, 1.0, -2.0, 0.5), **options)
    rows = draw(design, DATASETS, seed=5).reshape(-1, 4)
    time, spread = np.arange(4), np.array(design.spread or (1.0,) * 4)
    serial = np.eye(4)
    if design.rho:
        serial = design.rho ** np.abs(np.subtract.outer(time, time))
    expected = (
        design.between_sd**2
        + design.slope_sd**2 * np.outer(time, time)
        + design.within_sd**2 * np.outer(spread, spread) * serial
    )
    variances = np.diag(expected)
    centred = rows - design.shift
    assert (np.abs(centred.mean(axis=0)) <= 5 * np.sqrt(variances / len(rows))).all()
    standard_errors = np.sqrt((np.outer(variances, variances) + expected**2) / len(rows))
    assert (np.abs(centred.T @ centred / len(rows) - expected) <= 5 * standard_errors).all()


@pytest.mark.parametrize("errors", ["t3", "contaminated"])
def test_serial_correlation_keeps_contrasts_symmetric(errors: Errors):
    change = np.diff(draw(Design(n=10, k=4, errors=errors, rho=0.7), DATASETS, seed=6))
    for x in (0.0, 0.5, 1.5):
        falls, rises = (change <= -x).mean(axis=(0, 1)), (change >= x).mean(axis=(0, 1))
        assert (np.abs(falls - rises) <= 5 / math.sqrt(len(change) * 10)).all()


def test_values_below_the_limit_are_tied():
    for values in draw_block(Design(n=10, k=3, errors="lognormal", limit=0.3), 0, seed=1):
        lowest = values == values.min()
        # 30 cells: the 0.3 quantile lies between the 9th and the 10th value
        assert lowest.sum() == 9
        assert len(np.unique(values[~lowest])) == 21


# ── streams ───────────────────────────────────────────────────────────────────────────────

SMALL = Design(n=3, k=3, errors="t3", rho=0.5, slope_sd=0.2)


@given(st.lists(st.integers(1, 2 * BLOCK), min_size=1, max_size=4), st.integers(0, 250))
def test_what_is_drawn_does_not_depend_on_how_it_is_cut(sizes: list[int], start: int):
    whole = draw(SMALL, sum(sizes), seed=7, start=start)
    starts = start + np.cumsum([0, *sizes[:-1]])
    parts = [draw(SMALL, s, seed=7, start=int(f)) for s, f in zip(sizes, starts, strict=True)]
    np.testing.assert_array_equal(np.concatenate(parts), whole)


def test_seed_block_and_design_name_different_streams():
    first = draw_block(SMALL, 0, seed=1)
    other = Design(n=3, k=3, errors="t3", rho=0.6, slope_sd=0.2)
    for values in (
        draw_block(SMALL, 1, seed=1),
        draw_block(SMALL, 0, seed=2),
        draw_block(other, 0, seed=1),
    ):
        assert not np.isclose(values, first).any()
    assert stream(1, "a", 0).random() != stream(1, "b", 0).random()


def test_a_default_written_out_is_the_same_design():
    assert Design(n=3, k=3, rho=0.0, between_sd=1.0).key == Design(n=3, k=3).key == "n=3, k=3"


# ── what a design is ──────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize(
    ("options", "exchangeable", "symmetric", "words"),
    [
        ({}, True, True, "exchangeable"),
        ({"errors": "lognormal"}, True, False, "exchangeable"),
        ({"errors": "skewed"}, True, False, "exchangeable"),
        ({"limit": 0.3}, True, False, "exchangeable"),
        ({"spread": (2.0, 2.0, 2.0), "shift": (1.0, 1.0, 1.0)}, True, True, "exchangeable"),
        ({"spread": (1.0, 2.0, 4.0)}, False, True, "exchangeable"),
        ({"shift": (0.0, 0.0, 1.0)}, False, True, "exchangeable"),
        ({"rho": 0.7}, False, True, "AR(1) 0.7"),
        ({"slope_sd": 0.5, "rho": 0.7}, False, True, "AR(1) 0.7 and slopes 0.5"),
    ],
)
def test_a_design_knows_its_nulls(options, exchangeable, symmetric, words):
    design = Design(n=6, k=3, **options)
    assert (design.exchangeable, design.symmetric) == (exchangeable, symmetric)
    assert design.correlation == words


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"n": 0}, "`n` must be a whole number of at least 1, got 0"),
        ({"k": 1}, "`k` must be a whole number of at least 2, got 1"),
        ({"errors": "lognorml"}, "Did you mean 'lognormal'"),
        ({"within_sd": -1.0}, "`within_sd` must be at least 0, got -1.0"),
        ({"rho": 1.0}, r"`rho` must be in \(-1, 1\), got 1.0"),
        ({"limit": 30}, r"`limit` must be a share of the cells in \[0, 1\), got 30"),
        ({"spread": (1.0, 2.0)}, "one number for each of the 3 occasions, got 2"),
        ({"spread": (1.0, 0.0, 1.0)}, "`spread` must hold positive numbers"),
        ({"shift": (0.0, 0.0, math.nan)}, "`shift` must hold finite numbers"),
    ],
)
def test_a_value_that_breaks_its_rule_is_refused(options, message):
    with pytest.raises(ArgumentError, match=message):
        Design(**{"n": 6, "k": 3, **options})
