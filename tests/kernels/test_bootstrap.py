"""The bootstrap against loops, SciPy, published intervals and the law of its own errors."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import special, stats

from robustrm.kernels import bootstrap, location, walsh
from tests.reference.cases import case
from tests.reference.checks_other import (
    MOUSE,
    SPATIAL,
    column,
    every_mouse_resample,
    mean,
    plug_in_error,
    plug_in_variance,
)


def trimmed(y):
    return location.trimmed_mean(np.swapaxes(y, -1, -2), 0.2)


def changes(y):
    """Trimmed mean, Hodges-Lehmann estimate and share of falls of every successive change."""
    d = np.swapaxes(y[..., 1:] - y[..., :-1], -1, -2)
    parts = (location.trimmed_mean(d, 0.2), walsh.pseudo_median(d), (d < 0).mean(axis=-1))
    return np.concatenate(parts, axis=-1)


ESTIMATORS = pytest.mark.parametrize("estimator", [mean, plug_in_variance, trimmed, changes])


def sample(n=9, k=3, seed=1):
    return np.random.default_rng(seed).lognormal(size=(n, k))


def tail(value, m=1):
    return bootstrap.Tails(np.full(m, value), np.full(m, value))


# ── resamples ─────────────────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize("generator", [np.random.PCG64, np.random.Philox, np.random.MT19937])
@pytest.mark.parametrize("block", [1, 2, 7, 100, 1000])
def test_the_rows_drawn_do_not_depend_on_the_block(generator, block):
    whole = next(bootstrap.resampled_rows(np.random.Generator(generator(3)), 11, 101, 101))
    blocks = list(bootstrap.resampled_rows(np.random.Generator(generator(3)), 11, 101, block))
    np.testing.assert_array_equal(np.concatenate(blocks), whole)
    assert max(map(len, blocks)) <= block
    assert set(np.unique(whole)) == set(range(11))


@ESTIMATORS
@pytest.mark.parametrize("block", [1, 2, 5, 64, 500])
def test_replicates_are_the_same_to_the_last_bit_whatever_the_block(estimator, block):
    y = sample()
    one, other = (
        bootstrap.replicates(y, estimator, draws=333, rng=np.random.default_rng(2), block=b)
        for b in (block, None)
    )
    np.testing.assert_array_equal(one, other)


@ESTIMATORS
def test_a_replicate_is_the_estimate_in_a_sample_of_whole_rows(estimator):
    y = sample()
    found = bootstrap.replicates(y, estimator, draws=50, rng=np.random.default_rng(4))
    (rows,) = bootstrap.resampled_rows(np.random.default_rng(4), len(y), 50, 50)
    np.testing.assert_allclose(found, [estimator(y[one]) for one in rows], rtol=1e-13)


@ESTIMATORS
def test_the_jackknife_leaves_out_one_row_at_a_time_in_many_samples_at_once(estimator):
    y = np.stack([sample(seed=s) for s in (1, 2)])
    found = bootstrap.jackknife(y, estimator)
    expected = [[estimator(np.delete(one, i, axis=0)) for i in range(9)] for one in y]
    np.testing.assert_allclose(found, expected, rtol=1e-13)


@pytest.mark.reference
def test_the_jackknife_error_of_a_mean_is_the_usual_one():
    y = sample()
    found = bootstrap.jackknife_se(bootstrap.jackknife(y, mean))
    np.testing.assert_allclose(found, stats.sem(y, axis=0), rtol=1e-12)


def test_no_block_holds_more_numbers_than_the_bound_however_many_the_draws():
    sizes = []

    def watched(y):
        sizes.append(y.size)
        return mean(y)

    bootstrap.replicates(sample(40, 5), watched, draws=9_999, rng=np.random.default_rng(1))
    assert bootstrap.NUMBERS / 2 < max(sizes) <= bootstrap.NUMBERS


# ── order statistics ──────────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize(
    ("draws", "level", "ranks"),
    # (B + 1)α = 5, 250, 2.525, 2.5, 0.05
    [(99, 0.9, (5, 95)), (9_999, 0.95, (250, 9_750)), (100, 0.95, (2, 99)), (49, 0.9, (2, 48)),
     (9, 0.99, (1, 9))],
)  # fmt: skip
def test_the_limits_are_order_statistics_rounded_outward(draws, level, ranks):
    shuffled = np.random.default_rng(1).permutation(np.arange(1.0, draws + 1))[:, None]
    low, high, degenerate = bootstrap.percentile(shuffled, level)
    assert (low[0], high[0]) == ranks
    assert not degenerate[0]


def test_undefined_replicates_count_as_beyond_both_limits():
    drawn = np.random.default_rng(1).normal(size=(99, 1))
    holes = drawn.copy()
    holes[:3] = np.nan
    low, high, _ = bootstrap.percentile(holes, 0.9)
    assert low == bootstrap.percentile(np.where(np.isnan(holes), -1e9, holes), 0.9).low
    assert high == bootstrap.percentile(np.where(np.isnan(holes), 1e9, holes), 0.9).high
    assert bootstrap.percentile(drawn, 0.9).low >= low
    holes[:6] = np.nan
    assert bootstrap.percentile(holes, 0.9).degenerate[0]


def test_leading_axes_are_data_sets():
    rng = np.random.default_rng(5)
    observed, se = rng.normal(size=(4, 3)), rng.uniform(1, 2, (4, 3))
    drawn = observed[:, None] + rng.normal(size=(4, 199, 3))
    drawn_se, left = rng.uniform(1, 2, drawn.shape), rng.normal(size=(4, 10, 3))
    of_t = (observed, se, drawn, drawn_se)
    for kernel, inputs in (
        (bootstrap.percentile, (drawn,)),
        (bootstrap.bca, (observed, drawn, left)),
        (bootstrap.bootstrap_t, of_t),
        (bootstrap.simultaneous_t, of_t),
    ):
        call: Any = kernel
        found = np.stack(call(*inputs, 0.9))
        for s in range(4):
            np.testing.assert_array_equal(found[:, s], np.stack(call(*(p[s] for p in inputs), 0.9)))


# ── published intervals ───────────────────────────────────────────────────────────────────────


def drawn(name, estimator, draws, seed=1):
    rng = np.random.default_rng(seed)
    return bootstrap.ordered(
        bootstrap.replicates(column(name), estimator, draws=draws, rng=rng, block=2_000)
    )


def error_of_both(tail_sd, draws, source_draws):
    """SD of the difference between two runs of other sizes, from that of ours."""
    return tail_sd * math.sqrt(1 + draws / source_draws)


@pytest.mark.reference
@pytest.mark.parametrize(("section", "source_draws"), [("published", 2_000), ("recomputed", 2e5)])
def test_limits_of_the_spatial_data_agree_within_the_error_of_both_sets_of_draws(
    section, source_draws
):
    # Efron & Tibshirani (1993), table 14.2, values from memory.
    draws, y = 50_000, column(SPATIAL)
    ascending = drawn(SPATIAL, plug_in_variance, draws)
    correction = bootstrap.bca_correction(
        plug_in_variance(y), ascending, bootstrap.jackknife(y, plug_in_variance)
    )
    z = special.ndtri(0.95)
    printed = case(SPATIAL).at(section)
    for tails, sds, limits in (
        (
            bootstrap.bca_tails(correction, 0.9),
            [bootstrap.bca_sd(correction, side, draws) for side in (-z, z)],
            printed["bca90"],
        ),
        (
            tail(0.05),
            [bootstrap.sampling_sd(np.array([0.05]), draws)] * 2,
            printed["percentile90"],
        ),
    ):
        shares = (tails.below, 1 - tails.above)
        for low, share, sd, limit in zip((True, False), shares, sds, limits, strict=True):
            both = error_of_both(sd, draws, source_draws)
            found = bootstrap.quantile_range(ascending, share, both, 3.0, low=low)
            assert found.low[0] <= limit <= found.high[0], (limit, found)
    if section == "published":
        # φ(z₀) SD(z₀) = √(p₀(1 − p₀)/B)
        error = math.sqrt(math.pi / 2 / source_draws)
        assert correction.z0[0] == pytest.approx(printed["z0"], abs=3 * error)


@pytest.mark.reference
def test_the_t_of_the_mice_agrees_with_the_printed_one_within_the_error_of_its_1000_draws():
    # Efron & Tibshirani (1993), section 12.5, values from memory: 1,000 draws.
    _, _, t, weights = every_mouse_resample()
    printed = case(MOUSE).at("published")
    order = np.argsort(t[:, 0])
    cumulative = np.cumsum(weights[order])
    sd = math.sqrt(0.05 * 0.95 / 1_000)
    for share, quantile, limit in (
        (0.05, printed["t05"], printed["ci90"][1]),
        (0.95, printed["t95"], printed["ci90"][0]),
    ):
        low, high = t[order, 0][np.searchsorted(cumulative, [share - 3 * sd, share + 3 * sd])]
        assert low <= quantile <= high
        y = column(MOUSE)
        ends = mean(y)[0] - np.array([high, low]) * plug_in_error(y)[0]
        assert ends[0] <= limit <= ends[1]


@pytest.mark.reference
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_drawn_limits_of_the_mice_agree_with_those_of_every_resample(seed):
    # The limits of all 24,310 distinct resamples; z = 4 for 3 seeds of 4 limits.
    draws, y = 20_000, column(MOUSE)
    rng = np.random.default_rng(seed)
    both = bootstrap.replicates(
        y, lambda s: np.concatenate([mean(s), plug_in_error(s)], axis=-1), draws=draws, rng=rng
    )
    ideal = case(MOUSE).at("recomputed")
    sd = bootstrap.sampling_sd(np.array([0.05]), draws)
    t = bootstrap.ordered(bootstrap.studentized(mean(y), both[:, :1], both[:, 1:]))
    for ascending, low, high in (
        (t, ideal["t05"], ideal["t95"]),
        (bootstrap.ordered(both[:, :1]), *ideal["percentile90"]),
    ):
        for share, expected, is_low in ((0.05, low, True), (0.95, high, False)):
            found = bootstrap.quantile_range(ascending, np.array([share]), sd, 4.0, low=is_low)
            assert found.low[0] - 1e-9 <= expected <= found.high[0] + 1e-9


@pytest.mark.reference
def test_ties_with_the_estimate_count_half_where_the_case_counts_them_above():
    # 0.34% of the mouse resamples have exactly the observed mean.
    means, _, _, weights = every_mouse_resample()
    observed = mean(column(MOUSE))[0]
    tied = np.isclose(means[:, 0], observed, rtol=1e-12)
    below = weights[(means[:, 0] < observed) & ~tied].sum()
    expected = case(MOUSE).at("recomputed.z0_strict_less")
    assert special.ndtri(below) == pytest.approx(expected, abs=1e-12)
    half = special.ndtri(below + weights[tied].sum() / 2)
    draws = 200_000
    ascending = drawn(MOUSE, mean, draws)
    share = bootstrap.share_below(np.array([observed]), ascending)
    error = math.sqrt(math.pi / 2 / draws)
    assert special.ndtri(share)[0] == pytest.approx(half, abs=4 * error)


# ── SciPy ─────────────────────────────────────────────────────────────────────────────────────


@pytest.mark.reference
@pytest.mark.parametrize("n", [8, 15, 40])
@pytest.mark.parametrize(
    ("statistic", "whole"),
    # whole numbers tie exactly in SciPy, whose comparison allows no rounding, for means alone
    [(np.mean, False), (np.std, False), (np.median, False), (np.mean, True)],
    ids=["mean", "SD", "median", "mean with ties"],
)
def test_bca_and_percentile_on_the_draws_of_scipy_agree_but_for_the_quantile_rule(
    n, statistic, whole
):
    # SciPy interpolates between the order statistics at (B − 1)α, so it lies near ours.
    x = np.random.default_rng(n).lognormal(1, 0.7, n)
    x = np.ceil(x) if whole else x
    left = np.array([[statistic(np.delete(x, i))] for i in range(n)])
    observed = np.array([statistic(x)])
    for method in ("BCa", "percentile"):
        library: Any = stats.bootstrap([x], statistic, method=method, n_resamples=1_999, rng=1)
        drawn = np.asarray(library.bootstrap_distribution)[:, None]
        ours = (
            bootstrap.bca(observed, drawn, left, 0.95)
            if method == "BCa"
            else bootstrap.percentile(drawn, 0.95)
        )
        theirs = library.confidence_interval
        ordered = np.sort(drawn[:, 0])
        for mine, other in ((ours.low[0], theirs.low), (ours.high[0], theirs.high)):
            first = np.searchsorted(ordered, mine, side="left")
            last = np.searchsorted(ordered, mine, side="right") - 1
            assert ordered[max(first - 2, 0)] <= other <= ordered[min(last + 2, 1_998)]


@pytest.mark.reference
def test_the_acceleration_is_a_sixth_of_the_skewness_over_root_n():
    # Of a mean: Efron & Tibshirani (1993), equation 14.15, with the biased skewness of SciPy.
    y = sample(12)
    found = bootstrap.acceleration(bootstrap.jackknife(y, mean))
    np.testing.assert_allclose(found, stats.skew(y, axis=0) / 6 / math.sqrt(12), rtol=1e-10)


# ── properties ────────────────────────────────────────────────────────────────────────────────

VALUES = st.lists(st.integers(1, 30).map(float), min_size=5, max_size=12).filter(
    lambda v: len(set(v)) > 2
)
LEVELS = st.sampled_from([0.8, 0.9, 0.95])


def all_limits(y, estimator, level, seed=7):
    """Percentile and BCa limits, in rows: (kind, side)."""
    rng = np.random.default_rng(seed)
    drawn = bootstrap.replicates(y, estimator, draws=199, rng=rng)
    left = bootstrap.jackknife(y, estimator)
    kinds = (
        bootstrap.percentile(drawn, level),
        bootstrap.bca(estimator(y), drawn, left, level),
    )
    return np.array([[kind.low[0], kind.high[0]] for kind in kinds])


@pytest.mark.property
@given(VALUES, LEVELS, st.sampled_from([0.5, 3.0, 1e6]), st.integers(-100, 100))
def test_limits_follow_a_change_of_unit_and_origin(values, level, unit, origin):
    y = np.array(values)[:, None]
    limits = all_limits(y, mean, level)
    moved = all_limits(unit * y + origin, mean, level)
    np.testing.assert_allclose(moved, unit * limits + origin, rtol=1e-9, atol=1e-9 * unit)


@pytest.mark.property
@given(VALUES, LEVELS)
def test_the_limits_of_the_opposite_are_the_mirror_image(values, level):
    y = np.array(values)[:, None]
    limits = all_limits(y, mean, level)
    mirrored = all_limits(-y, mean, level)
    np.testing.assert_allclose(mirrored, -limits[:, ::-1], rtol=1e-12)


@pytest.mark.property
@given(VALUES, LEVELS)
def test_percentile_limits_follow_any_rising_function(values, level):
    y = np.array(values)[:, None]
    plain = all_limits(y, mean, level)[0]
    logs = all_limits(y, lambda s: np.log(mean(s)), level)[0]
    np.testing.assert_allclose(np.exp(logs), plain, rtol=1e-12)


@pytest.mark.property
@given(VALUES)
def test_a_higher_level_gives_an_interval_that_holds_the_lower_one(values):
    y = np.array(values)[:, None]
    wide, narrow = all_limits(y, mean, 0.95), all_limits(y, mean, 0.8)
    both = np.isfinite(wide).all(axis=1) & np.isfinite(narrow).all(axis=1)
    assert (wide[both, 0] <= narrow[both, 0]).all()
    assert (wide[both, 1] >= narrow[both, 1]).all()


def t_parts(m=4, seed=3, draws=499):
    rng = np.random.default_rng(seed)
    observed, se = rng.normal(size=m), rng.uniform(0.5, 2, m)
    drawn = observed + rng.standard_t(5, size=(draws, m)) * se
    return observed, se, drawn, rng.uniform(0.5, 2, (draws, m))


def test_bootstrap_t_limits_by_hand():
    observed, se, drawn, drawn_se = t_parts()
    found = bootstrap.bootstrap_t(observed, se, drawn, drawn_se, 0.9)
    t = np.sort((drawn - observed) / drawn_se, axis=0)
    # (499 + 1) · 0.05 = 25
    np.testing.assert_allclose(found.low, observed - t[474] * se, rtol=1e-12)
    np.testing.assert_allclose(found.high, observed - t[24] * se, rtol=1e-12)


def test_simultaneous_limits_by_hand_hold_the_symmetric_limits_of_each():
    observed, se, drawn, drawn_se = t_parts()
    found = bootstrap.simultaneous_t(observed, se, drawn, drawn_se, 0.9)
    c = np.sort(np.abs((drawn - observed) / drawn_se).max(axis=1))[449]
    np.testing.assert_allclose(found.high, observed + c * se, rtol=1e-12)
    for j in range(4):
        at = slice(j, j + 1)
        alone = bootstrap.simultaneous_t(observed[at], se[at], drawn[:, at], drawn_se[:, at], 0.9)
        assert found.low[j] <= alone.low[0] < observed[j] < alone.high[0] <= found.high[j]


def test_an_estimand_without_standard_error_does_not_spoil_the_family():
    observed, se, drawn, drawn_se = t_parts()
    rest = bootstrap.simultaneous_t(
        observed[1:], se[1:].copy(), drawn[:, 1:], drawn_se[:, 1:].copy(), 0.9
    )
    se[0], drawn_se[:, 0] = 0, 0
    found = bootstrap.simultaneous_t(observed, se, drawn, drawn_se, 0.9)
    np.testing.assert_array_equal(found.degenerate, [True, False, False, False])
    np.testing.assert_array_equal(found.low[1:], rest.low)


# ── degenerate cases ──────────────────────────────────────────────────────────────────────────


def test_equal_replicates_have_no_limits_also_when_equal_but_for_rounding():
    drawn = np.full((99, 1), 0.3) + np.random.default_rng(1).choice([0, 1e-16], (99, 1))
    assert bootstrap.percentile(drawn, 0.9).degenerate[0]
    left = np.linspace(0, 1, 5)[:, None]
    assert bootstrap.bca(np.array([0.3]), drawn, left, 0.9).degenerate[0]


@pytest.mark.parametrize(
    ("observed", "left"),
    [
        (np.array([9.0]), np.linspace(0, 1, 5)[:, None]),  # beyond all replicates
        (np.array([0.0]), np.full((5, 1), 0.1 + 0.2)),  # no row moves the estimate
        # one row of 100 that moves it: a = 0.16, z₀ = 2.3 and z = 5.3, 1 − a(z₀ + z) < 0
        (np.array([0.98]), np.repeat([0.0, -1.0], [99, 1])[:, None]),
    ],
)
def test_bca_is_degenerate_where_its_formula_is_not_defined(observed, left):
    drawn = np.linspace(-1, 1, 999)[:, None]
    low, high, degenerate = bootstrap.bca(observed, drawn, left, 0.9999999)
    assert degenerate[0]
    assert np.isnan([low[0], high[0]]).all()
    assert not bootstrap.percentile(drawn, 0.9).degenerate[0]


def test_a_standard_error_that_is_rounding_alone_is_none():
    observed, se, drawn, drawn_se = t_parts(1)
    drawn_se[:2, 0] = 0, 1e-17
    drawn[:2] = 1.0
    t = bootstrap.studentized(observed, drawn, drawn_se)
    np.testing.assert_array_equal(np.flatnonzero(np.isnan(t)), [0, 1])
    assert bootstrap.bootstrap_t(observed, np.zeros(1), drawn, drawn_se, 0.9).degenerate[0]
    drawn_se[:30] = 0
    assert bootstrap.bootstrap_t(observed, se, drawn, drawn_se, 0.9).degenerate[0]


def test_infinite_replicates_are_numbers_until_a_limit_is_one():
    drawn = np.random.default_rng(1).normal(size=(99, 1))
    drawn[:4] = np.inf
    found = bootstrap.percentile(drawn, 0.9)
    assert np.isfinite(found.high[0])
    drawn[:5] = np.inf
    assert bootstrap.percentile(drawn, 0.9).degenerate[0]


# ── the error of the draws ────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize("z", [-1.3, 1.3])
@pytest.mark.parametrize(("z0", "a"), [(0.0, 0.0), (0.3, 0.1), (-0.4, 0.05)])
def test_the_error_of_a_bca_limit_is_that_of_many_runs(z, z0, a):
    # Normal replicates whose share below 0 is Φ(z₀): limits on the scale of probability.
    draws, runs = 1_999, 1_500
    drawn = np.random.default_rng(11).normal(-z0, 1, size=(runs, draws, 1))
    ascending = bootstrap.ordered(drawn)
    z0s = special.ndtri(bootstrap.share_below(np.zeros(1), ascending))
    moved = bootstrap.Correction(z0s, np.full_like(z0s, a)).moved(z)[0]
    shares = special.ndtr(moved)[:, 0]
    limits = [np.quantile(one[0], s) for one, s in zip(ascending, shares, strict=True)]
    found = special.ndtr(np.array(limits) + z0).std()
    expected = bootstrap.bca_sd(bootstrap.Correction(np.array([z0]), np.array([a])), z, draws)
    assert found == pytest.approx(expected[0], rel=0.12)


def test_the_range_of_a_quantile_holds_that_of_endless_draws_as_often_as_it_says():
    drawn = np.random.default_rng(2).normal(size=(4_000, 999, 1))
    share = np.full((4_000, 1), 0.975)
    sd = bootstrap.sampling_sd(share, 999)
    found = bootstrap.quantile_range(bootstrap.ordered(drawn), share, sd, 1.96, low=False)
    truth = special.ndtri(0.975)
    held = np.mean((found.low <= truth) & (truth <= found.high))
    assert 0.94 < held < 0.98
