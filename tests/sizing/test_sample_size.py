"""How many subjects: against power that is known, and by the rules it states."""

from __future__ import annotations

import json
import math
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import numpy as np
import pandas as pd
import pytest
from scipy import stats
from statsmodels.stats.power import TTestPower

import robustrm as rm
from robustrm.kernels.binomial import clopper_pearson
from robustrm.plan import Plan
from robustrm.sizing import pilot_variation, sample_size
from robustrm.sizing.asking import attainable_table
from robustrm.sizing.result import smallest_of
from robustrm.sizing.simulating import SETS, SizingJob, simulated, studies
from robustrm.sizing.study import checked_study, log_sd
from robustrm.work import workers
from tests.report.test_wording import BANNED

CVS: dict[str, Any] = {"cv_within": 0.42, "cv_between": 0.9}


def study(plan: Plan | None = None, **changed):
    usual: dict[str, Any] = {
        **CVS, "ratios": [1, 0.8, 0.7], "n_occasions": None, "distribution": "lognormal",
        "limit": 0.0, "dropout": 0.0,
    }  # fmt: skip
    return checked_study(plan or Plan(), **{**usual, **changed})


# ── power that is known ───────────────────────────────────────────────────────────────────────


def within(table: pd.DataFrame, test: str, n: int, expected: float) -> bool:
    """Whether the 99.9% Monte Carlo interval holds the expected power."""
    row: Any = table[(table["test"] == test) & (table["n"] == n)].iloc[0]
    low, high = clopper_pearson(row["rejections"], row["datasets"], 0.999)
    return bool(low <= expected <= high)


@pytest.mark.reference
@pytest.mark.parametrize("ratios", [[1, 0.8, 0.7], [1, 1, 0.6, 0.8]])
def test_the_uncorrected_f_has_the_power_of_the_noncentral_f(ratios: list[float]):
    found = sample_size(**CVS, ratios=ratios, n=[8, 14, 22], rng=11, datasets=4000)
    shift, k = np.log(ratios), len(ratios)
    # the logarithms are normal with variance ln(1 + CV²): spherical errors
    variance = math.log(1 + 0.42**2)
    for n in (8, 14, 22):
        df = (k - 1, (k - 1) * (n - 1))
        noncentrality = n * np.sum((shift - shift.mean()) ** 2) / variance
        expected = stats.ncf.sf(stats.f.isf(0.05, *df), *df, noncentrality)
        assert within(found.table, "anova, uncorrected", n, expected)


@pytest.mark.reference
@pytest.mark.parametrize("sides", [1, 2])
def test_the_paired_t_test_has_the_power_that_statsmodels_computes(sides: Any):
    plan = Plan(pair="paired_t", adjust="none", sides=sides, direction="less")
    found = sample_size(**CVS, ratios=[1, 0.7], n=[8, 14], plan=plan, rng=12, datasets=4000)
    size = math.log(0.7) / math.sqrt(2 * math.log(1 + 0.42**2))
    for n in (8, 14):
        side = "two-sided" if sides == 2 else "smaller"
        expected = TTestPower().power(size, n, 0.05, alternative=side)
        assert within(found.table, "paired_t, unadjusted: occasion 2 vs occasion 1", n, expected)


def test_where_nothing_changes_a_comparison_keeps_its_level():
    found = sample_size(**CVS, ratios=[1, 1, 0.7], n=[12], rng=1, datasets=4000)
    rows: Any = found.table.set_index("test")
    name = "signed_rank, Holm: occasion 2 vs occasion 1"
    assert rows.loc[name, "low"] <= 0.05
    assert name not in found.smallest
    # a single expected change is no family of expected changes
    assert not rows.index.str.contains("at least one").any()


# ── what is drawn ─────────────────────────────────────────────────────────────────────────────


def test_subjects_leave_for_good_and_as_many_as_was_said():
    job = SizingJob(study(dropout=0.3), 40, 0, SETS, 5)
    _, _, present = studies(job)
    assert present[..., 0].all()
    assert not (present[..., 2] & ~present[..., 1]).any()
    shares = present.mean(axis=(0, 1))
    # 20,000 subjects: 5 standard errors
    np.testing.assert_allclose(shares, [1, 0.85, 0.7], atol=5 * 0.0033)


@pytest.mark.parametrize(
    ("rule", "factor"), [("half", 0.5), ("root2", 1 / math.sqrt(2)), ("limit", 1.0)]
)
def test_the_planned_substitute_stands_below_the_limit(rule: Any, factor: float):
    values, below, _ = studies(SizingJob(study(Plan(substitute=rule), limit=0.2), 20, 0, 50, 5))
    assert below.mean() == pytest.approx(0.2)
    measured, _, _ = studies(SizingJob(study(Plan(substitute="limit"), limit=0.2), 20, 0, 50, 5))
    np.testing.assert_allclose(values[~below], measured[~below])
    np.testing.assert_allclose(values[below], measured[below] + math.log(factor))


def test_a_data_set_does_not_depend_on_how_many_are_asked_for():
    few = simulated(SizingJob(study(dropout=0.2), 9, 0, 120, 5))
    many = simulated(SizingJob(study(dropout=0.2), 9, 0, 300, 5))
    for name, found in few.items():
        np.testing.assert_array_equal(found, many[name][:120])


def test_widths_are_those_of_the_method():
    job = SizingJob(study(), 10, 0, 30, 5)
    values, _, _ = studies(job)
    widths = simulated(job)["width"]
    for each, width in zip(values, widths, strict=True):
        table = rm.OccasionTable.from_array(np.exp(each), occasions=["a", "b", "c"]).log()
        for second, expected in zip("bc", width, strict=True):
            estimate: Any = rm.signed_rank(table, "a", second).estimate
            assert math.log(estimate.high / estimate.low) == pytest.approx(expected)


# ── the answer ────────────────────────────────────────────────────────────────────────────────


def test_workers_and_other_sizes_change_nothing(tmp_path):
    ask: dict[str, Any] = {
        **CVS,
        "ratios": [1, 0.7, 0.6],
        "dropout": 0.1,
        "rng": 3,
        "datasets": 1100,
    }
    here = sample_size(**ask, n=range(8, 11))
    with ThreadPoolExecutor(3) as threads:
        pd.testing.assert_frame_equal(
            sample_size(**ask, n=range(8, 11), executor=threads).table, here.table
        )
    with workers(2) as processes:
        there = sample_size(**ask, n=range(8, 11), executor=processes)
    assert there.to_dict() == here.to_dict()
    alone = sample_size(**ask, n=9)
    rows = here.table[here.table["n"] == 9].reset_index(drop=True)
    pd.testing.assert_frame_equal(alone.table, rows)


def test_an_interrupted_run_goes_on(tmp_path):
    ask: dict[str, Any] = {
        **CVS,
        "ratios": [1, 0.7],
        "rng": 3,
        "datasets": 600,
        "n": [8, 9],
        "resume": tmp_path,
    }

    def stop(done: int, total: int) -> None:
        if done == 3:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        sample_size(**ask, progress=stop)
    seen: list = []
    found = sample_size(**ask, progress=lambda *call: seen.append(call))
    assert seen == [(3, 4), (4, 4)]
    assert found.to_dict() == sample_size(**{**ask, "resume": None}).to_dict()


def test_the_smallest_n_holds_for_the_next_three():
    # 8 reaches 0.8, 9 falls below: a saw tooth
    powers = dict(
        zip(range(6, 16), [0.5, 0.7, 0.81, 0.79, 0.8, 0.82, 0.85, 0.86, 0.9, 0.9], strict=True)
    )
    assert smallest_of(list(powers), list(powers.values()), 0.8) == 10
    assert smallest_of([10, 11, 12], [0.9, 0.9, 0.9], 0.8) is None
    assert smallest_of([10, 12, 14, 16], [0.9, 0.9, 0.9, 0.9], 0.8) is None


def test_the_seed_is_recorded_and_repeats_the_run():
    ask: dict[str, Any] = {**CVS, "ratios": [1, 0.6], "n": [8], "datasets": 100}
    first = sample_size(**ask)
    assert sample_size(**ask, rng=first.seed).to_dict() == first.to_dict()
    assert sample_size(**ask, plan=Plan(seed=9)).seed == 9
    drawn = sample_size(**ask, rng=np.random.default_rng(1)).seed
    assert drawn == sample_size(**ask, rng=np.random.default_rng(1)).seed
    assert drawn > 2**64


@pytest.mark.reference
def test_attainable_p_values():
    # 2^(1−n): SciPy's exact signed-rank test of n rises
    sizes = range(4, 10)
    table: Any = attainable_table(study(Plan(contrasts="all")), sizes).set_index(
        ["test", "adjust", "n"]
    )
    for n in sizes:
        smallest = stats.wilcoxon(np.arange(1.0, n + 1), method="exact").pvalue
        assert table.loc[("signed_rank", "none", n), "smallest_p"] == pytest.approx(smallest)
    # with 6 subjects and 3 comparisons .094 after Holm, .031 after Hommel and closed testing;
    # 3 comparisons can reach .05 from 7 subjects, 6 from 8, 10 from 9: 1 + log2(20 m)
    assert table.loc[("signed_rank", "holm", 6), "smallest_p_adjusted"] == 0.09375
    for adjust, pair in (("hommel", "signed_rank"), ("closed", "sign_flip")):
        plan = Plan(contrasts="all", adjust=adjust, pair=pair)
        rows = attainable_table(study(plan), [6]).set_index("adjust")
        assert rows.loc[adjust, "smallest_p_adjusted"] == 0.03125
    for ratios, least in (
        ([1, 0.5], 6),
        ([1, 1, 0.5], 7),
        ([1] * 3 + [0.5], 8),
        ([1] * 4 + [0.5], 9),
    ):
        rows = attainable_table(study(Plan(contrasts="all"), ratios=ratios), range(4, 12))
        rows = rows[rows["adjust"] == "holm"]
        assert rows.loc[rows["reachable"], "n"].min() == least
    # Friedman (1937): k = 3, n = 4 has P = .0046 = 6/6⁴ at its largest value
    assert table.loc[("friedman", "overall", 4), "smallest_p"] == pytest.approx(6 / 6**4)


def test_the_closed_bound_is_that_of_the_method():
    table = rm.OccasionTable.from_array(
        [[9, 7, 6], [4, 3, 2], [12, 8, 5], [7, 5, 4], [6, 5, 3], [8, 4, 3]],
        occasions=["a", "b", "c"],
    )
    rows = rm.attainable(table, family="all").set_index(["method", "adjust"]).smallest_p
    plan = Plan(contrasts="all", adjust="closed", pair="sign_flip")
    mine = attainable_table(study(plan), [6]).set_index("adjust")
    assert mine.loc["closed", "smallest_p"] == rows["sign_flip", "closed"]


PLANS: list[tuple[Plan, dict[str, Any]]] = [
    (Plan(), {}),
    (Plan(contrasts="all", adjust="closed", pair="sign_flip", omnibus="row_flip"), {}),
    (Plan(sides=1, direction="less", omnibus="aligned_ranks"), {"dropout": 0.2, "limit": 0.3}),
    (Plan(sides=1, direction="greater", selected=True), {"distribution": "log-t3"}),
    (Plan(scale="raw", intervals="simultaneous", pair="trimmed_pair"), {"distribution": "normal"}),
    (
        Plan(pair="paired_t", omnibus="anova", adjust="bonferroni"),
        {"ratios": 0.6, "n_occasions": 4},
    ),
    (Plan(pair="sign_test", omnibus="hotelling", adjust="bh"), {"n": [5, 9]}),
    (Plan(contrasts=(("a", "b"),), occasions=("a", "b", "c")), {"ratios": [1, 1, 0.7]}),
]


@pytest.mark.parametrize(("plan", "asked"), PLANS, ids=range(len(PLANS)))
def test_every_plan_gives_tables_and_words(plan: Plan, asked: dict):
    import re

    ask: dict[str, Any] = {**CVS, "ratios": [1, 0.8, 0.6], "n": range(7, 12), **asked}
    found = sample_size(**ask, plan=plan, rng=2, datasets=100)
    table = found.table
    assert (table["low"] <= table["power"]).all()
    assert (table["power"] <= table["high"]).all()
    assert not table.duplicated(["n", "test"]).any()
    assert set(found.smallest) <= set(table["test"])
    json.dumps(found.to_dict(), allow_nan=False)
    words = " ".join([str(found), found.sentence])
    assert [match[0] for pattern in BANNED for match in re.finditer(pattern, words)] == []
    assert {"not the pilot's effect", "no two-arm rule"} <= {note.code for note in found.cautions}


def test_intervals_widen_when_they_hold_together_and_narrow_with_n():
    ask: dict[str, Any] = {**CVS, "ratios": [1, 0.8, 0.7], "n": [8, 16], "rng": 1, "datasets": 200}
    apart = sample_size(**ask).widths
    together = sample_size(**ask, plan=Plan(intervals="simultaneous")).widths
    assert (together["width"] > apart["width"]).all()
    assert apart.groupby("n")["width"].max().is_monotonic_decreasing
    assert (apart["level"] >= 0.95).all()
    assert (together["level"] >= 0.975).all()
    assert sample_size(**{**ask, "n": [5]}).widths["given"].tolist() == [0.0, 0.0]


# ── a pilot ───────────────────────────────────────────────────────────────────────────────────


def lognormal_pilot(seed: int, n: int = 12) -> rm.OccasionTable:
    rng = np.random.default_rng(seed)
    logs = 0.8 * rng.standard_normal((n, 1)) + 0.4 * rng.standard_normal((n, 3))
    return rm.OccasionTable.from_array(
        np.exp(logs + np.array([0.0, -0.5, -1.0])), occasions=["a", "b", "c"]
    )


@pytest.mark.reference
def test_pilot_variation_is_that_of_the_variance_components():
    from statsmodels.stats.anova import AnovaRM

    table = lognormal_pilot(1)
    found = pilot_variation(table)
    frame = table.log().to_long().rename(columns=str)
    subject, occasion, value = frame.columns[:3]
    fit = AnovaRM(frame, value, subject, within=[occasion]).fit().anova_table.iloc[0]
    # F = MS occasion / MS error, and MS occasion by hand
    means = table.log().values.mean(axis=0)
    mse = 12 * means.var(ddof=1) / fit["F Value"]
    mss = 3 * table.log().values.mean(axis=1).var(ddof=1)
    assert found.cv_within == pytest.approx(math.sqrt(math.exp(mse) - 1))
    assert found.cv_between == pytest.approx(math.sqrt(math.exp((mss - mse) / 3) - 1))
    assert log_sd(found.cv_within) ** 2 == pytest.approx(mse)


def test_pilot_intervals_hold_their_level():
    held = np.zeros(2)
    within_cv, between_cv = (math.sqrt(math.exp(sd**2) - 1) for sd in (0.4, 0.8))
    for seed in range(400):
        found = pilot_variation(lognormal_pilot(seed, n=8))
        for place, (limits, true) in enumerate(
            ((found.within, within_cv), (found.between, between_cv))
        ):
            held[place] += limits[0] <= true <= limits[1]
    # 400 pilots: 3.3 standard errors below and above 95%
    assert ((held >= 0.914 * 400) & (held <= 0.986 * 400)).all()


def test_a_pilot_gives_variation_and_labels_and_a_caution():
    table = lognormal_pilot(1)
    found = sample_size(pilot=table, ratios=[1, 0.8, 0.7], n=[8], rng=1, datasets=100)
    assert found.study.cv_within == pilot_variation(table).cv_within
    assert found.study.labels == ("a", "b", "c")
    assert found.pilot == pilot_variation(table)
    assert "pilot variation" in {note.code for note in found.cautions}
    # the pilot fell to e^-1 of its start: its effect is not used
    other = sample_size(pilot=table, ratios=0.9, n=[8], rng=1, datasets=100, cv_within=0.3)
    assert other.study.ratios == (1.0, 1.0, 0.9)
    assert other.study.cv_within == 0.3


# ── what is refused ───────────────────────────────────────────────────────────────────────────

REFUSED: list[tuple[dict[str, Any], str]] = [
    ({"cv_within": 42}, r"`cv_within` must be a fraction, .* did you mean 0\.42\?"),
    ({"cv_within": 0}, "`cv_within` must be a positive fraction"),
    ({"cv_between": None}, r"`cv_between` must be given, .* `pilot`"),
    ({"cv_between": -1}, "`cv_between` must be a positive fraction"),
    ({"ratios": [0.9, 0.8]}, "must begin with 1"),
    ({"ratios": [1, 1, 1]}, "without a change there is nothing to find"),
    ({"ratios": [1, -1]}, "`ratios` must be positive"),
    ({"ratios": [1]}, "2 to 6 numbers"),
    ({"ratios": 0.7}, "Give `n_occasions`"),
    ({"n_occasions": 4}, "got 3 for 4 by n_occasions"),
    ({"plan": Plan(occasions=("a", "b"))}, "got 3 for 2 by the plan's occasions"),
    ({"dropout": 20}, r"`dropout` must be a share .* Did you mean 0\.2\?"),
    ({"limit": 1}, "`limit` must be a share"),
    ({"distribution": "normal"}, "can fall below zero"),
    ({"distribution": "gamma"}, "`distribution` must be one of"),
    ({"distribution": "t3", "plan": Plan(scale="raw"), "limit": 0.1}, "`limit` must be 0"),
    ({"plan": Plan(pair="rank_pair")}, "`pair` must be one of .* for a simulation"),
    ({"plan": Plan(pair="nemenyi", adjust="single-step")}, "`pair` must be one of"),
    ({"plan": Plan(omnibus="skillings_mack")}, "`omnibus` must be one of"),
    ({"plan": Plan(pair="trimmed_pair", trim=0.1)}, r"`trim` must be 0\.2, the usual share"),
    ({"plan": Plan(contrasts=(("a", "b"),))}, "`contrasts` must be one of"),
    ({"n": []}, "`n` must hold a number"),
    ({"n": [2]}, "`n` must be a whole number of at least 3"),
    ({"target": 80}, r"`target` must be in \(0, 1\)"),
    ({"datasets": 10}, "`datasets` must be a whole number of at least 100"),
    ({"rng": -1}, "`rng` must be a whole number"),
]


@pytest.mark.parametrize(("changed", "message"), REFUSED, ids=range(len(REFUSED)))
def test_what_is_refused(changed: dict, message: str):
    with pytest.raises(rm.ArgumentError, match=message):
        sample_size(**{**CVS, "ratios": [1, 0.8, 0.7], "n": [8], **changed})


def test_a_pilot_of_two_people_says_nothing():
    table = rm.OccasionTable.from_array([[1, 2], [3, 5]], occasions=["a", "b"])
    with pytest.raises(rm.TooFewError, match="at least 3 subjects"):
        sample_size(pilot=table, ratios=[1, 0.8])
