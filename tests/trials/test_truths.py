"""What intervals are to cover: closed forms, SciPy's quadrature, and a large simulation."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import integrate, stats

from robustrm.errors import ArgumentError
from robustrm.simulation import Design, draw
from robustrm.trials.coverage import SHIFT, cells
from robustrm.trials.intervals import LAWS
from robustrm.trials.truths import (
    difference_law,
    error_difference,
    quantile,
    relative_effects,
    sum_cdf,
    trimmed_moments,
    truths,
)


def design_of(errors: str) -> Design:
    return next(design for design in cells() if design.errors == errors)


def test_normal_differences_have_their_closed_forms():
    # D is N(1, 2): first and last occasion are shifted by 1 SD of the errors, SD 1
    found = {name: values[0] for name, values in truths(design_of("normal")).items()}
    root = math.sqrt(2)
    assert found == pytest.approx(
        {
            "mean": 1.0,
            "median": 1.0,
            "pseudo-median": 1.0,
            "trimmed mean": 1.0,
            "difference of trimmed means": 1.0,
            "robust standardized difference": 1 / root,
            "d_z": 1 / root,
            "d_av": 1 / root,
            "probability of a fall": stats.norm.cdf(-1 / root),
            # values of two subjects differ with variance 2 + 2
            "relative effect": stats.norm.cdf(0.5),
            # by pairs of occasions: two shifted by 1, one by 1/2, itself 1/2
            "relative effect of the last occasion": (
                2 * stats.norm.cdf(0.5) + stats.norm.cdf(0.25) + 0.5
            ) / 4,
            # the sum of two differences is N(2, 4)
            "rank-biserial correlation": 2 * stats.norm.cdf(1) - 1,
            "Kendall's W": normal_w(),
            "means": 0.0,
        },
        abs=1e-9,
    )  # fmt: skip
    assert truths(design_of("normal"))["means"] == (0.0, 0.5, 1.0)


def normal_w() -> float:
    """W in the population from P(one occasion above another), k = 4: 12 Σ (E r − 5/2)² / 60."""
    ranks = [
        1 + sum(stats.norm.cdf((b - a) / math.sqrt(2)) for j, a in enumerate(SHIFT) if j != i)
        for i, b in enumerate(SHIFT)
    ]
    return 12 * sum((rank - 2.5) ** 2 for rank in ranks) / 60


@pytest.mark.parametrize("x", [-3.0, -0.4, 0.0, 1.0, 2.5, 7.0])
def test_the_difference_of_two_t_errors_is_that_of_quadrature(x: float):
    t = stats.t(3)
    expected, _ = integrate.quad(
        lambda u: t.cdf((x - 1) * math.sqrt(3) + u) * t.pdf(u), -np.inf, np.inf, epsabs=1e-12
    )
    assert difference_law(design_of("t3")).cdf(np.array(x)) == pytest.approx(expected, abs=1e-8)


@pytest.mark.parametrize("x", [-3.0, 0.0, 1.0, 2.5])
def test_the_difference_of_two_contaminated_errors_is_a_mixture_of_three(x: float):
    # both narrow, one wide, both wide; errors are over √1.8
    parts = [(0.81, 2.0), (0.18, 10.0), (0.01, 18.0)]
    expected = sum(w * stats.norm.cdf((x - 1) / math.sqrt(v / 1.8)) for w, v in parts)
    law = difference_law(design_of("contaminated"))
    assert law.cdf(np.array(x)) == pytest.approx(expected, abs=1e-12)


@pytest.mark.parametrize("x", [-2.0, -0.3, 0.0, 0.5, 2.0, 10.0])
def test_the_difference_of_two_lognormal_values_is_that_of_quadrature(x: float):
    # SD of the logs .8 between and .5 within subjects, shift .5
    def given(e: float, b: float) -> float:
        size = x * math.exp(-0.8 * b) + math.exp(0.5 * e)
        if size <= 0:
            return 0.0
        inner = stats.norm.cdf((math.log(size) - 0.5) / 0.5)
        return float(inner * math.exp(-(e**2 + b**2) / 2) / (2 * math.pi))

    expected, _ = integrate.dblquad(given, -8, 8, -8, 8, epsabs=1e-8, epsrel=1e-8)
    law = difference_law(design_of("lognormal"))
    assert law.cdf(np.array(x)) == pytest.approx(expected, abs=1e-6)


@pytest.mark.parametrize("errors", LAWS)
def test_density_and_distribution_function_agree(errors: str):
    law = difference_law(design_of(errors))
    for low, high in ((-6.0, -0.2), (-0.2, 0.9), (0.9, 12.0)):
        mass, _ = integrate.quad(lambda x: float(law.pdf(np.array(x))), low, high, limit=200)
        assert mass == pytest.approx(
            float(law.cdf(np.array(high)) - law.cdf(np.array(low))), abs=1e-7
        )


@pytest.mark.parametrize("errors", LAWS)
def test_trimmed_moments_are_those_of_quadrature(errors: str):
    law = difference_law(design_of(errors))
    a, b = quantile(law, 0.2), quantile(law, 0.8)
    assert law.cdf(np.array([a, b])) == pytest.approx([0.2, 0.8], abs=1e-12)

    def moment(power: int) -> float:
        return integrate.quad(lambda x: x**power * float(law.pdf(np.array(x))), a, b)[0]

    mean, variance = trimmed_moments(law)
    assert mean == pytest.approx(moment(1) / 0.6, abs=1e-8)
    winsorized = moment(1) + 0.2 * (a + b)
    expected = moment(2) + 0.2 * (a**2 + b**2) - winsorized**2
    assert variance == pytest.approx(expected, abs=1e-8)


def test_the_sum_of_two_normal_differences_is_normal():
    below = sum_cdf(error_difference(design_of("normal"), 1.0))
    for s in (-3.0, 0.0, 2.0, 5.0):
        assert below(s) == pytest.approx(stats.norm.cdf(s, 2, 2), abs=1e-10)


@pytest.mark.parametrize("errors", LAWS)
def test_relative_effects_average_to_one_half(errors: str):
    assert relative_effects(design_of(errors)).mean() == pytest.approx(0.5)


@pytest.mark.parametrize("errors", LAWS)
def test_truths_are_those_of_a_large_sample(errors: str):
    # 200,000 subjects; five standard errors, from 20 independent parts of them
    parts = draw(design_of(errors), 20_000 * 10 // design_of(errors).n, seed=8).reshape(20, -1, 4)
    seen = np.array([sample_values(part) for part in parts])
    error = seen.std(axis=0, ddof=1) / math.sqrt(20)
    found = [value for values in truths(design_of(errors)).values() for value in values]
    assert (np.abs(seen.mean(axis=0) - found) <= 5 * error + 1e-12).all()


def sample_values(y: np.ndarray) -> list[float]:
    """Every estimand of 10,000 subjects by its definition, in the order of `truths`."""
    d = y[:, -1] - y[:, 0]
    half = len(d) // 2
    sums = d[:half] + d[half:]
    winsorized = np.asarray(stats.mstats.winsorize(d, (0.2, 0.2)))
    cut = [stats.trim_mean(y[:, j], 0.2) for j in (0, -1)]
    other = np.roll(y, 1, axis=0)  # another subject
    above = [np.mean(other[:, j] < y[:, -1]) for j in range(3)]
    ranks = stats.rankdata(y, axis=1).mean(axis=0)
    return [
        d.mean(),
        np.median(d),
        np.median(sums) / 2,
        stats.trim_mean(d, 0.2),
        cut[1] - cut[0],
        # .6419...: SD of the normal law Winsorized by a fifth, from SciPy's truncated normal
        normal_winsorized_sd() * stats.trim_mean(d, 0.2) / winsorized.std(),
        d.mean() / d.std(),
        d.mean() / math.sqrt(y[:, [0, -1]].var(axis=0).mean()),
        np.mean(d < 0),
        above[0],
        (sum(above) + 0.5) / 4,
        np.sign(sums).mean(),
        12 * ((ranks - 2.5) ** 2).sum() / 60,
        *(y[:, 1:] - y[:, :1]).mean(axis=0),
    ]


def normal_winsorized_sd() -> float:
    q = stats.norm.ppf(0.8)
    return math.sqrt(0.6 * stats.truncnorm(-q, q).var() + 0.4 * q**2)


@pytest.mark.parametrize(
    "options",
    [{}, {"shift": (0.0, 1.0), "rho": 0.5}, {"shift": (0.0, 1.0), "limit": 0.3},
     {"shift": (0.0, 1.0), "spread": (1.0, 2.0)}],
)  # fmt: skip
def test_a_design_without_known_truths_is_refused(options):
    with pytest.raises(ArgumentError, match="designs with a shift alone, got n=8, k=2"):
        truths(Design(n=8, k=2, **options))


def test_other_errors_are_refused():
    with pytest.raises(ArgumentError, match="must be symmetric or lognormal, got 'skewed'"):
        truths(Design(n=8, k=2, errors="skewed", shift=(0.0, 1.0)))
