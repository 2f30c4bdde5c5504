"""Effect sizes of arrays: by hand, by quadrature, by full enumeration, against SciPy."""

from __future__ import annotations

import itertools
import json
import math
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import integrate, stats

from robustrm.kernels import effect_sizes as kernel
from robustrm.kernels.scores import rank_scores

REFERENCE = Path(__file__).resolve().parents[1] / "reference"


# ── robust standardized difference ────────────────────────────────────────────────────────────


@pytest.mark.reference
@pytest.mark.parametrize("fraction", [0.01, 0.1, 1 / 7, 2 / 13, 0.2, 0.35, 0.49])
def test_the_factor_is_the_sd_of_a_winsorized_normal_by_quadrature(fraction):
    q = stats.norm.isf(fraction)
    inside, _ = integrate.quad(lambda x: x**2 * stats.norm.pdf(x), -q, q, epsabs=1e-13)
    expected = math.sqrt(inside + 2 * fraction * q**2)
    assert kernel.winsorized_normal_sd(fraction) == pytest.approx(expected, rel=1e-10)


@pytest.mark.reference
def test_the_factor_is_642_at_a_fifth():
    # Algina, Keselman & Penfield (2005) print .642
    assert round(kernel.winsorized_normal_sd(0.2), 3) == 0.642
    assert kernel.winsorized_normal_sd(0.0) == 1


def test_ten_differences_by_hand():
    """Trimmed mean (1+2+3+4+5+7)/6 = 11/3.

    Winsorized 1, 1, 1, 2, 3, 4, 5, 7, 7, 7: mean 3.8, sum of squares 59.6, SD √(59.6/9).
    """
    d = np.array([30, -3, 0, 1, 2, 3, 4, 5, 7, 9.0])
    expected = 0.6419398 * (11 / 3) / math.sqrt(59.6 / 9)
    assert kernel.robust_standardized(d, 0.2) == pytest.approx(expected, abs=1e-6)


def test_the_factor_is_that_of_the_share_really_cut():
    # 2 of 14 are cut, not 2.8: Φ⁻¹(1 − 1/7) = 1.0676
    d = np.arange(1, 15.0)
    winsorized = np.clip(d, 3, 12)
    expected = kernel.winsorized_normal_sd(1 / 7) * 7.5 / winsorized.std(ddof=1)
    assert kernel.robust_standardized(d, 0.2) == pytest.approx(expected)


@pytest.mark.reference
def test_for_a_large_normal_sample_it_is_the_mean_over_the_sd():
    d = stats.norm.ppf((np.arange(1_000_000) + 0.5) / 1_000_000) * 3 + 2
    assert float(kernel.robust_standardized(d, 0.2)) == pytest.approx(2 / 3, abs=1e-5)


def test_without_spread_it_is_infinite_or_undefined_without_a_warning():
    flat = np.array([[0.1] * 10, [0.0] * 10, [-0.3] * 10])
    found = kernel.robust_standardized(flat, 0.2)
    assert found[0] == np.inf
    assert np.isnan(found[1])
    assert found[2] == -np.inf


@pytest.mark.property
@given(st.lists(st.floats(-1e3, 1e3), min_size=10, max_size=20), st.floats(0.01, 1e3))
def test_it_has_no_unit_and_turns_with_the_sign(d, unit):
    y = np.array(d)
    one = float(kernel.robust_standardized(y, 0.2))
    if not np.isfinite(one) or np.ptp(y) < 1e-3:
        return
    assert float(kernel.robust_standardized(unit * y, 0.2)) == pytest.approx(one, rel=1e-6)
    assert float(kernel.robust_standardized(-y, 0.2)) == pytest.approx(-one, rel=1e-9)


# ── Cohen's d ─────────────────────────────────────────────────────────────────────────────────


@pytest.mark.reference
@pytest.mark.parametrize("seed", [1, 2])
def test_d_z_is_scipys_paired_t_over_root_n(seed):
    y = np.random.default_rng(seed).lognormal(size=(9, 2))
    t = stats.ttest_rel(y[:, 1], y[:, 0]).statistic
    assert float(kernel.standardized(y[:, 1] - y[:, 0])) == pytest.approx(t / 3)
    untrimmed = kernel.robust_standardized(y[:, 1] - y[:, 0], 0.0)
    assert float(untrimmed) == pytest.approx(t / 3)


def test_d_av_by_hand():
    """Means 4 and 6; variances 4 and 16, covariance 8; s² = 10.

    d = 2/√10. Var = .4 (16 + 256 + 128)/(8 · 100 · 2) + (20 − 16)/(10 · 2) = .1 + .2.
    """
    d, error = kernel.average_standardized(np.array([[2.0, 2], [4, 6], [6, 10]]))
    assert float(d) == pytest.approx(2 / math.sqrt(10))
    assert float(error) == pytest.approx(math.sqrt(0.3))


@pytest.mark.reference
def test_the_error_of_d_av_is_that_of_the_delta_method():
    """The law of sample moments of a normal pair: var(s²) = 2σ⁴/df, cov(s₁², s₂²) = 2σ₁₂²/df."""
    y = np.random.default_rng(3).normal(size=(12, 2)) @ np.array([[2.0, 1.0], [0.0, 1.5]]) + [0, 1]
    d, error = kernel.average_standardized(y)
    (first, shared), (_, second) = np.cov(y.T)
    df, square = len(y) - 1, (first + second) / 2
    moments = np.diag([first + second - 2 * shared, 2 * first**2, 2 * second**2]) / df
    moments[1, 2] = moments[2, 1] = 2 * shared**2 / df
    gradient = np.array([1 / math.sqrt(square), *[-float(d) / (4 * square)] * 2])
    assert float(error) == pytest.approx(math.sqrt(gradient @ moments @ gradient))


# ── Kendall's W ───────────────────────────────────────────────────────────────────────────────


@pytest.mark.reference
def test_w_is_that_of_three_executives():
    case = json.loads((REFERENCE / "kendall_w_siegel_applicants.json").read_text(encoding="utf-8"))
    scores = rank_scores(np.array(case["data"]["ranks"], dtype=float))
    w = float(kernel.concordance(scores))
    assert round(w, 2) == case["published"]["W"]
    assert w == pytest.approx(case["recomputed"]["W"], rel=1e-12)


@pytest.mark.reference
@pytest.mark.property
@given(st.lists(st.lists(st.integers(1, 4), min_size=3, max_size=3), min_size=2, max_size=8))
def test_w_with_ties_is_scipys_friedman_over_its_largest(rows):
    y = np.array(rows, dtype=float)
    w = float(kernel.concordance(rank_scores(y)))
    if (np.ptp(y, axis=1) == 0).all():
        assert np.isnan(w)
        return
    chi2 = stats.friedmanchisquare(*y.T).statistic
    assert w == pytest.approx(chi2 / (len(y) * 2), abs=1e-12)
    assert -1e-12 <= w <= 1 + 1e-12


@pytest.mark.reference
def test_w_is_the_mean_rank_correlation_and_its_bias():
    y = np.random.default_rng(4).normal(size=(6, 5))
    pairs = itertools.combinations(y, 2)
    mean = np.mean([stats.spearmanr(a, b).statistic for a, b in pairs])
    assert float(kernel.concordance(rank_scores(y))) == pytest.approx(1 / 6 + 5 / 6 * mean)


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_the_biases_that_are_taken_out_are_exact_without_ties(seed):
    """All 5⁵ resamples: their W averages W + (1 − W)/n, and less both biases r̄."""
    n = 5
    scores = rank_scores(np.random.default_rng(seed).normal(size=(n, 3)))
    w = float(kernel.concordance(scores))
    every = np.array(list(itertools.product(range(n), repeat=n)))
    resampled = kernel.concordance(scores[every])
    assert resampled.mean() == pytest.approx(w + (1 - w) / n)
    assert kernel.less_bias(resampled, w, n).mean() == pytest.approx((n * w - 1) / (n - 1))


def test_the_limit_of_full_agreement_by_hand():
    # n = 6: q = .025^(1/6) = .54075, (2q − 1)² = .006642; n = 13: q = .75295, .25593
    assert kernel.agreement_limit(6, 0.95) == pytest.approx(0.006642, abs=5e-6)
    assert kernel.agreement_limit(13, 0.95) == pytest.approx(0.25593, abs=5e-6)
    assert kernel.agreement_limit(5, 0.95) == 0


@pytest.mark.parametrize("common", [[1.0, 2, 3], [1.0, 1, 2], [1.0, 2, 2]])
@pytest.mark.parametrize("n", [6, 13, 30])
def test_no_orders_of_the_others_agree_less_than_the_limit(common, n):
    share = 0.025 ** (1 / n)
    scores = rank_scores(np.array(common)).astype(float)
    stretch = 8 / float(scores @ scores)  # −2, 0, 2 without ties
    limit = kernel.agreement_limit(n, 0.95, stretch)
    others = [rank_scores(np.array(c, dtype=float)) for c in itertools.product((1, 2, 3), repeat=3)]
    for other in others:
        mean = share * scores + (1 - share) * other
        spread = share * scores @ scores + (1 - share) * other @ other
        assert mean @ mean / spread >= limit - 1e-12


@pytest.mark.parametrize(
    ("kernel_of", "shape"),
    [
        (lambda y: kernel.robust_standardized(y, 0.2), (3, 4, 11)),
        (kernel.standardized, (3, 4, 11)),
        (lambda y: kernel.average_standardized(y)[0], (3, 4, 11, 2)),
        (lambda y: kernel.average_standardized(y)[1], (3, 4, 11, 2)),
        (lambda y: kernel.concordance(rank_scores(y)), (3, 4, 11, 5)),
    ],
    ids=["robust", "d_z", "d_av", "error of d_av", "W"],
)
def test_one_call_does_many_samples_and_changes_none(kernel_of, shape):
    y = np.random.default_rng(5).normal(size=shape)
    before = y.copy()
    found = kernel_of(y)
    assert found.shape == (3, 4)
    assert found[2, 1] == pytest.approx(float(kernel_of(y[2, 1])), rel=1e-13)
    np.testing.assert_array_equal(y, before)


def test_without_agreement_the_interval_less_bias_reaches_zero_and_the_plain_one_does_not():
    """400 tables of 8 random orders of 4 occasions, 499 resamples each: .95 less 4 errors."""
    rng = np.random.default_rng(6)
    reaches, plain = [], []
    for _ in range(400):
        scores = rank_scores(rng.normal(size=(8, 4)))
        w = float(kernel.concordance(scores))
        resampled = kernel.concordance(scores[rng.integers(8, size=(499, 8))])
        low = float(np.quantile(resampled, 0.025))
        reaches.append(kernel.less_bias(np.array(low), w, 8) <= 0)
        plain.append(low <= 1e-9)
    assert np.mean(reaches) >= 0.95 - 4 * math.sqrt(0.95 * 0.05 / 400)
    assert np.mean(plain) < 0.1
