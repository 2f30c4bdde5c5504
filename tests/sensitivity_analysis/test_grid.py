"""The specification grid: against the methods, SciPy, loops, and tables made anew."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from typing import Any

import numpy as np
import pytest
from scipy import stats

import robustrm as rm
from robustrm.errors import ArgumentError, TooFewError
from robustrm.kernels.null.joint import joint_test, rearranged, rearrangements
from robustrm.plan import GridChoices
from robustrm.results import note_codes
from robustrm.sensitivity_analysis.branches import Branch, branches
from robustrm.sensitivity_analysis.grid import Grid, specification_grid
from robustrm.sensitivity_analysis.grid_tables import BEYOND, pulled_in, sources
from robustrm.sensitivity_analysis.specifications import (
    specification,
    specified,
    statistics,
)
from tests.report.test_wording import BANNED

NAN = float("nan")
LABELS = ("week 0", "week 6", "week 12")
IDENTITY_STREAM = 7


def raw(values: Any, **options: Any) -> rm.OccasionTable:
    k = np.shape(values)[1]
    labels = [*LABELS, "week 24"][:k]
    return rm.OccasionTable.from_array(
        values, occasions=labels, marker="ferritin", unit="µg/L", **options
    )


def drawn(n: int = 10, k: int = 3, seed: int = 1) -> np.ndarray:
    """Lognormal values with two decimals and one outlier, so that every rule has work to do."""
    rng = np.random.default_rng(seed)
    values = np.exp(rng.normal(size=(n, 1)) + 0.5 * rng.normal(size=(n, k)))
    values[0, 1] *= 30
    return np.round(values + 0.01, 2)


def limited(values: np.ndarray, share: float = 0.25) -> rm.OccasionTable:
    """Set the lowest share of the cells to a limit that they lie below."""
    limit = float(np.round(np.nanquantile(values, share), 2))
    below = values < limit
    return raw(np.where(below, limit, values), below=below, lower_limit=limit)


def gapped(values: np.ndarray) -> np.ndarray:
    """Leave one visit out of the first rows, and all but one of the last."""
    result = values.copy()
    result[1, 0] = result[2, 2] = result[-1, 0] = result[-1, 1] = NAN
    return result


def plan(**grid: Any) -> rm.Plan:
    return rm.Plan().replace(grid={"draws": 199, **grid})


def one(*tests: str, **choices: Any) -> rm.Plan:
    """A plan whose grid is one branch a test."""
    single = {
        "scale": ["log"],
        "test": tests,
        "trim": [0.2],
        "substitute": ["half"],
        "missing": ["complete"],
        "outliers": ["kept"],
    }
    return plan(**{**single, **choices})


EVERY_TEST = (*GridChoices().test, "normal_scores", "rank_anova", "hotelling")
BOTH = pytest.mark.parametrize("outliers", ["kept", "winsorized"])


# ── what is rearranged is what a rearranged table gives anew ──────────────────────────────────


def tables_rearranged(table: rm.OccasionTable, draws: int) -> Iterator[rm.OccasionTable]:
    """Yield the tables of the same stream, made anew from their cells and flags."""
    source = sources({None: table})
    base = table.select(subjects=source.order)
    rng = np.random.default_rng(IDENTITY_STREAM)
    for orders in rearrangements(source.observed, draws, rng):
        for order in orders:
            yield rm.OccasionTable.from_array(
                rearranged(base.values, order[None])[0],
                occasions=base.occasions,
                subjects=base.subjects,
                below=rearranged(base.below.astype(float), order[None])[0] > 0,
                lower_limit=rearranged(base.lower_limit, order[None])[0],
            )


def assert_made_anew(table: rm.OccasionTable, branch: Branch, draws: int = 25) -> None:
    source = sources({None: table})
    what = specification(source, branch)
    rng = np.random.default_rng(IDENTITY_STREAM)
    shared = statistics(source, [what], draws, rng)[:, 0]
    anew = []
    for other in tables_rearranged(table, draws):
        again = sources({None: other})
        found = specification(again, branch)
        identity = np.arange(table.n_occasions) + np.zeros((1, len(again.order), 1), dtype=int)
        anew.append(found.scaled(identity)[0])
    assert np.ptp(anew) > 0
    np.testing.assert_allclose(shared, anew, atol=1e-9)


@BOTH
@pytest.mark.parametrize("scale", ["log", "raw"])
@pytest.mark.parametrize("test", EVERY_TEST)
def test_every_step_that_depends_on_the_data_is_that_of_the_rearranged_table(test, scale, outliers):
    trim = 0.2 if test in ("trimmed_anova", "winsorized_permutation") else None
    branch = Branch(None, scale, test, trim, "root2", "complete", outliers)
    assert_made_anew(limited(drawn()), branch)


@BOTH
@pytest.mark.parametrize(
    "test", ["friedman", "normal_scores", "aligned_ranks", "mean_permutation",
             "winsorized_permutation"]
)  # fmt: skip
def test_so_it_is_with_missing_visits_whose_pattern_stays(test, outliers):
    trim = 0.2 if test == "winsorized_permutation" else None
    branch = Branch(None, "log", test, trim, "half", "available", outliers)
    assert_made_anew(limited(gapped(drawn())), branch)


@pytest.mark.parametrize("test", ["quade", "trimmed_anova"])
def test_complete_rows_are_rearranged_with_the_others(test):
    branch = Branch(None, "log", test, 0.2, "half", "complete", "kept")
    assert_made_anew(limited(gapped(drawn())), branch)


# ── against the methods and SciPy ─────────────────────────────────────────────────────────────


@pytest.mark.parametrize(
    "test",
    ["friedman", "quade", "aligned_ranks", "normal_scores", "mean_permutation", "hotelling",
     "rank_anova"],
)  # fmt: skip
def test_the_statistic_is_that_of_the_method(test):
    table = limited(drawn())
    row = specification_grid(table, one(test), root=1).frame.iloc[0]
    method = getattr(rm, test)
    assert row["statistic"] == pytest.approx(method(table.log()).statistic)
    assert row["n"] == 10


def test_the_statistics_that_trim_are_those_of_their_methods():
    table = drawn()
    found = specification_grid(
        raw(table), one("trimmed_anova", trim=[0.1, 0.2], scale=["raw"]), root=1
    ).frame
    expected = [rm.trimmed_anova(raw(table), trim=trim).statistic for trim in (0.1, 0.2)]
    np.testing.assert_allclose(found["statistic"], expected)
    found = specification_grid(raw(table), one("winsorized_permutation"), root=1).frame
    expected = [rm.winsorized_permutation(raw(table).log(), winsorize=0.2).statistic]
    np.testing.assert_allclose(found["statistic"], expected)


def test_friedman_with_missing_visits_is_the_test_of_skillings_and_mack():
    table = limited(gapped(drawn()))
    row = specification_grid(table, one("friedman", missing=["available"]), root=1).frame.iloc[0]
    assert row["statistic"] == pytest.approx(rm.skillings_mack(table).statistic)
    assert row["n"] == 9  # the last subject has a single visit


def test_a_grid_of_one_has_the_permutation_p_of_that_test_on_the_same_rearrangements():
    """SciPy's Friedman statistic of every rearranged table, counted by a loop."""
    values = drawn()
    source = sources({None: raw(values)})
    what = specification(source, Branch(None, "log", "friedman", None, "half", "complete", "kept"))
    found = joint_test(statistics(source, [what], 199, np.random.default_rng(IDENTITY_STREAM)))
    chi2 = [
        stats.friedmanchisquare(*table.values.T).statistic
        for table in tables_rearranged(raw(values), 199)
    ]
    expected = np.mean(np.array(chi2) >= chi2[0] - 1e-9)
    assert found.p_values[0] == pytest.approx(expected)
    assert found.p_value == found.median == found.p_values[0]


@pytest.mark.parametrize("test", ["friedman", "aligned_ranks", "mean_permutation", "quade"])
def test_a_grid_of_one_agrees_with_the_exact_p_of_the_method(test):
    table = raw(drawn(6) * [1.0, 0.8, 0.6])
    found = specification_grid(table, one(test, draws=9_999), root=3)
    exact = getattr(rm, test)(table.log(), null="exact").p_value
    low, high = found.grid_p_interval
    assert low <= exact <= high
    assert found.grid_p == found.median_p == found.frame["p"][0]


def test_the_median_and_the_joint_p_are_those_of_a_loop_over_the_statistics():
    source = sources({None: limited(drawn())})
    found, _ = specified(source, tuple(branches(GridChoices(draws=99))))
    values = statistics(source, [each.what for each in found], 99, np.random.default_rng(1))
    p = np.array([[np.mean(values[:, s] >= row[s] - 1e-10) for s in range(len(found))]
                  for row in values])  # fmt: skip
    medians = np.median(p, axis=1)
    joint = joint_test(values)
    np.testing.assert_allclose(joint.p_values, p[0])
    assert joint.median == pytest.approx(medians[0])
    assert joint.p_value == pytest.approx(np.mean(medians <= medians[0] + 1e-12))


# ── one set of rearrangements ─────────────────────────────────────────────────────────────────


def test_other_specifications_do_not_move_the_p_of_one():
    table = limited(drawn())
    alone = specification_grid(table, one("aligned_ranks"), root=5).frame
    whole = specification_grid(table, plan(), root=5).frame
    same = whole[
        (whole["test"] == "aligned_ranks") & (whole["scale"] == "log")
        & (whole["substitute"] == "half") & (whole["outliers"] == "kept")
    ]  # fmt: skip
    assert same["p"].tolist() == alone["p"].tolist()


def test_neither_block_nor_order_of_rows_nor_names_move_a_digit():
    values = gapped(drawn())
    source = sources({None: raw(values)})
    found, _ = specified(source, tuple(branches(GridChoices())))
    whats = [each.what for each in found]
    blocks = [
        statistics(source, whats, 99, np.random.default_rng(1), block=size) for size in (1, 13, 99)
    ]
    # to rounding, which no count of tables can see
    np.testing.assert_allclose(blocks[0], blocks[1], atol=1e-14)
    results = [joint_test(each) for each in blocks]
    assert len({(each.hits, each.median, *each.p_values) for each in results}) == 1
    first = specification_grid(raw(values), plan(), root=1)
    shuffled = raw(values[::-1], subjects=[f"X{i}" for i in range(len(values))])
    again = specification_grid(shuffled, plan(), root=1)
    assert json.dumps(first.to_dict()) == json.dumps(again.to_dict())


def test_the_same_root_gives_the_same_result_and_another_one_does_not():
    table = limited(drawn())
    first, again, other = (specification_grid(table, plan(), root=root) for root in (1, 1, 2))
    assert first.to_dict() == again.to_dict()
    assert first.frame["p"].tolist() != other.frame["p"].tolist()


def test_progress_counts_the_tables_up_to_the_last():
    told: list[tuple[int, int]] = []
    specification_grid(raw(drawn()), plan(), root=1, progress=lambda *step: told.append(step))
    assert told[-1] == (200, 200)
    assert told == sorted(told)


def test_the_joint_p_holds_its_level_where_there_is_nothing_to_find():
    # 200 exchangeable tables; SciPy's binomial limit of one in a million
    few = GridChoices(
        test=("aligned_ranks", "mean_permutation"), substitute=("half",), trim=(0.1,), draws=99
    )
    hits = 0
    for seed in range(200):
        values = np.exp(np.random.default_rng(seed).normal(size=(6, 3)))
        source = sources({None: raw(values)})
        found, _ = specified(source, tuple(branches(few)))
        drawn_ = statistics(source, [f.what for f in found], 99, np.random.default_rng(seed + 1000))
        hits += joint_test(drawn_).p_value <= 0.05
    assert hits <= stats.binom.isf(1e-6, 200, 0.05)


def test_a_change_that_everybody_shows_is_found():
    found = specification_grid(raw(drawn() * [1.0, 0.4, 0.2]), plan(), root=1)
    assert found.grid_p == 1 / 200
    assert found.share_below == np.mean(found.frame["p"] <= 0.05)


# ── the branches ──────────────────────────────────────────────────────────────────────────────


def test_every_combination_is_declared_and_coinciding_ones_are_one_specification():
    found = specification_grid(raw(drawn()), plan(), root=1)
    # scales x substitutes x outliers x (5 sums of scores with two missing rules + 3 without)
    assert found.declared == 2 * 3 * 2 * (5 * 2 + 3) == 156
    assert found.frame["branches"].sum() == 156
    # nothing below a limit, nobody lacks a visit
    assert set(found.frame["substitute"]) == {"half, root2, limit"}
    assert set(found.frame["missing"]) == {"complete, available", "complete"}
    friedman = found.frame[(found.frame["test"] == "friedman") & (found.frame["branches"] > 6)]
    assert friedman["scale"].tolist() == ["log, raw"]
    (note,) = found.notes
    assert note.code == "branches coincide"
    assert "156 of 156 declared branches" in note.fact
    assert "the substitute" in note.fact


def test_a_substitute_and_a_missing_visit_tell_branches_apart():
    found = specification_grid(limited(gapped(drawn())), plan(), root=1).frame
    aligned = found[(found["test"] == "aligned_ranks") & (found["outliers"] == "kept")]
    assert len(aligned) == 2 * 3 * 2
    assert sorted(set(aligned["n"])) == [7, 9]


def test_whether_branches_coincide_does_not_depend_on_the_arrangement():
    table = limited(gapped(drawn(6)))
    counts = set()
    for other in tables_rearranged(table, 5):
        found, _ = specified(sources({None: other}), tuple(branches(GridChoices())))
        counts.add(tuple(len(each.branches) for each in found))
    assert len(counts) == 1


def test_a_share_that_cuts_nobody_is_that_of_the_means():
    wanted = one("mean_permutation", "trimmed_anova", trim=[0.1])
    found = specification_grid(raw(drawn(8)), wanted, root=1).frame
    assert found["test"].tolist() == ["mean_permutation, trimmed_anova"]
    assert found["trim"].tolist() == ["none, 10%"]


def test_the_planned_test_stands_for_what_coincides_with_it():
    found = specification_grid(
        raw(drawn()), rm.Plan(marker_kind="score").replace(grid={"draws": 99}), root=1
    ).frame
    (planned,) = found[found["planned"]].to_dict("records")
    assert (planned["test"], planned["scale"]) == ("friedman", "raw, log")
    assert planned["estimate_scale"] == "raw"


def test_a_value_without_a_logarithm_leaves_the_log_branches_out_and_says_so():
    values = drawn()
    values[3, 0] = 0
    found = specification_grid(raw(values), plan(), root=1)
    assert set(found.frame["scale"]) == {"raw"}
    assert "branches left out" in note_codes(found.notes)
    assert any("78 of 156 declared branches" in note.fact for note in found.notes)


def test_a_test_that_needs_more_subjects_is_left_out_and_says_so():
    found = specification_grid(raw(drawn(3, 4)), one("friedman", "hotelling"), root=1)
    assert found.frame["test"].tolist() == ["friedman"]
    assert any("at least 4 complete subjects, got 3" in note.fact for note in found.notes)


def test_without_complete_subjects_incomplete_rows_are_used():
    values = drawn(6)
    values[[0, 3], 0] = values[[1, 4], 1] = values[[2, 5], 2] = NAN
    found = specification_grid(raw(values), plan(), root=1)
    assert set(found.frame["missing"]) == {"available"}
    assert "too few complete" in note_codes(found.notes)


def test_without_any_rows_it_refuses():
    values = np.full((4, 3), NAN)
    values[:, 0] = 1.0
    with pytest.raises(TooFewError, match="needs at least 2 subjects with all 3 occasions, got 0"):
        specification_grid(raw(values), plan(), root=1)
    with pytest.raises(TooFewError, match="No declared specification can be computed"):
        specification_grid(raw(drawn(2)), one("hotelling"), root=1)


# ── replicate rules ───────────────────────────────────────────────────────────────────────────


def test_replicate_rules_are_one_table_each_on_the_same_rearrangements():
    values = drawn()
    tables = {"mean": raw(values), "geometric": raw(np.round(values * 0.9 + 0.3, 2))}
    found = specification_grid(
        tables, one("aligned_ranks", replicates=["mean", "geometric"]), root=1
    )
    assert found.frame["replicates"].tolist() == ["mean", "geometric"]
    alone = specification_grid(tables["mean"], one("aligned_ranks"), root=1)
    assert found.frame["p"][0] == alone.frame["p"][0]
    assert alone.frame["replicates"].tolist() == ["as read"]
    named = specification_grid(tables["mean"], one("friedman", replicates=["mean"]), root=1)
    assert named.frame["replicates"].tolist() == ["mean"]


def test_tables_that_are_not_those_of_the_plan_are_refused():
    table = raw(drawn())
    both = one("friedman", replicates=["mean", "geometric"])
    with pytest.raises(ArgumentError, match="one table for each of the replicate rules mean, geom"):
        specification_grid(table, both, root=1)
    with pytest.raises(ArgumentError, match=r"declares \(none\), got mean"):
        specification_grid({"mean": table}, one("friedman"), root=1)
    fewer = raw(drawn()[:-1])
    with pytest.raises(ArgumentError, match="same subjects, occasions and missing cells"):
        specification_grid({"mean": table, "geometric": fewer}, both, root=1)


# ── outliers ──────────────────────────────────────────────────────────────────────────────────


def test_outliers_are_pulled_in_to_the_mad_median_limits():
    values = drawn()
    table, count = pulled_in(raw(values))
    c = values - values.mean(axis=1, keepdims=True)
    # SciPy's median absolute deviation, scaled for a normal law
    middle, spread = np.median(c), stats.median_abs_deviation(c, axis=None, scale="normal")
    expected = values - c + np.clip(c, middle - BEYOND * spread, middle + BEYOND * spread)
    np.testing.assert_allclose(table.values, expected)
    assert count == np.sum(np.abs(c - middle) > BEYOND * spread) > 0
    assert pytest.approx(np.sqrt(stats.chi2.ppf(0.975, 1)), abs=5e-3) == BEYOND


def test_without_spread_or_outliers_the_table_stays_as_it_is():
    tied = raw([[1.0, 1.0, 1.0], [2.0, 2.0, 2.0], [3.0, 3.0, 9.0]])
    assert pulled_in(tied) == (tied, 0)
    even = raw([[1.0, 2.0, 3.0], [4.0, 6.0, 5.0], [3.0, 2.0, 1.0]])
    assert pulled_in(even) == (even, 0)


# ── estimates ─────────────────────────────────────────────────────────────────────────────────

ESTIMATED = {
    "aligned_ranks": lambda t, *pair: rm.signed_rank(t, *pair),
    "mean_permutation": lambda t, *pair: rm.paired_t(t, *pair),
    "trimmed_anova": lambda t, *pair: rm.trimmed_pair(t, *pair, trim=0.2),
}


@pytest.mark.parametrize("scale", ["log", "raw"])
@pytest.mark.parametrize("test", ESTIMATED)
def test_the_estimate_is_that_of_the_matching_comparison_of_the_last_planned_pair(test, scale):
    table = limited(drawn())
    row = specification_grid(table, one(test, scale=[scale]), root=1).frame.iloc[0]
    expected = ESTIMATED[test](table.on_scale(scale), "week 0", "week 12").estimate
    assert expected is not None
    assert row["estimand"] == expected.name
    for name, value in (("estimate", expected.value), ("low", expected.low)):
        assert row[name] == pytest.approx(value)
    assert row["high"] == pytest.approx(expected.high)
    assert row["level"] == pytest.approx(expected.level)
    is_planned = (test, scale) == ("aligned_ranks", "log")
    assert row["role"] == ("sensitivity" if is_planned else "supplementary")


def test_the_winsorized_estimate_is_the_mean_of_the_clipped_values():
    values = drawn()
    row = specification_grid(
        raw(values), one("winsorized_permutation", scale=["raw"]), root=1
    ).frame.iloc[0]
    c = values - values.mean(axis=1, keepdims=True)
    # SciPy pulls in the same share of all 30 centred values at each end
    clipped = np.asarray(stats.mstats.winsorize(c.ravel(), limits=(0.2, 0.2))).reshape(c.shape)
    assert row["estimate"] == pytest.approx((clipped[:, 2] - clipped[:, 0]).mean())
    assert np.isnan(row["low"])


def test_where_outliers_were_pulled_in_there_is_no_interval():
    frame = specification_grid(raw(drawn()), plan(), root=1).frame
    moved = frame["n_pulled_in"] > 0
    assert moved.any()
    assert frame.loc[moved, ["low", "high", "level"]].isna().all(axis=None)
    assert frame.loc[moved, "estimate"].notna().all()


def test_mostly_beyond_a_limit_there_is_no_estimate_but_a_p():
    values = np.full((8, 3), 5.0) + np.arange(24).reshape(8, 3)
    below = np.zeros((8, 3), dtype=bool)
    below[:5, 2] = True
    table = raw(np.where(below, 4.0, values), below=below, lower_limit=4.0)
    frame = specification_grid(table, plan(), root=1).frame
    assert frame["estimate"].isna().all()
    assert frame["p"].between(0, 1, inclusive="right").all()


# ── what it says ──────────────────────────────────────────────────────────────────────────────


def test_the_sentences_carry_the_numbers_and_no_verdict():
    found = specification_grid(limited(gapped(drawn() * [1, 0.7, 0.5])), plan(), root=1)
    words = " ".join((*found.sentences, *map(str, found.notes)))
    assert f"All {len(found.frame)} specifications tested together" in words
    assert "199 rearranged tables" in words
    below = int((found.frame["p"] <= 0.05).sum())
    assert f"{below} of {len(found.frame)}" in words
    assert "This share has no P of its own and decides nothing." in words
    assert [p for p in BANNED if re.search(p, words, re.IGNORECASE)] == []


def test_one_specification_is_not_told_as_many():
    words = specification_grid(raw(drawn()), one("friedman"), root=1).sentences
    assert words[0].startswith("The one specification of the grid: P = ")
    assert not any("share" in sentence or "median P" in sentence for sentence in words)


def test_ratios_and_differences_are_told_apart():
    found = specification_grid(raw(drawn()), plan(), root=1)
    told = [s for s in found.sentences if s.startswith(("The ratio", "The difference"))]
    assert [s.split()[1] for s in told] == ["ratio", "difference"]


def test_a_plain_dict_survives_json_with_nothing_undefined():
    found = specification_grid(limited(gapped(drawn())), plan(test=["rank_anova"]), root=1)
    held = json.loads(json.dumps(found.to_dict(), allow_nan=False))
    assert held["grid_p"] == found.grid_p
    assert held["choices"]["test"] == ["rank_anova"]
    assert held["frame"][0]["estimate"] is None
    assert set(held["frame"][0]) == set(found.frame.columns)


def test_a_statistic_that_is_not_defined_has_p_one():
    values = np.tile([[1.0, 2.0, 4.0]], (6, 1)) * 2.0 ** np.arange(6)[:, None]
    found: Grid = specification_grid(raw(values), one("hotelling"), root=1)
    assert np.isnan(found.frame["statistic"][0])
    assert found.frame["p"][0] == 1.0


def test_subjects_who_never_move_give_p_one():
    found = specification_grid(raw(np.tile([[2.0], [3.0], [5.0]], (1, 3))), plan(), root=1)
    assert found.grid_p == found.median_p == 1.0


def test_the_draws_are_those_of_the_plan_and_p_is_never_below_their_share():
    found = specification_grid(raw(drawn() * [1.0, 0.1, 0.01]), rm.Plan(), root=1)
    assert found.draws == 1_999
    assert found.grid_p >= 1 / 2_000
    assert found.frame["p"].min() >= 1 / 2_000
