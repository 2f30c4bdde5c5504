"""Kernels of the trimmed-mean tests against plain loops, and against the untrimmed tests."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy import stats

from robustrm.kernels import anova, location, trimmed
from robustrm.kernels.bootstrap import resampled_rows
from tests.methods import trimming_by_loops as loops

SEEDS = st.integers(0, 10**6)
TRIMS = st.sampled_from([0.0, 0.1, 0.15, 0.2, 0.25, 0.3, 0.4])


def sample(seed, n, k):
    """Correlated, skewed values of unequal spread."""
    rng = np.random.default_rng(seed)
    level = rng.normal(size=(n, 1))
    return np.exp(level + rng.normal(size=(n, k)) * np.linspace(0.4, 1.2, k))


def every_resample(n):
    """The rows of all nⁿ resamples, equally likely."""
    return np.array(list(itertools.product(range(n), repeat=n)), dtype=np.int64)


# ── all occasions ─────────────────────────────────────────────────────────────────────────────


@pytest.mark.property
@given(SEEDS, st.integers(3, 14), st.integers(2, 5), TRIMS)
def test_squares_f_and_epsilons_agree_with_plain_loops(seed, n, k, trim):
    y = sample(seed, n, k)
    h = trimmed.left(n, trim)
    assume(h >= 2)
    expected = loops.within_subject_f(y.tolist(), trim)
    squares = trimmed.trimmed_squares(y, trim)
    assert squares.qc == pytest.approx(expected.qc, rel=1e-9, abs=1e-12)
    assert squares.qe == pytest.approx(expected.qe, rel=1e-9)
    assert squares.f_ratio(h) == pytest.approx(expected.f, rel=1e-8, abs=1e-12)
    box, hf = trimmed.trimmed_epsilons(y, trim)
    assert box == pytest.approx(expected.box, rel=1e-7)
    assert hf == pytest.approx(expected.hf, rel=1e-6)


@pytest.mark.property
@given(SEEDS, st.integers(3, 14), st.integers(2, 5))
def test_without_trimming_all_is_the_analysis_of_variance(seed, n, k):
    y = sample(seed, n, k)
    squares, usual = trimmed.trimmed_squares(y, 0.0), anova.sums_of_squares(y)
    assert squares.qc == pytest.approx(usual.occasion, rel=1e-10)
    assert squares.qe == pytest.approx(usual.error, rel=1e-10)
    assert squares.f_ratio(n) == pytest.approx(usual.f_ratio(n, k), rel=1e-10)
    box, hf = trimmed.trimmed_epsilons(y, 0.0)
    gg = anova.epsilon_greenhouse_geisser(anova.contrast_covariance(y))
    assert box == pytest.approx(gg, rel=1e-10)
    assert hf == pytest.approx(anova.epsilon_huynh_feldt(gg, k, n - 1), rel=1e-9)
    assert trimmed.winsorized_covariance(y, 0.0) == pytest.approx(np.cov(y.T), rel=1e-10)


@pytest.mark.reference
@pytest.mark.property
@given(SEEDS, st.integers(3, 20), TRIMS)
def test_trimmed_means_and_winsorized_covariance_agree_with_scipy(seed, n, trim):
    y = sample(seed, n, 3)
    g = loops.cut(n, trim)
    share = (g + 0.5) / n  # which SciPy cuts down to g values, free of rounding
    pulled_in = np.array([stats.mstats.winsorize(x, (share, share)) for x in y.T])
    np.testing.assert_allclose(trimmed.winsorized_rows(y, trim), pulled_in.T)
    np.testing.assert_allclose(trimmed.winsorized_covariance(y, trim), np.cov(pulled_in))
    np.testing.assert_allclose(trimmed.trimmed_means(y, trim), stats.trim_mean(y, share, axis=0))


def test_the_epsilon_takes_n_and_not_h():
    """By hand: ε̂ = 0.8, n = 10, k = 3 gives (10·2·0.8 − 2)/(2·(9 − 1.6)) = 14/14.8."""
    assert anova.epsilon_huynh_feldt(np.array(0.8), 3, 9) == pytest.approx(14 / 14.8)
    y = sample(5, 10, 3)
    box, hf = trimmed.trimmed_epsilons(y, 0.2)
    with_n = (10 * 2 * box - 2) / (2 * (9 - 2 * box))
    with_h = (6 * 2 * box - 2) / (2 * (5 - 2 * box))
    assert with_n < 1
    assert hf == pytest.approx(with_n, rel=1e-12)
    assert abs(with_n - with_h) > 0.01


def test_the_epsilon_stays_within_its_bounds():
    for epsilon in trimmed.trimmed_epsilons(sample(1, 9, 2), 0.2):
        assert epsilon == pytest.approx(1)
    for seed, n in itertools.product(range(30), (3, 5, 9)):
        box, hf = trimmed.trimmed_epsilons(sample(seed, n, 4), 0.2)
        assert 1 / 3 - 1e-12 <= box <= 1 + 1e-12
        assert 1 / 3 <= hf <= 1


def test_two_occasions_have_f_equal_to_the_square_of_t():
    """Residuals of a row are ±half its centred difference, so Qe = SSD(w₂ − w₁)/2, Qc = hΔ²/2."""
    for seed, n, trim in itertools.product(range(8), (5, 8, 13), (0.0, 0.1, 0.2)):
        y = sample(seed, n, 2)
        shift = trimmed.trimmed_mean_difference(y, trim)
        f = trimmed.trimmed_squares(y, trim).f_ratio(trimmed.left(n, trim))
        assert f == pytest.approx((shift.value / shift.standard_error) ** 2, rel=1e-9)


# ── bootstrap ─────────────────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize(
    ("n", "k", "trim"), [(3, 3, 0.2), (4, 2, 0.2), (4, 3, 0.25), (4, 3, 0.0), (5, 3, 0.2)]
)
def test_all_resamples_are_counted_as_by_plain_loops(n, k, trim):
    y = sample(n * 10 + k, n, k).round(3)
    found = trimmed.bootstrap_t_exceedances(y, trim, [every_resample(n)])
    assert tuple(found) == loops.bootstrap_t(y.tolist(), trim)
    assert found.draws == n**n
    assert found.flat >= n  # a row n times has no residual variation


def test_ties_and_equal_values_are_counted_as_by_plain_loops():
    y = np.array([[1, 2, 2], [2, 2, 3], [3, 4, 3], [1, 1, 2.0]])
    for trim in (0.0, 0.25):
        found = trimmed.bootstrap_t_exceedances(y, trim, [every_resample(4)])
        assert tuple(found) == loops.bootstrap_t(y.tolist(), trim)


def test_the_size_of_the_blocks_changes_no_count():
    y = sample(3, 9, 3)
    counts = {
        tuple(
            trimmed.bootstrap_t_exceedances(
                y, 0.2, resampled_rows(np.random.default_rng(7), 9, 1000, block)
            )
        )
        for block in (1, 13, 1000, 5000)
    }
    assert len(counts) == 1
    assert counts.pop()[2] == 1000


def test_equal_trimmed_means_are_reached_by_every_resample():
    """The middle of each occasion averages 0.3; 0.2 + 0.4 is not 0.1 + 0.5 in binary."""
    y = np.array([[0.0, 0.7, 0.2], [0.1, 0.3, 1.0], [0.5, 0.1, 0.0], [0.9, 0.3, 0.4]])
    assert trimmed.trimmed_squares(y, 0.25).qc > 0
    found = trimmed.bootstrap_t_exceedances(y, 0.25, [every_resample(4)])
    assert found.at_least == found.draws == 256


# ── two occasions ─────────────────────────────────────────────────────────────────────────────


@pytest.mark.property
@given(SEEDS, st.integers(2, 20), TRIMS)
def test_shifts_and_their_errors_agree_with_plain_loops(seed, n, trim):
    assume(trimmed.left(n, trim) >= 2)
    y = sample(seed, n, 2)
    first, second = y.T.tolist()
    gaps = y[:, 1] - y[:, 0]
    for found, expected in (
        (trimmed.trimmed_mean_difference(y, trim), loops.trimmed_pair(first, second, trim)),
        (trimmed.difference_trimmed_mean(gaps, trim), loops.one_sample(gaps.tolist(), trim)),
    ):
        assert found.value == pytest.approx(expected.value, rel=1e-9, abs=1e-12)
        assert found.standard_error == pytest.approx(expected.error, rel=1e-6, abs=1e-9)
        assert expected.df == trimmed.left(n, trim) - 1
    nominal = trimmed.nominal_standard_error(gaps, trim)
    assert nominal == pytest.approx(loops.nominal_error(gaps.tolist(), trim), rel=1e-9)


@pytest.mark.reference
@pytest.mark.property
@given(SEEDS, st.integers(2, 20))
def test_without_trimming_both_are_the_paired_t_of_scipy(seed, n):
    y = sample(seed, n, 2)
    t = stats.ttest_rel(y[:, 1], y[:, 0]).statistic
    assume(abs(t) > 1e-6)
    for shift in (
        trimmed.trimmed_mean_difference(y, 0.0),
        trimmed.difference_trimmed_mean(y[:, 1] - y[:, 0], 0.0),
    ):
        assert shift.value / shift.standard_error == pytest.approx(t, rel=1e-10)


def test_the_two_estimands_are_different_quantities():
    """By hand, one cut at each end of five.

    The middle of the first occasion (2, 2.5, 3) is 2.5, that of the second (11, 12, 13) is 12;
    the middle of the differences 1, 9, 9, 9 and 47.5 is 9.
    """
    y = np.array([[1.0, 2], [2, 11], [3, 12], [4, 13], [2.5, 50]])
    assert trimmed.trimmed_mean_difference(y, 0.2).value == pytest.approx(9.5)
    assert trimmed.difference_trimmed_mean(y[:, 1] - y[:, 0], 0.2).value == pytest.approx(9)


# ── shapes, and what must not warn ────────────────────────────────────────────────────────────


def test_one_call_does_many_tables_and_changes_none():
    y = np.stack([sample(seed, 8, 3) for seed in range(6)]).reshape(2, 3, 8, 3)
    before = y.copy()
    squares = trimmed.trimmed_squares(y, 0.2)
    box, hf = trimmed.trimmed_epsilons(y, 0.2)
    shift = trimmed.trimmed_mean_difference(y[..., :2], 0.2)
    shapes = {a.shape for a in (squares.qc, squares.qe, squares.rounding, box, hf, *shift)}
    assert shapes == {(2, 3)}
    assert trimmed.trimmed_means(y, 0.2).shape == (2, 3, 3)
    assert trimmed.winsorized_covariance(y, 0.2).shape == (2, 3, 3, 3)
    one = trimmed.trimmed_squares(y[1, 2], 0.2)
    assert squares.f_ratio(6)[1, 2] == pytest.approx(float(one.f_ratio(6)), rel=1e-14)
    np.testing.assert_array_equal(y, before)


@pytest.mark.parametrize("n", [1, 2, 5])
def test_constants_and_single_rows_are_nan_and_nothing_warns(n):
    y = np.full((n, 3), 0.1)
    squares = trimmed.trimmed_squares(y, 0.2)
    assert np.isnan(squares.f_ratio(trimmed.left(n, 0.2)))
    trimmed.trimmed_mean_difference(y[:, :2], 0.2)
    trimmed.difference_trimmed_mean(y[:, 0], 0.2)
    assert all(np.isnan(epsilon) for epsilon in trimmed.trimmed_epsilons(np.zeros((3, 3)), 0.2))


@pytest.mark.parametrize("n", range(1, 12))
def test_a_cut_leaves_a_value_however_near_to_a_half_it_is(n):
    assert location.cut(n, math.nextafter(0.5, 0)) == (n - 1) // 2
    assert trimmed.left(n, math.nextafter(0.5, 0)) >= 1
