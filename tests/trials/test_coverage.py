"""Coverage by simulation: the batched intervals are the methods', and the evidence holds.

Expected limits come from the methods on the same data, with the same resamples where they resample.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy import stats

import robustrm as rm
from robustrm.kernels import trimmed
from robustrm.kernels.subset_means import count_at_most
from robustrm.methods.effects.all_occasions import kendall_w
from robustrm.methods.effects.direction import probability_of_fall
from robustrm.methods.effects.location import median_difference
from robustrm.methods.effects.ranks import rank_biserial
from robustrm.methods.effects.standardized import (
    robust_standardized_difference,
    standardized_mean_difference,
)
from robustrm.simulation import BLOCK, Design, draw, stream
from robustrm.trials import coverage_page, tabulating
from robustrm.trials.__main__ import main
from robustrm.trials.batches import Batch
from robustrm.trials.coverage import (
    SUBJECTS,
    Coverage,
    cells,
    coverage_rows,
    kinds_for,
    limits_of,
    with_limits,
)
from robustrm.trials.intervals import KINDS, LAWS, SUBSETS, Kind, flip_rank, subsets_of
from robustrm.trials.level import Run, z_of
from robustrm.trials.truths import truths

EVIDENCE = Path(__file__).resolve().parents[2] / "docs" / "evidence"
ENDS = ("visit 0", "visit 3")
DRAWS = 199


def kind(name: str, estimand: str) -> Kind:
    return next(k for k in KINDS if (k.name, k.estimand) == (name, estimand))


def table_of(values: np.ndarray) -> rm.OccasionTable:
    labels = [f"visit {j}" for j in range(values.shape[1])]
    return rm.OccasionTable.from_array(values, occasions=labels)


def cell(errors: str, n: int) -> Design:
    return next(d for d in cells() if (d.errors, d.n) == (errors, n))


def batch_of(values: np.ndarray) -> Batch:
    rng = np.random.default_rng
    return Batch(values, DRAWS, rng(1), rng(2))


def limits(name: str, estimand: str, values: np.ndarray) -> np.ndarray:
    """Limits (D, m, 2) of one kind of interval on data sets (D, n, k)."""
    return np.stack(kind(name, estimand).limits(batch_of(values)), axis=-1)


# ── the batched intervals are those of the methods ────────────────────────────────────────

Found = Callable[[rm.OccasionTable], object]
METHODS: dict[tuple[str, str], Found] = {
    ("signed_rank", "pseudo-median"): lambda t: rm.signed_rank(t, *ENDS).estimate,
    ("sign_flip", "mean"): lambda t: rm.sign_flip(t, *ENDS).estimate,
    ("paired_t", "mean"): lambda t: rm.paired_t(t, *ENDS).estimate,
    ("trimmed_difference", "trimmed mean"): lambda t: rm.trimmed_difference(t, *ENDS).estimate,
    ("trimmed_pair", "difference of trimmed means"): lambda t: rm.trimmed_pair(t, *ENDS).estimate,
    ("median_difference", "median"): lambda t: median_difference(t, *ENDS).estimate,
    ("probability_of_fall", "probability of a fall"): lambda t: (
        probability_of_fall(t, *ENDS).estimate
    ),
    ("rank_biserial", "rank-biserial correlation"): lambda t: rank_biserial(t, *ENDS).estimate,
    ("rank_pair", "relative effect"): lambda t: rm.rank_pair(t, *ENDS, draws=99, rng=1).estimate,
    ("rank_anova", "relative effect of the last occasion"): lambda t: rm.rank_anova(t).details[
        "relative_effect_intervals"
    ][-1],
    ("standardized_mean_difference", "d_z"): lambda t: (
        standardized_mean_difference(t, *ENDS).estimate
    ),
    ("standardized_mean_difference", "d_av"): lambda t: (
        standardized_mean_difference(t, *ENDS, standardizer="occasions").estimate
    ),
}


def pair_of(found: object) -> tuple[float, float]:
    if isinstance(found, tuple):
        return found
    assert isinstance(found, rm.Estimate)
    assert found.low is not None
    assert found.high is not None
    return found.low, found.high


@pytest.mark.parametrize(("name", "estimand"), METHODS)
@pytest.mark.parametrize("n", [8, 12, 20])
def test_intervals_are_those_of_the_method(name: str, estimand: str, n: int):
    values = draw(cell("lognormal", n), 3, seed=2)
    for each, found in zip(values, limits(name, estimand, values), strict=True):
        expected = pair_of(METHODS[name, estimand](table_of(each)))
        np.testing.assert_allclose(found, [expected], rtol=1e-9, atol=1e-12)


def resampling() -> dict[tuple[str, str], Callable[[rm.OccasionTable], list]]:
    """The resampled intervals by the methods, all from the resamples of seed 1."""

    def gaps(y):
        return y[..., -1] - y[..., 0]

    def mean(y):
        return gaps(y).mean(axis=-1)[..., None]

    def mean_error(y):
        return (gaps(y).std(axis=-1, ddof=1) / np.sqrt(y.shape[-2]))[..., None]

    def cut(y):
        return trimmed.difference_trimmed_mean(gaps(y), 0.2).value[..., None]

    def cut_error(y):
        return trimmed.difference_trimmed_mean(gaps(y), 0.2).standard_error[..., None]

    def later(y):
        return (y[..., 1:] - y[..., :1]).mean(axis=-2)

    def later_error(y):
        return (y[..., 1:] - y[..., :1]).std(axis=-2, ddof=1) / np.sqrt(y.shape[-2])

    def interval(estimator, method, error=None, *, together=False):
        return lambda t: list(
            rm.bootstrap_interval(
                t, estimator, method=method, standard_error=error, simultaneous=together,
                draws=DRAWS, rng=1,
            )
        )  # fmt: skip

    found: dict[tuple[str, str], Callable[[rm.OccasionTable], list]] = {}
    for estimand, estimator, error in (
        ("mean", mean, mean_error),
        ("trimmed mean", cut, cut_error),
    ):
        found |= {
            ("bootstrap_interval, percentile", estimand): interval(estimator, "percentile"),
            ("bootstrap_interval, BCa", estimand): interval(estimator, "bca"),
            ("bootstrap_interval, bootstrap-t", estimand): interval(estimator, "t", error),
        }
    return found | {
        ("bootstrap_interval, simultaneous", "means"): interval(
            later, "t", later_error, together=True
        ),
        ("kendall_w", "Kendall's W"): lambda t: [kendall_w(t, draws=DRAWS, rng=1).estimate],
        ("robust_standardized_difference", "robust standardized difference"): lambda t: [
            robust_standardized_difference(t, *ENDS, draws=DRAWS, rng=1).estimate
        ],
    }


@pytest.mark.parametrize(("name", "estimand"), resampling())
@pytest.mark.parametrize("errors", ["t3", "lognormal"])
def test_resampled_intervals_are_those_of_the_method(name: str, estimand: str, errors: str):
    (values,) = draw(cell(errors, 12), 1, seed=3)
    table = table_of(values)
    # the method puts rows in canonical order
    ordered = table.comparable().values[None]
    (found,) = limits(name, estimand, ordered)
    expected = [pair_of(estimate) for estimate in resampling()[name, estimand](table)]
    np.testing.assert_allclose(found, expected, rtol=1e-9)


def test_every_kind_is_compared_with_its_method():
    assert {(k.name, k.estimand) for k in KINDS} == {*METHODS, *resampling()}


def test_kendall_w_of_one_order_is_bounded_as_in_the_method():
    values = np.arange(40.0).reshape(10, 4)
    (found,) = limits("kendall_w", "Kendall's W", values[None])
    np.testing.assert_allclose(found, [pair_of(kendall_w(table_of(values), rng=1).estimate)])


def test_without_a_bca_interval_the_percentile_one_stands():
    # one subject alone moved: resamples without it have no spread, and few values are possible
    values = np.zeros((1, 8, 4))
    values[0, :, -1] = 1.0
    for way in ("percentile", "BCa", "bootstrap-t"):
        assert np.isnan(limits(f"bootstrap_interval, {way}", "mean", values)).all()
    values[0, 0, -1] = 9.0
    by_percentile = limits("bootstrap_interval, percentile", "mean", values)
    by_t = limits("bootstrap_interval, bootstrap-t", "mean", values)
    np.testing.assert_array_equal(by_t, by_percentile)


def test_random_subsets_bound_as_many_means_as_all_would():
    values = draw(cell("normal", 40), 4, seed=4)[:, :24]
    assert subsets_of(24) == SUBSETS
    # the share of all 2²⁴ means below a limit is that of an order statistic of random ones
    rank = flip_rank(24)
    low, high = stats.beta.interval(1 - 1e-6, rank, SUBSETS + 1 - rank)
    for each, found in zip(values, limits("sign_flip", "mean", values)[:, 0], strict=True):
        d = each[:, -1] - each[:, 0]
        assert low < count_at_most(d, found[0]) / 2**24 < high
        assert low < 1 - count_at_most(d, found[1]) / 2**24 < high


@pytest.mark.parametrize("n", SUBJECTS)
def test_the_stated_level_is_that_of_the_method(n: int):
    values = draw(cell("normal", n), 1, seed=5)[0]
    table = table_of(values)
    for k in kinds_for(n):
        if k.name == "signed_rank" or (k.name == "sign_flip" and n <= 20):
            estimate = getattr(rm, k.name)(table, *ENDS).estimate
            assert k.stated(n) == pytest.approx(estimate.level, rel=1e-12)
        elif k.name != "sign_flip":
            assert k.stated(n) == 0.95


# ── streams ───────────────────────────────────────────────────────────────────────────────


def test_more_data_sets_change_no_interval():
    design = cell("t3", 8)
    few = limits_of(design, Run(datasets=20, seed=1, draws=99))
    many = limits_of(design, Run(datasets=BLOCK + 5, seed=1, draws=99))
    for key, (low, high) in few.items():
        np.testing.assert_array_equal(many[key][0][:20], low)
        np.testing.assert_array_equal(many[key][1][:20], high)
        assert many[key][0].shape[0] == BLOCK + 5


def test_a_block_depends_on_no_other():
    design = cell("normal", 8)
    many = limits_of(design, Run(datasets=BLOCK + 5, seed=1, draws=99))
    second = Batch.of_block(design, 1, 5, draws=99, seed=1)
    for k in kinds_for(8):
        low, high = k.limits(second)
        np.testing.assert_array_equal(many[k.name, k.estimand][0][BLOCK:], low)
        np.testing.assert_array_equal(many[k.name, k.estimand][1][BLOCK:], high)


def test_resamples_are_drawn_anew_for_each_data_set():
    values = np.repeat(draw(cell("normal", 12), 1, seed=1), 10, axis=0)
    found = limits("bootstrap_interval, percentile", "mean", values)
    assert (np.ptp(found, axis=0) > 0).all()


def test_data_and_resamples_have_streams_of_their_own():
    design = cell("normal", 8)
    batch = Batch.of_block(design, 0, 1, draws=99, seed=1)
    expected = stream(1, f"resamples: {design.key}", 0).random()
    assert batch.resamples.random() == expected != batch.subsets.random()


# ── rows and limits ───────────────────────────────────────────────────────────────────────


def test_the_cells_are_four_laws_by_four_sizes():
    assert [(d.errors, d.n) for d in cells()] == [(law, n) for law in LAWS for n in SUBJECTS]
    assert {(d.k, d.between_sd, d.within_sd) for d in cells() if d.errors == "lognormal"} == {
        (4, 0.8, 0.5)
    }


def test_a_row_counts_what_its_intervals_do():
    design, run = cell("normal", 12), Run(datasets=60, seed=2, draws=99)
    intervals = limits_of(design, run)
    for row in coverage_rows(design, run):
        low, high = intervals[row.interval, row.estimand]
        truth = truths(design)[row.estimand]
        holds = [
            all(a <= t <= b for a, b, t in zip(lows, highs, truth, strict=True))
            for lows, highs in zip(low, high, strict=True)
        ]
        assert row.covered == sum(holds)
        assert row.coverage == sum(holds) / 60
        # misses of one interval are above or below; of several they may be both
        missed = row.below + row.above
        assert missed >= 60 - row.covered if len(truth) > 1 else missed == 60 - row.covered
        assert row.low < row.coverage <= row.high
        assert row.median_width == pytest.approx(np.median(high[:, -1] - low[:, -1]), rel=1e-5)


def test_a_data_set_without_an_interval_is_not_covered(monkeypatch: pytest.MonkeyPatch):
    def none(batch: Batch):
        return np.full((len(batch.values), 1), np.nan), np.full((len(batch.values), 1), 9.0)

    def half(batch: Batch):
        low, high = none(batch)
        low[0] = -9.0
        return low, high

    broken = replace(kind("paired_t", "mean"), limits=half)
    monkeypatch.setattr("robustrm.trials.coverage.KINDS", (broken,))
    (row,) = coverage_rows(cell("normal", 8), Run(datasets=10, seed=1))
    assert (row.covered, row.none, row.median_width) == (1, 9, 18.0)


def test_limits_are_the_stated_ones():
    design, run = cell("normal", 8), Run(datasets=50, seed=1, draws=99)
    rows = with_limits(coverage_rows(design, run))
    z = z_of(len(rows))  # the normal law gives every interval what it asks for
    t = next(row for row in rows if row.interval == "paired_t")
    assert t.limit == pytest.approx(0.95 - z * np.sqrt(0.95 * 0.05 / 50), abs=1e-5)
    assert {row.interval for row in rows if row.asked} == {
        "signed_rank", "sign_flip", "paired_t", "probability_of_fall", "rank_biserial",
        "standardized_mean_difference",
    }  # fmt: skip
    skewed = [replace(row, is_given=False) for row in rows]
    assert {(row.limit, row.asked, row.reached) for row in with_limits(
        [replace(row, limit=None, asked=False, reached=None) for row in skewed]
    )} == {(None, False, None)}  # fmt: skip


def test_a_coverage_below_its_limit_is_told():
    run = Run(datasets=20, seed=1, draws=99)
    rows = coverage_rows(cell("normal", 12), run)
    bad = with_limits([replace(row, covered=2, coverage=0.1) for row in rows])
    text = coverage_page.page(bad, "versions")
    asked = [row for row in bad if row.asked]
    assert text.count("- **below**: ") == len(asked)
    assert f"Of {len(asked)} coverages" in text
    assert text.count("**0.100**") == len(bad)


# ── the shipped table ─────────────────────────────────────────────────────────────────────


@pytest.fixture(scope="module")
def shipped() -> list[Coverage]:
    return tabulating.read_csv(EVIDENCE / coverage_page.CSV, Coverage)


def test_the_page_is_made_from_the_csv(shipped: list[Coverage]):
    text = (EVIDENCE / coverage_page.PAGE).read_text(encoding="utf-8")
    made_by = re.search(r"^Made with (.+)\.$", text, re.M)
    assert made_by
    assert coverage_page.page(shipped, made_by[1]) == text


def test_the_csv_has_every_kind_in_every_cell(shipped: list[Coverage]):
    planned = [
        (design.errors, design.n, k.name, k.estimand)
        for design in cells()
        for k in kinds_for(design.n)
    ]
    assert [(row.errors, row.n, row.interval, row.estimand) for row in shipped] == planned
    assert {row.datasets for row in shipped} == {2_000}
    assert {row.draws for row in shipped} == {0, 999}


def test_the_csv_agrees_with_itself(shipped: list[Coverage]):
    assert with_limits(shipped) == shipped
    for row in shipped:
        assert row.coverage == pytest.approx(row.covered / row.datasets)
        exact = stats.binomtest(row.covered, row.datasets).proportion_ci(0.95)
        assert (row.low, row.high) == pytest.approx(tuple(exact), abs=1e-6)


def test_intervals_that_promise_their_level_hold_it(shipped: list[Coverage]):
    asked = [row for row in shipped if row.asked]
    assert len(asked) > 50
    assert [row for row in asked if not row.reached] == []


def test_the_command_writes_both_files(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
):
    monkeypatch.setattr("robustrm.trials.coverage.SUBJECTS", (12,))
    monkeypatch.setattr("robustrm.trials.coverage.LAWS", ("normal", "contaminated"))
    command = ["coverage", "--datasets", "6", "--draws", "99", "--seed", "5"]
    main([*command, "--out", str(tmp_path)])
    names = sorted(path.name for path in tmp_path.iterdir())
    assert names == [coverage_page.CSV, coverage_page.PAGE]
    first = {name: (tmp_path / name).read_bytes() for name in names}
    rows = tabulating.read_csv(tmp_path / coverage_page.CSV, Coverage)
    assert {(row.errors, row.n, row.datasets, row.seed) for row in rows} == {
        ("normal", 12, 6, 5), ("contaminated", 12, 6, 5),
    }  # fmt: skip
    main([*command, "--out", str(tmp_path)])
    assert {name: (tmp_path / name).read_bytes() for name in names} == first
    seen = capsys.readouterr()
    assert seen.out == ""
    assert "12 of 12 data sets" in seen.err


@pytest.mark.slow
def test_a_shipped_cell_is_made_again_to_the_last_count(shipped: list[Coverage]):
    made = coverage_rows(cell("contaminated", 8), Run(datasets=2_000, seed=shipped[0].seed))
    kept = [row for row in shipped if (row.errors, row.n) == ("contaminated", 8)]
    assert [(row.interval, row.estimand, row.covered) for row in made] == [
        (row.interval, row.estimand, row.covered) for row in kept
    ]
    assert [row.median_width for row in made] == pytest.approx([row.median_width for row in kept])


@pytest.mark.slow
def test_exact_intervals_hold_from_another_seed():
    run = Run(datasets=2_000, seed=20, draws=99)
    rows = with_limits(coverage_rows(cell("t3", 12), run))
    assert [row for row in rows if row.asked and not row.reached] == []
