"""Importance sampling of far tails against exact ones; relabelled densities; blocks and memory."""

from __future__ import annotations

import itertools
import math
import tracemalloc
from typing import Any

import numpy as np
import pytest

from robustrm.kernels.null import corner
from robustrm.kernels.null.engine import law, tail
from robustrm.kernels.null.forms import centring, linear
from robustrm.kernels.null.importance import Weighed, mixture
from robustrm.kernels.null.orbit_means import log_orbit_means
from robustrm.kernels.null.problem import Problem
from robustrm.kernels.null.tables import permutation_tables, sign_tables
from robustrm.kernels.null.tilting import canonical, cumulants, stack, tilt_to

# Exact tails come from the engine, whose counts are checked against enumeration and published
# tables in test_null_enumeration.py and test_null_reference.py.


def centred(rng, n, k, shift):
    """Skewed values that rise over the occasions, less their subject's mean."""
    values = rng.lognormal(0, 0.6, size=(n, k)) * np.exp(np.linspace(0, shift, k))
    return values - values.mean(axis=1, keepdims=True)


def present(value: Any) -> Any:
    """Return what must be there."""
    assert value is not None
    return value


def within(p, found):
    """Whether the interval holds an exact p."""
    low, high = present(found.p_interval)
    return low <= p <= high


def ranks(rng, size, noise, *, tied=False, weighted=False):
    """Whole-number scores: twice the centred mid-ranks, times the subject's number if weighted."""
    n, k = size
    values = np.linspace(0, 2, k) + noise * rng.normal(size=(n, k))
    values = np.round(values, 0 if tied else 12)
    below = (values[:, :, None] > values[:, None, :]).sum(axis=2)
    equal = (values[:, :, None] == values[:, None, :]).sum(axis=2)
    scores = 2.0 * below + equal - k
    return scores * np.arange(1, n + 1)[:, None] if weighted else scores


def drawn(scores, **options):
    """Tail of a permuted table by importance sampling."""
    form = centring(scores.shape[1])
    return tail(
        permutation_tables(scores), scores.sum(axis=0), form, null="importance sampling", **options
    )


# ── two hundred tables ────────────────────────────────────────────────────────────────────────


def _kinds():
    """Name, tables and observed sum, again and again: what a far tail can be made of."""
    rng = np.random.default_rng(20)
    for n, k in itertools.cycle([(12, 3), (13, 3), (7, 4), (14, 3)]):
        yield "values", permutation_tables(s := centred(rng, n, k, rng.uniform(0.2, 1.4))), s
        for sizes in ((20, 3), (12, 4), (8, 5)):
            s = ranks(rng, sizes, rng.uniform(0.7, 3))
            yield "ranks", permutation_tables(s), s
        for sizes in ((16, 3), (20, 3), (9, 4)):
            s = ranks(rng, sizes, rng.uniform(0.7, 3), weighted=True)
            yield "weighted ranks", permutation_tables(s), s
        s = ranks(rng, (18, 3), rng.uniform(0.7, 2), tied=True)
        yield "tied ranks", permutation_tables(s), s
        s = centred(rng, 26, 3 + rng.integers(3), rng.uniform(0.1, 0.8))
        yield "mirrored rows", sign_tables(s), s
        s = ranks(rng, (15, 3), rng.uniform(0.7, 2), weighted=True)
        seen = rng.random(s.shape) > 0.1
        s = np.where(seen, s, 0.0)
        yield "missing cells", permutation_tables(s, observed=seen), s


@pytest.mark.slow
def test_within_ten_percent_of_the_exact_tail_on_two_hundred_tables():
    used: dict[str, int] = {}
    errors: list[float] = []
    covered, counted = [], 0
    for name, tables, scores in _kinds():
        form, observed = centring(scores.shape[1]), scores.sum(axis=0)
        exact = tail(tables, observed, form, null="exact").p_value
        if not 1e-8 <= exact <= 1e-2:
            continue
        found = tail(
            tables, observed, form, null="importance sampling", draws=20_000, rng=len(errors)
        )
        error = found.p_value / exact - 1
        if found.null == "exact":
            assert (found.how, abs(error) < 1e-9) == ("corner", True)
            counted += 1
            continue
        assert found.null == "importance sampling"
        used[name] = used.get(name, 0) + 1
        errors.append(error)
        covered.append(within(exact, found))
        assert present(found.effective_sample_size) > 1000
        if len(errors) == 210:
            break
    assert min(used.values()) >= 4, used
    assert len(used) == 6
    assert counted >= 20
    assert np.abs(errors).max() < 0.1
    assert np.mean(covered) >= 0.97
    assert abs(np.mean(errors)) < 4 * np.std(errors) / math.sqrt(len(errors))


@pytest.mark.parametrize("k", [3, 4, 5])
@pytest.mark.parametrize("weighted", [False, True])
def test_far_tails_of_ranks(k, weighted):
    scores = ranks(np.random.default_rng(k), ({3: 20, 4: 11, 5: 7}[k], k), 0.9, weighted=weighted)
    exact = tail(permutation_tables(scores), scores.sum(axis=0), centring(k), null="exact")
    found = drawn(scores, draws=20_000, rng=1)
    assert found.p_value == pytest.approx(exact.p_value, rel=0.1)
    if found.null == "importance sampling":
        assert within(exact.p_value, found)


def test_the_estimate_has_no_bias():
    """Mean of 200 estimates from 1,000 draws each, within 4 standard errors of the exact tail."""
    scores = ranks(np.random.default_rng(4), (20, 3), 0.9)
    null = present(law(permutation_tables(scores), centring(3)))
    p = null.at_least(float(centring(3).values(scores.sum(axis=0), exact=True))).p_value
    assert 1e-8 < p < 1e-3
    found = np.array([drawn(scores, draws=1_000, rng=seed).p_value for seed in range(200)])
    assert abs(found.mean() / p - 1) < 4 * found.std() / p / math.sqrt(200)
    assert found.std() / p < 0.1


@pytest.mark.parametrize("side", ["two-sided", "greater", "less"])
def test_linear_forms(side):
    differences = np.random.default_rng(8).normal(0.5, 1, size=36)
    tables = sign_tables(differences)
    for observed in (differences.sum(), -differences.sum(), 1.0):
        exact = tail(tables, observed, linear(1, side=side), null="exact").p_value
        found = tail(
            tables, observed, linear(1, side=side), null="importance sampling", draws=20_000, rng=2
        )
        assert found.p_value == pytest.approx(exact, rel=0.1)
        assert within(exact, found)


# ── what it says of itself ────────────────────────────────────────────────────────────────────


def test_the_result_says_how_it_was_found():
    scores = centred(np.random.default_rng(1), 20, 4, 0.8)
    found = drawn(scores, rng=1, thresholds=())
    assert (found.null, found.how, found.draws) == (
        "importance sampling",
        "importance sampling",
        20_000,
    )
    assert within(found.p_value, found)
    assert 1_000 < found.effective_sample_size < 20_000
    assert found.arrangements == 24**20
    assert math.exp(found.log_p) == pytest.approx(found.p_value, rel=1e-12)


def test_draws_go_on_while_a_threshold_is_in_doubt():
    scores = centred(np.random.default_rng(1), 20, 3, 0.8)
    first = drawn(scores, rng=1, thresholds=())
    doubt = drawn(scores, rng=1, thresholds=(first.p_value,))
    assert (first.draws, doubt.draws) == (20_000, 200_000)
    assert doubt.effective_sample_size > 5 * first.effective_sample_size
    width, wider = (np.ptp(np.log(found.p_interval)) for found in (doubt, first))
    assert width < wider / 2


def test_the_interval_is_that_of_a_mean_of_weights():
    # 4 draws in the tail with weights 1, 1, 2, 2, and the observed arrangement with weight 1.
    found = Weighed(math.log(1e-5), 99, 7.0, 11.0)
    assert math.exp(found.log_p) == pytest.approx(7e-7, rel=1e-12)
    assert found.effective == pytest.approx(49 / 11)
    spread = math.sqrt(11 / 49 - 1 / 100)
    low, high = found.interval(0.99)
    assert math.log(high / low) == pytest.approx(2 * 2.5758293 * spread, rel=1e-6)
    doubled = Weighed(math.log(1e-5), 99, 7.0, 11.0, sides=2)
    assert math.exp(doubled.log_p) == pytest.approx(14e-7, rel=1e-12)


def test_p_is_never_zero_however_far():
    # 400 subjects ranked with little noise: p near 1e-260.
    scores = ranks(np.random.default_rng(3), (400, 3), 1.0)
    found = drawn(scores, draws=5_000, rng=1)
    exact = present(law(permutation_tables(scores), centring(3))).at_least(
        float(centring(3).values(scores.sum(axis=0), exact=True))
    )
    assert 0 < found.p_value <= 1
    assert found.log_p == pytest.approx(exact.log_p, abs=0.1)
    assert exact.log_p < -200


@pytest.mark.parametrize("k", [3, 4])
def test_a_table_without_movement_has_p_one(k):
    found = drawn(np.zeros((5, k)))
    assert (found.p_value, found.null) == (1.0, "exact")


def test_a_score_that_is_no_number_has_no_p():
    scores = np.full((5, 3), np.nan)
    assert math.isnan(drawn(scores).p_value)


def test_rows_too_long_to_list_have_no_p():
    assert math.isnan(drawn(np.tile(np.arange(9.0), (4, 1))).p_value)


# ── repeatable, bounded ───────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize("mirrored", [False, True])
def test_the_block_changes_nothing(mirrored):
    scores = centred(np.random.default_rng(1), 40 if mirrored else 20, 4, 0.4)
    tables = sign_tables(scores) if mirrored else permutation_tables(scores)

    def found(block):
        return tail(
            tables,
            scores.sum(axis=0),
            centring(4),
            null="importance sampling",
            draws=3_000,
            rng=8,
            block=block,
        )

    results = [found(block) for block in (None, 1, 7, 1_000, 2_999)]
    assert results[0].null == "importance sampling"
    assert all(result == results[0] for result in results)
    assert results[0] == found(None)
    assert results[0].p_value != drawn(scores, draws=3_000, rng=9).p_value


def test_order_and_labels_play_no_part():
    rng = np.random.default_rng(1)
    scores = ranks(rng, (20, 4), 1.0)
    moved = scores[:, rng.permutation(4)]
    assert drawn(moved, rng=1).p_value == pytest.approx(drawn(scores, rng=1).p_value, rel=1e-9)


@pytest.mark.slow
def test_memory_does_not_grow_with_the_draws():
    scores = centred(np.random.default_rng(1), 20, 4, 0.8)
    peaks = []
    for draws in (20_000, 200_000):
        tracemalloc.start()
        drawn(scores, draws=draws, rng=1)
        peaks.append(tracemalloc.get_traced_memory()[1])
        tracemalloc.stop()
    assert peaks[1] < 1.1 * peaks[0]
    assert peaks[1] < 100e6


# ── the parts ─────────────────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize(
    "classes", [((0, 1, 2),), ((0, 1), (2,)), ((0, 3), (1, 2)), ((0, 1, 2, 3, 4),), ((0,), (1,))]
)
def test_relabelled_means_are_those_of_all_relabellings(classes):
    rng = np.random.default_rng(2)
    d = sum(map(len, classes))
    tilts, sums = 3 * rng.normal(size=(4, d)), 5 * rng.normal(size=(6, d))
    for part in classes:
        tilts[:, part], sums[:, part] = np.sort(tilts[:, part]), np.sort(sums[:, part])
    orders = []
    for places in itertools.product(*(itertools.permutations(part) for part in classes)):
        order = np.arange(d)
        for part, place in zip(classes, places, strict=True):
            order[list(part)] = place
        orders.append(order)
    every = np.stack([sums[:, order] @ tilts.T for order in orders])
    expected = np.log(np.exp(every).mean(axis=0))
    np.testing.assert_allclose(log_orbit_means(tilts, sums, classes), expected, rtol=1e-9)


def test_relabelled_means_do_not_overflow():
    c, s = np.array([[-400.0, 0.0, 400.0]]), np.array([[-9.0, 1.0, 8.0]])
    # Next to the sorted order all others vanish: 400 * 17 less log 3!.
    expected = 400 * 17 - math.log(6)
    assert log_orbit_means(c, s, ((0, 1, 2),))[0, 0] == pytest.approx(expected, rel=1e-12)


def test_the_density_of_the_mixture_adds_up_to_one():
    """Sum of q(s) over all arrangements, each with its null probability."""
    rng = np.random.default_rng(5)
    for scores in (centred(rng, 4, 3, 1.0), ranks(rng, (3, 4), 1.0)):
        k = scores.shape[1]
        problem = Problem(canonical(permutation_tables(scores)), centring(k))
        most = problem.form.values(present(problem.aligned_sum()), exact=False)
        proposal = mixture(problem, stack(problem.tables), 0.7 * math.sqrt(most))
        rows = [row.vectors for row in problem.rows]
        sums = np.array([np.sum(chosen, axis=0) for chosen in itertools.product(*rows)])
        assert np.exp(proposal.log_density(sums)).mean() == pytest.approx(1, rel=1e-10)


def test_cumulants_are_those_of_all_arrangements():
    scores = ranks(np.random.default_rng(6), (3, 3), 1.0, weighted=True)
    tables = stack(permutation_tables(scores))
    c = np.array([0.3, -0.1, 0.7])
    values = np.einsum("d,gmd->gm", c, tables.vectors)[None]
    found = cumulants(np.array([0.4]), values, tables.logs, tables.counts)
    every = [
        sum(np.array(order) @ c for order in chosen)
        for chosen in itertools.product(*(list(itertools.permutations(row)) for row in scores))
    ]
    weights = np.exp(0.4 * np.array(every))
    mean = np.average(every, weights=weights)
    assert found.log[0] == pytest.approx(np.log(weights.mean()), rel=1e-12)
    assert found.mean[0] == pytest.approx(mean, rel=1e-12)
    variance = np.average(np.square(every - mean), weights=weights)
    assert found.variance[0] == pytest.approx(variance, rel=1e-12)


def test_the_tilt_brings_the_mean_to_any_place_within_reach():
    values: Any = np.tile(np.array([[-1.0, 1.0]]), (5, 30, 1)) * np.arange(1.0, 31)[:, None]
    logs, counts = np.full((30, 2), math.log(0.5)), np.ones(30)
    places = np.array([-464.9, -300.0, 0.0, 1e-3, 464.999])
    tilts = tilt_to(places, values, logs, counts)
    # K'(t) of signed ranks in closed form: sum of r tanh(r t).
    r = np.arange(1.0, 31)
    np.testing.assert_allclose((r * np.tanh(np.outer(tilts, r))).sum(axis=1), places, atol=1e-8)


def test_equal_rows_in_another_order_share_a_table():
    rows = permutation_tables([[3.0, 1.0, 2.0], [1.0, 2.0, 3.0], [2.0, 2.0, 5.0]])
    assert stack(rows).counts.tolist() == [2, 1]


def test_without_the_count_the_corner_is_missed(monkeypatch):
    """Why it is there: draws near the corner scatter, and the interval says so."""
    scores = centred(np.random.default_rng(3), 10, 3, 4.0)
    tables, observed = permutation_tables(scores), scores.sum(axis=0)
    exact = tail(tables, observed, centring(3), null="exact").p_value
    assert exact < 1e-6
    counted = drawn(scores, rng=1)
    assert (counted.how, counted.p_value) == ("corner", pytest.approx(exact, rel=1e-10))
    monkeypatch.setattr(corner, "log_share", lambda *_, **__: None)
    found = drawn(scores, draws=20_000, rng=1)
    assert found.null == "importance sampling"
    assert found.effective_sample_size < 1_000
    assert found.p_interval[1] > 1.1 * found.p_value
