"""Bootstrap intervals of a table: against SciPy, and what they do where they cannot be made."""

from __future__ import annotations

import csv
import itertools
import json
import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

import robustrm as rm
from robustrm.kernels import bootstrap, location
from robustrm.methods.bootstrap_notes import HELD
from robustrm.results import note_codes
from tests.methods.tables import present, raw

METHODS = pytest.mark.parametrize("method", ["percentile", "bca", "t"])
ERROR = "bootstrap error"
COVERAGE = Path(__file__).parents[2] / "docs" / "evidence" / "coverage.csv"


def change(y):
    """Mean change from the first to the second occasion."""
    return (y[..., 1] - y[..., 0]).mean(axis=-1)[..., None]


def median_change(y):
    return np.median(y[..., 1] - y[..., 0], axis=-1)[..., None]


def trimmed_changes(y):
    """Trimmed mean of the differences of every pair of occasions."""
    pairs = itertools.combinations(range(y.shape[-1]), 2)
    changes = [location.trimmed_mean(y[..., b] - y[..., a], 0.2) for a, b in pairs]
    return np.stack(changes, axis=-1)


def standardized(y):
    d = y[..., 1] - y[..., 0]
    return (d.mean(axis=-1) / d.std(axis=-1, ddof=1))[..., None]


def skewed(n=20, k=3, seed=3):
    """Invent a skewed marker that falls over the occasions."""
    rng = np.random.default_rng(seed)
    level = rng.lognormal(1, 1, size=(n, 1))
    return np.round(level * rng.lognormal(-0.2 * np.arange(k), 0.5, size=(n, k)) + 0.5, 2)


def one(table, estimator=change, **options) -> rm.Estimate:
    (estimate,) = rm.bootstrap_interval(table, estimator, **{"rng": 1, **options})
    return estimate


def limits(estimate: rm.Estimate) -> tuple[float, float]:
    return present(estimate.low), present(estimate.high)


def note(estimate: rm.Estimate, code: str) -> rm.Note:
    return next(n for n in estimate.notes if n.code == code)


# ── against SciPy ─────────────────────────────────────────────────────────────────────────────


@pytest.mark.reference
@pytest.mark.parametrize("method", ["percentile", "bca"])
@pytest.mark.parametrize("estimator", [change, trimmed_changes], ids=["mean", "trimmed"])
def test_limits_agree_with_scipy_within_the_error_of_both_sets_of_draws(method, estimator):
    y = skewed(k=2)
    ours = one(raw(y), estimator, method=method, draws=20_000)
    library: Any = stats.bootstrap(
        (y[:, 0], y[:, 1]),
        lambda a, b, axis=-1: estimator(np.stack([a, b], axis=-1))[..., 0],
        paired=True,
        vectorized=True,
        method="BCa" if method == "bca" else method,
        n_resamples=20_000,
        rng=2,
    )
    # The shares below a limit differ by √2 of the error of one run; z = 4.
    drawn = np.sort(np.asarray(library.bootstrap_distribution))
    expected = library.confidence_interval
    for limit, other in zip(limits(ours), (expected.low, expected.high), strict=True):
        share = np.searchsorted(drawn, other) / drawn.size
        sd = math.sqrt(share * (1 - share) / drawn.size)
        sd *= 2 if method == "bca" else 1  # z₀ is drawn too
        reach = 4 * math.sqrt(2) * sd
        low, high = np.quantile(drawn, [share - reach, share + reach])
        assert low <= limit <= high
    assert ours.value == pytest.approx(estimator(y)[0], rel=1e-12)
    assert ours.kind == method


@pytest.mark.reference
def test_the_t_limits_of_a_mean_are_those_of_the_usual_standard_error():
    # The jackknife error of a mean is s/√n: the same t in every resample.
    table = raw(skewed())

    def usual(y):
        d = y[..., 1] - y[..., 0]
        return stats.sem(d, axis=-1)[..., None]

    own, given_one = one(table, method="t"), one(table, method="t", standard_error=usual)
    assert limits(own) == pytest.approx(limits(given_one), rel=1e-9)
    assert own.kind == "bootstrap-t"


def test_bootstrap_t_limits_by_hand():
    y = skewed(8, 2)
    table = raw(y)
    found = one(table, method="t", draws=199, level=0.9)
    rows = table.comparable().values
    d = rows[:, 1] - rows[:, 0]
    (picked,) = bootstrap.resampled_rows(np.random.default_rng(1), 8, 199, 199)
    drawn = d[picked]
    t = (drawn.mean(axis=1) - d.mean()) / stats.sem(drawn, axis=1)
    assert found.low == pytest.approx(d.mean() - np.sort(t)[189] * stats.sem(d), rel=1e-9)
    assert found.high == pytest.approx(d.mean() - np.sort(t)[9] * stats.sem(d), rel=1e-9)


# ── the same draws ────────────────────────────────────────────────────────────────────────────


@METHODS
@pytest.mark.parametrize("numbers", [1, 4_000, 1 << 20])
def test_the_same_seed_gives_the_same_answer_whatever_the_block(method, numbers, monkeypatch):
    table = raw(skewed(10, 3))
    options: dict[str, Any] = {"method": method, "draws": 199, "rng": 5}
    expected = rm.bootstrap_interval(table, trimmed_changes, **options)
    monkeypatch.setattr(bootstrap, "NUMBERS", numbers)
    assert rm.bootstrap_interval(table, trimmed_changes, **options) == expected


@METHODS
def test_order_and_names_of_the_subjects_play_no_part(method):
    y = skewed(10)
    other = raw(y[::-1], subjects=[f"P{i}" for i in range(10)])
    assert one(raw(y), method=method) == one(other, method=method)


def test_the_replicates_are_those_behind_the_limits():
    table = raw(skewed())
    drawn = rm.bootstrap_replicates(table, trimmed_changes, draws=999, rng=4)
    found = rm.bootstrap_interval(table, trimmed_changes, draws=999, rng=4)
    assert drawn.shape == (999, 3)
    ordered = np.sort(drawn, axis=0)
    # (999 + 1) · 0.025 = 25
    assert [e.low for e in found] == ordered[24].tolist()
    assert [e.high for e in found] == ordered[974].tolist()


def test_the_jackknife_in_every_resample_stays_within_the_block():
    sizes = []

    def watched(y):
        sizes.append(y.size)
        return change(y)

    one(raw(skewed(25, 4)), watched, method="t", draws=999)
    assert max(sizes) <= bootstrap.NUMBERS


@pytest.mark.property
@settings(max_examples=25)
@given(st.sampled_from(["percentile", "bca", "t"]), st.integers(0, 50), st.floats(0.1, 50))
def test_limits_follow_a_change_of_unit(method, seed, unit):
    y = skewed(7, 2, seed)
    table = rm.OccasionTable.from_array(y, occasions=["a", "b"])
    plain = one(table, method=method, draws=199)
    turned = one(table, lambda s: -unit * change(s), method=method, draws=199)
    low, high = limits(plain)
    assert limits(turned) == pytest.approx((-unit * high, -unit * low), rel=1e-9)


def test_a_higher_level_gives_a_wider_interval():
    table = raw(skewed())
    for method in ("percentile", "bca", "t"):
        (a, b), (c, d) = (limits(one(table, method=method, level=v)) for v in (0.99, 0.8))
        assert a < c < d < b


def test_limits_that_hold_together_reach_beyond_symmetric_ones_of_each():
    table = raw(skewed(k=4))
    options: dict[str, Any] = {"method": "t", "simultaneous": True, "draws": 999, "rng": 1}
    family = rm.bootstrap_interval(table, trimmed_changes, **options)
    for j, member in enumerate(family):
        alone = one(table, lambda y, j=j: trimmed_changes(y)[..., j : j + 1], **options)
        assert present(member.low) <= present(alone.low) < member.value
        assert member.value < present(alone.high) <= present(member.high)
        assert member.kind == "simultaneous bootstrap-t"
        assert "6 intervals hold 95% together" in str(note(member, "simultaneous intervals"))


# ── scale, names, limits, missing ─────────────────────────────────────────────────────────────


@METHODS
def test_back_transformed_limits_are_the_exponentials_of_those_of_the_logs(method):
    table = raw(skewed()).log()
    logs, ratio = (one(table, method=method, back_transform=back) for back in (False, True))
    assert limits(ratio) == pytest.approx(np.exp(limits(logs)), rel=1e-12)
    assert ratio.value == pytest.approx(math.exp(logs.value), rel=1e-12)
    assert (logs.scale, ratio.scale, ratio.neutral) == ("raw", "log", 1.0)


def test_a_subject_without_every_value_is_left_out():
    y = skewed(8)
    gap = np.vstack([y, [[1.0, np.nan, 2.0]]])
    assert one(raw(gap)) == one(raw(y))


def test_estimates_are_named():
    table = raw(skewed())
    assert [e.name for e in rm.bootstrap_interval(table, trimmed_changes, draws=99, rng=1)] == [
        "estimate 1",
        "estimate 2",
        "estimate 3",
    ]
    assert one(table, draws=99).name == "estimate"
    assert one(table, draws=99, names=["mean change"]).name == "mean change"


def test_an_estimate_survives_json():
    plain = one(raw(skewed()), method="bca").to_dict()
    assert json.loads(json.dumps(plain, allow_nan=False)) == plain


def limited(values, limit):
    y = np.array(values, dtype=float)
    return raw(np.maximum(y, limit), below=y < limit, lower_limit=limit)


def test_values_below_the_limit_enter_by_the_substitute_and_the_range_is_told():
    rows = [[2.0, 0.5], [3.0, 2.5], [4.0, 3.0], [5.0, 2.0], [6.0, 4.5], [3.5, 3.0]]
    table = limited(rows, 1.0)
    # differences −2 + f, −0.5, −1, −3, −1.5, −0.5 with f of the limit 1 entered
    for rule, f in (("half", 0.5), ("limit", 1.0)):
        found = one(table, substitute=rule)
        assert found.value == pytest.approx((-8.5 + f) / 6, rel=1e-12)
        # f from 0.01 to 1: −8.49/6 and −7.5/6
        assert "estimate −1.42 to −1.25" in note(found, "substitutes").fact
    assert "substitutes" not in note_codes(one(table.comparable().substitute("half")).notes)


@pytest.mark.parametrize("scale", ["raw", "log"])
def test_with_most_of_an_occasion_below_the_limit_only_what_does_not_hang_on_it_is_estimated(
    scale,
):
    rows = [[2.0, 0.5], [3.0, 0.5], [4.0, 0.5], [5.0, 0.5], [6.0, 4.5], [3.5, 4.0]]

    def two(y):
        fell = (y[..., 1] < y[..., 0]).mean(axis=-1)
        return np.stack([change(y)[..., 0], fell], axis=-1)

    mean, share = rm.bootstrap_interval(limited(rows, 1.0).on_scale(scale), two, rng=1)
    assert math.isnan(mean.value)
    assert (mean.low, mean.high, mean.level) == (None, None, None)
    assert note_codes(mean.notes) == ("mostly beyond the limit",)
    assert share.value == pytest.approx(5 / 6)
    assert limits(share)[1] == 1


# ── what takes the place of an interval ───────────────────────────────────────────────────────


def rows_of(differences):
    return raw([[10.0, 10.0 + d] for d in differences])


@METHODS
def test_when_all_resamples_agree_there_is_no_interval(method):
    found = one(rows_of([2, 2, 2, 2, 2]), method=method)
    assert (found.value, found.low, found.high, found.level) == (2, None, None, None)
    assert found.kind == "none"
    assert note_codes(found.notes) == ("no bootstrap interval",)
    assert "interval not estimable" in str(found)


@pytest.mark.parametrize(("method", "title"), [("bca", "BCa"), ("t", "bootstrap-t")])
def test_a_median_that_no_subject_moves_falls_back_to_the_percentile_interval(method, title):
    table = rows_of([1, 2, 2, 2, 2, 3, 0])
    found = one(table, median_change, method=method)
    assert found.kind == "percentile"
    assert limits(found) == limits(one(table, median_change))
    fact = note(found, "fall-back interval").fact
    assert fact.startswith(f"The {title} interval is not defined")


def test_an_estimate_beyond_all_resamples_has_no_bca_interval():
    # Distinct rows are rewarded: of 20²⁰ resamples, 1 in 40 million has 20 of them.
    def spread_out(y):
        d = np.sort(y[..., 1] - y[..., 0], axis=-1)
        distinct = (np.diff(d, axis=-1) > 0).sum(axis=-1)
        return (d.mean(axis=-1) * 1e-3 + distinct)[..., None]

    found = one(rows_of(range(20)), spread_out, method="bca")
    assert found.kind == "percentile"
    assert "lie on one side" in note(found, "fall-back interval").fact


def test_a_family_takes_no_other_kind_in():
    table = rows_of([1, 2, 2, 2, 2, 3, 0])

    def two(y):
        return np.concatenate([change(y), median_change(y)], axis=-1)

    mean, median = rm.bootstrap_interval(table, two, method="t", simultaneous=True, rng=1)
    assert mean.kind == "simultaneous bootstrap-t"
    assert "1 interval holds" in note(mean, "simultaneous intervals").fact
    assert (median.kind, median.low) == ("none", None)


def test_resamples_without_an_estimate_are_told_and_counted_against_the_interval():
    # Of 5⁵ resamples, 5 hold one subject five times: 0/0 or a spread of zero.
    table = rows_of([0, 1, 2, 4, 7])
    found = one(table, lambda y: standardized(y) * 0 + change(y), draws=20_000)
    drawn = rm.bootstrap_replicates(
        table, lambda y: standardized(y) * 0 + change(y), draws=20_000, rng=1
    )
    count = int(np.isnan(drawn).sum())
    assert 10 < count < 70  # 32 expected
    assert note(found, "undefined resamples").fact.startswith(f"{count} of 20000 resamples")
    assert found.low == np.sort(np.where(np.isnan(drawn), -np.inf, drawn), axis=0)[499]
    assert found.high == np.sort(np.where(np.isnan(drawn), np.inf, drawn), axis=0)[-500]


def test_a_bca_limit_in_the_extreme_tail_says_so():
    table = rows_of([0.1, 0.2, 0.3, 0.2, 0.4, 0.1, 30.0, 0.2])
    found = one(table, method="bca", draws=999, level=0.99)
    assert found.kind == "bca"
    assert "upper limit asks" in note(found, "extreme resample").fact
    drawn = rm.bootstrap_replicates(table, change, draws=999, rng=1)
    assert found.high == drawn.max()


def test_too_few_draws_to_tell_their_error_are_said_to_be_that():
    # (99 + 1)(0.025 − 1.96 · 0.0157) < 0: the lowest of 99 may not be low enough.
    fact = note(one(raw(skewed()), draws=99), ERROR).fact
    assert fact.endswith("99 resamples, too few to tell how far more would move them.")


def test_few_subjects_are_told_what_to_expect():
    for n, told in ((19, True), (20, False)):
        for method in ("percentile", "bca", "t"):
            codes = note_codes(one(raw(skewed(n)), method=method).notes)
            assert ("bootstrap coverage" in codes) is told


def test_what_to_expect_is_what_the_table_of_coverage_says():
    with COVERAGE.open(encoding="utf-8", newline="") as file:
        rows = [
            row
            for row in csv.DictReader(file)
            if int(row["n"]) <= 20
            and row["errors"] != "normal"
            and row["estimand"] in ("mean", "means")
        ]
    names = {"bca": "BCa", "simultaneous bootstrap-t": "simultaneous"}
    for kind, told in HELD.items():
        name = f"bootstrap_interval, {names.get(kind, kind)}"
        found = [float(row["coverage"]) for row in rows if row["interval"] == name]
        assert len(found) >= 9
        assert (min(found), max(found)) == pytest.approx(told, abs=0.006)


@METHODS
def test_the_error_of_the_draws_surrounds_the_limits_and_shrinks_with_more(method):
    table = raw(skewed(12)).log()
    widths = []
    for draws in (999, 19_999):
        found = one(table, method=method, draws=draws)
        words = note(found, ERROR).fact.replace("−", "-").rstrip(".").split()
        numbers = [float(w) for w in words if w.lstrip("-").replace(".", "", 1).isdigit()]
        assert numbers[0] == draws
        first, last, third, fourth = numbers[1:]
        low, high = limits(found)
        assert first - 5e-4 <= low <= last + 5e-4
        assert third - 5e-4 <= high <= fourth + 5e-4
        widths.append((last - first, fourth - third))
    assert widths[1][0] < widths[0][0]
    assert widths[1][1] < widths[0][1]


# ── refusals ──────────────────────────────────────────────────────────────────────────────────

BAD_ESTIMATORS = [
    (lambda y: y.mean(), r"shape \(6, 3\) must give \(m,\), got \(\)\. Add a last axis"),
    (lambda y: y.mean(axis=0), r"shape \(2, 6, 3\) must give \(2, 3\), got \(6, 3\)"),
    (lambda y: y - 1, r"must give \(m,\), got \(6, 3\)"),
    (lambda y: y.reshape(6, 3).mean(axis=0), r"got ValueError: cannot reshape"),
    (lambda y: (y - y.mean()).max(axis=-2), "the same estimates alone and among others"),
    (lambda y: np.random.default_rng().normal(size=(*y.shape[:-2], 1)), "the same estimates"),
    (3, "`estimator` must be a function of an array, got 3"),
    (lambda y: np.log(y - 100).mean(axis=-2), "finite numbers for the observed values, got nan"),
    (lambda y: change(y) / 0, "finite numbers for the observed values, got -?inf for 'estimate'"),
]


@pytest.mark.parametrize(("estimator", "message"), BAD_ESTIMATORS)
def test_an_estimator_of_another_form_is_refused_in_words(estimator, message):
    with pytest.raises(rm.ArgumentError, match=message):
        one(raw(skewed(6)), estimator)


@pytest.mark.parametrize("n", [2, 3])
def test_a_wrong_axis_is_seen_also_in_a_square_table(n):
    table = raw(np.arange(n * n, dtype=float).reshape(n, n) ** 2)
    for axis in (0, 1):
        with pytest.raises(rm.ArgumentError, match="`estimator` must"):
            one(table, lambda y, axis=axis: y.mean(axis=axis))


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"method": "BCA"}, "`method` must be one of 'percentile', 'bca', 't', got 'BCA'"),
        ({"level": 95}, "Did you mean 0.95"),
        ({"draws": 50}, "`draws` must be at least 99 for limits at level 0.95, got 50"),
        ({"draws": 999, "level": 0.999}, "`draws` must be at least 1999"),
        ({"draws": 99.5}, "`draws` must be a whole number"),
        ({"names": ["a", "b"]}, "one name for each of the 1 estimates, got 2"),
        ({"standard_error": change}, "`standard_error` must be left out with method 'percentile'"),
        ({"simultaneous": True, "method": "bca"}, "`simultaneous` must be False with method 'bca'"),
        ({"back_transform": True}, "Start from table.log()"),
        ({"substitute": "third"}, "must be one of 'half', 'root2', 'limit', got 'third'"),
        (
            {"method": "t", "standard_error": trimmed_changes},
            r"`standard_error` must map samples \(..., n, k\) to \(..., 1\)",
        ),
    ],
)
def test_a_bad_option_is_refused_in_words(options, message):
    with pytest.raises(rm.ArgumentError, match=message):
        one(raw(skewed(6)), **options)


def test_one_complete_subject_is_too_few():
    table = raw([[1.0, 2.0], [3.0, np.nan]])
    for call in (rm.bootstrap_interval, rm.bootstrap_replicates):
        with pytest.raises(rm.TooFewError, match="at least 2 subjects with all 2 occasions, got 1"):
            call(table, change)
