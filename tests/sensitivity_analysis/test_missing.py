"""Missing visits: patterns, other choices of subjects, tipping points, ranks at the ends.

Expected p values come from enumeration: all sign patterns of the differences, all orders of the
ranks. Medians, ratios and tipping points of the small tables are worked by hand beside them.
"""

from __future__ import annotations

import itertools
import json
import math
import re
from typing import Any

import numpy as np
import pandas as pd
import pytest
from statsmodels.stats.multitest import multipletests

import robustrm as rm
from robustrm.results import Scale
from robustrm.sensitivity_analysis import missing_bounds
from robustrm.sensitivity_analysis.missing import Missing, missing_sensitivity
from robustrm.sensitivity_analysis.missing_tipping import first_change, read_pair, steps_of
from robustrm.sensitivity_analysis.reading import direction_of
from tests.methods.enumeration import share_at_least, spread, tail, values_by_sums
from tests.methods.tables import present, twice_ranks
from tests.report.test_wording import BANNED

NAN = math.nan
WEEKS = ("week 0", "week 6", "week 12")
LAST = (("week 0", "week 12"),)
ALONE = rm.Plan(contrasts=LAST, adjust="none")


def table_of(rows: Any, **options: Any) -> rm.OccasionTable:
    return rm.OccasionTable.from_array(rows, occasions=WEEKS[: np.shape(rows)[1]], **options)


def found(rows: Any, plan: rm.Plan = ALONE, **options: Any) -> Missing:
    return missing_sensitivity(table_of(rows, **options), plan, root=1)


def records_of(frame: pd.DataFrame) -> list[dict[str, Any]]:
    return [{str(name): value for name, value in row.items()} for row in frame.to_dict("records")]


def row_of(frame: pd.DataFrame, **wanted: Any) -> dict[str, Any]:
    """Return the only row of a frame with these values."""
    kept = frame
    for name, value in wanted.items():
        kept = kept[kept[name] == value]
    (row,) = records_of(kept)
    return row


def sentence(result: Missing, start: str) -> str:
    (text,) = [text for text in result.sentences if text.startswith(start)]
    return text


def signed_rank_p(differences: list[float]) -> float:
    """Two-sided p of the signed-rank test by all sign patterns; no zeros."""
    ranks = twice_ranks([abs(d) for d in differences])
    signed = [rank * (1 if d > 0 else -1) for rank, d in zip(ranks, differences, strict=True)]
    sums = [
        sum(s * r for s, r in zip(signs, ranks, strict=True))
        for signs in itertools.product((1, -1), repeat=len(ranks))
    ]
    return tail(np.array([sum(signed), *sums], float)[1:], sum(signed), "two-sided")


def pseudo_median(values: list[float]) -> float:
    """Median of the averages of all two, each with itself too, by definition."""
    pairs = itertools.combinations_with_replacement(values, 2)
    return float(np.median([(a + b) / 2 for a, b in pairs]))


def ratio_of(ratios: list[float]) -> float:
    return math.exp(pseudo_median([math.log(ratio) for ratio in ratios]))


FALLS = [(100, 90), (100, 80), (100, 70), (100, 60), (100, 50), (100, 40)]
"""Six subjects who fell to 0.9, 0.8, ... 0.4 of their first value."""
ONE_GAP = [[float(a), 95.0, float(b)] for a, b in FALLS] + [[100.0, 95.0, NAN]]


# ── nothing missing ───────────────────────────────────────────────────────────────────────


def test_without_a_gap_there_is_one_sentence_and_nothing_else():
    result = found([[3, 2, 1], [5, 4, 4]])
    assert result.sentences == ("No value is missing: all 2 subjects have all 3 occasions.",)
    for name in ("frame", "patterns", "earlier", "tipping"):
        assert getattr(result, name).empty
        assert list(getattr(result, name))
    assert result.notes == ()


# ── patterns and reasons ──────────────────────────────────────────────────────────────────


@pytest.fixture
def written() -> rm.OccasionTable:
    frame = pd.DataFrame(
        {
            "id": ["P1", "P2", "P3", "P10", "P4", "P5"],
            "week 0": ["9", "8", "7", "6", "5", "8"],
            "week 6": ["8", "haemolysed", "5", "4", "", "7"],
            "week 12": ["7", "6", "withdrawn", "NA", "", "6"],
        }
    )
    return rm.OccasionTable.from_wide(frame, subject="id", occasions=list(WEEKS))


def test_patterns_are_counted_with_their_reasons(written):
    result = missing_sensitivity(written, ALONE, root=1)
    rows = result.patterns.to_dict("records")
    told = [(r["pattern"], r["n_subjects"], r["monotone"], r["reasons"]) for r in rows]
    assert told == [
        ("complete", 2, True, ""),
        ("no value at week 12", 2, True, "withdrawn (1), no reason given (1)"),
        ("no value at week 6", 1, False, "haemolysed (1)"),
        ("no value at week 6 and week 12", 1, True, "no reason given (2)"),
    ]
    assert rows[1]["subjects"] == "P3, P10"
    assert result.sentences[0] == (
        "4 of 6 subjects lack a value on at least one of 3 occasions (5 of 18 values); "
        "2 are complete."
    )
    assert result.sentences[2] == (
        "Reasons written down: haemolysed (1), withdrawn (1), no reason given (3). Ask why the "
        "other visits are missing, and for all of them whether the reason has to do with the "
        "value that is missing."
    )


def test_without_any_reason_the_reasons_are_asked_for():
    assert sentence(found(ONE_GAP), "No reason is written down").endswith(
        "ask why each visit is missing, and whether the reason has to do with the value that is "
        "missing."
    )


# ── before they left ──────────────────────────────────────────────────────────────────────


def test_medians_of_those_who_left_and_stayed_by_hand():
    """After week 6 two left, with 4 and 6 there; 1, 2 and 9 stayed, the last of them for good."""
    rows = [[3, 1, 2], [4, 2, 2], [8, 9, 9], [5, 4, NAN], [7, 6, NAN], [6, NAN, NAN]]
    result = found(rows)
    told = {
        (r["last_occasion"], r["occasion"], r["group"]): (r["n_subjects"], r["n"], r["median"])
        for r in result.earlier.to_dict("records")
    }
    assert told == {
        ("week 0", "week 0", "left"): (1, 1, 6),
        ("week 0", "week 0", "stayed"): (5, 5, 5),
        ("week 6", "week 0", "left"): (2, 2, 6),
        ("week 6", "week 0", "stayed"): (3, 3, 4),
        ("week 6", "week 6", "left"): (2, 2, 5),
        ("week 6", "week 6", "stayed"): (3, 3, 2),
    }
    left = row_of(result.earlier, last_occasion="week 6", occasion="week 6", group="left")
    assert left["geometric_mean"] == pytest.approx(math.sqrt(24))
    assert sentence(result, "After week 6") == (
        "After week 6, 2 left; median there 5.00 (n = 2), of the 3 with a later value 2.00 (n = 3)."
    )


def test_who_misses_a_visit_and_returns_has_not_left():
    assert found([[3, NAN, 2], [NAN, 2, 2], [4, 3, 1]]).earlier.empty


def test_both_groups_are_described_at_the_limit_that_they_share():
    """2 was measured where others would have been reported as < 3: all of these are below."""
    values = np.array([[2.0, 5.0], [3.0, NAN], [8.0, NAN], [9.0, 4.0], [7.0, 4.0]])
    below = np.zeros((5, 2), dtype=bool)
    below[1, 0] = True
    limits = np.where(np.arange(5)[:, None] == 1, 3.0, 1.0) * np.ones((1, 2))
    table = table_of(values, below=below, lower_limit=limits)
    result = missing_sensitivity(table, rm.Plan(), root=1)
    stayed = row_of(result.earlier, group="stayed")
    assert (stayed["n"], stayed["n_below"], stayed["median"]) == (3, 1, 7)


# ── other subjects, other reading ─────────────────────────────────────────────────────────


def test_a_reading_that_rests_on_those_with_a_gap_names_them():
    """Five falls give 2/2⁵ = 0.0625; two more subjects, without week 6, give 2/2⁷ = 0.0156."""
    rows = [[a, 95, b] for a, b in FALLS[:5]] + [[100, NAN, 45], [100, NAN, 35]]
    result = found(rows)
    whole = row_of(result.frame, label="week 12 vs week 0", subjects_used="complete cases")
    pairs = row_of(result.frame, label="week 12 vs week 0", subjects_used="all available pairs")
    assert (whole["n"], whole["p"]) == (5, 2 / 2**5)
    assert (pairs["n"], pairs["p"]) == (7, 2 / 2**7)
    assert (whole["role"], pairs["role"]) == ("sensitivity", "primary")
    told = sentence(result, "week 12 vs week 0 reads differently.")
    ratios = [0.9, 0.8, 0.7, 0.6, 0.5]
    five, seven = (ratio_of(kept) for kept in (ratios, [*ratios, 0.45, 0.35]))
    assert f"Complete cases (n = 5; pseudo-median ratio {five:.3f}, P = 0.063)" in told
    assert f"All available pairs (n = 7; pseudo-median ratio {seven:.3f}, P = 0.016)" in told
    assert sentence(result, "What parts them") == (
        "What parts them is 2 subjects with both occasions who lack another: S6 and S7 "
        "(ratios 0.350 and 0.450; 2 fell, 0 rose)."
    )
    # without either of them 2/2⁶ = 0.031 is still below 0.05
    assert not [text for text in result.sentences if text.startswith("Without")]


def test_a_subject_who_turns_the_reading_alone_is_named():
    """Four falls give 0.125; with two more 0.031; without either of the two 0.0625."""
    rows = [[a, 95, b] for a, b in FALLS[:4]] + [[100, NAN, 45], [100, NAN, 35]]
    assert sentence(found(rows), "Without") == (
        "Without S5 and S6 (each alone) the available pairs read as the complete cases."
    )


def test_the_planned_rows_follow_the_plan():
    rows = [[a, 95, b] for a, b in FALLS] + [[100, NAN, 45]]
    result = found(rows, ALONE.replace(missing="complete"))
    roles = dict(zip(result.frame["subjects_used"], result.frame["role"], strict=True))
    assert roles["complete cases"] in ("primary", "supporting")
    assert row_of(result.frame, role="primary")["subjects_used"] == "complete cases"


def test_rows_that_read_alike_are_said_to(written):
    rows = [[a, 95, b] for a, b in FALLS] + [[100, NAN, 45]]
    told = sentence(found(rows), "Complete cases (n = 6")
    assert "read alike for week 12 vs week 0" in told
    assert told.endswith(": a fall, P at or below 0.05.")


def test_rows_are_those_of_the_analysis():
    rng = np.random.default_rng(7)
    values = np.round(np.exp(rng.normal(2, 0.6, (12, 3))), 1)
    values[[1, 4, 9], [2, 1, 2]] = NAN
    table, plan = table_of(values), rm.Plan()
    result = missing_sensitivity(table, plan, root=1)
    planned = result.frame[result.frame["role"] == "primary"]
    analysis = rm.analyze(table, plan, rng=1)
    assert planned["p"].tolist() == [c.p_value for c in analysis.primary]
    assert planned["p_adjusted"].tolist() == [c.p_adjusted for c in analysis.primary]
    assert planned["low"].tolist() == [present(c.estimate).low for c in analysis.primary]
    gaps = row_of(result.frame, method="skillings_mack")
    assert gaps["p"] == rm.skillings_mack(table).p_value
    assert gaps["n"] == 12
    whole = row_of(result.frame, method="friedman", subjects_used="complete cases")
    assert whole["p"] == rm.friedman(table).p_value
    assert (whole["role"], gaps["role"]) == ("supporting", "sensitivity")


def test_the_likelihood_stands_beside_with_everybody():
    rng = np.random.default_rng(8)
    values = np.round(np.exp(rng.normal(2, 0.6, (12, 3))), 1)
    values[[1, 4], [2, 2]] = NAN
    result = found(values)
    row = row_of(result.frame, method="likelihood")
    assert row["n"] == 12
    assert row["subjects_used"] == "likelihood under missing at random"
    assert 0 < row["low"] < row["estimate"] < row["high"]
    assert "normal model" in row["assumption"]


def test_a_plan_for_a_whole_family_is_read_one_pair_at_a_time():
    rows = [[a, 95, b] for a, b in FALLS] + [[100, NAN, 45]]
    result = found(rows, rm.Plan(pair="sign_flip", adjust="closed"))
    assert set(result.frame["method"]) >= {"sign_flip"}
    assert "primary" not in set(result.frame["role"])
    assert "pairs alone" in [note.code for note in result.notes]
    ranked = found(rows, rm.Plan(pair="nemenyi", adjust="single-step"))
    kept = ranked.frame[ranked.frame["subjects_used"] == "all available pairs"]
    assert set(zip(kept["method"], kept["adjust"], kept["role"], strict=True)) == {
        ("signed_rank", "holm", "supplementary")
    }


# ── tipping points ────────────────────────────────────────────────────────────────────────


def test_a_tipping_factor_by_hand():
    """Six falls and one rise of size rank r have P = 2 c(r) / 2⁷, c counting rank sums ≤ r.

    c(2) = 3 gives 0.047 and c(3) = 5 gives 0.078: P crosses 0.05 where the rise outgrows the
    second smallest fall, at a ratio of 1/0.8. A tie there, at mid-rank 2.5, is one more step.
    """
    row = row_of(found(ONE_GAP).tipping, side="larger")
    reference = ratio_of([b / a for a, b in FALLS])
    assert row["reference"] == pytest.approx(reference, rel=1e-12)
    assert (row["n"], row["n_filled"], row["n_neither"], row["kind"]) == (6, 1, 0, "factor")
    assert row["filled"] == pytest.approx(1 / 0.8, rel=1e-3)
    assert row["tipping"] == pytest.approx(1 / 0.8 / reference, rel=1e-3)
    assert row["unchanged_at"] < row["tipping"] < row["unchanged_at"] * 1.001
    assert row["changes"] == "P"
    assert (row["p_planned"], row["p_reference"]) == (2 / 2**6, 2 / 2**7)
    assert (row["observed_low"], row["observed_high"]) == pytest.approx((0.4, 0.9))
    assert row["n_as_far"] == 0


def test_a_reading_that_no_factor_changes_is_said_so():
    result = found(ONE_GAP)
    row = row_of(result.tipping, side="smaller")
    assert math.isnan(row["tipping"])
    assert row["range_end"] == pytest.approx(0.01)
    assert (
        "With smaller ratios filled in, week 12 vs week 0 reads the same out to 0.01 times the "
        "estimate." in result.sentences
    )


def test_a_tipping_shift_by_hand():
    """On the raw scale the falls are 10 to 60: P crosses where the rise outgrows 20."""
    result = found(ONE_GAP, ALONE.replace(marker_kind="score"), unit="points")
    row = row_of(result.tipping, side="larger")
    assert (row["kind"], row["reference"]) == ("shift", -35)
    assert row["filled"] == pytest.approx(20, abs=0.01)
    assert row["tipping"] == pytest.approx(55, abs=0.01)
    assert row["range_end"] == pytest.approx(10 * 50)
    told = sentence(result, "With larger differences")
    assert "first at a shift of 55.0 points: P changes" in told
    assert "those observed run from −60.0 to −10.0, 0 of 6 as far out." in told


def test_a_missing_first_value_is_filled_so_that_the_ratio_is_the_same():
    """The factor moves the ratio: who lacks the first value tips it like who lacks the last."""
    turned = [[NAN, 95, 100] if math.isnan(row[2]) else row for row in ONE_GAP]
    one, other = (row_of(found(rows).tipping, side="larger") for rows in (ONE_GAP, turned))
    assert one["tipping"] == pytest.approx(other["tipping"], rel=1e-3)


def test_a_reading_that_changes_at_the_estimate_itself_is_said_so():
    """Five falls have P = 0.0625; a sixth, filled with their own ratio, has 0.031."""
    rows = [[a, 95, b] for a, b in FALLS[:5]] + [[100, 95, NAN]]
    result = found(rows)
    row = row_of(result.tipping, side="smaller")
    assert (row["tipping"], row["p_reference"]) == (1, 2 / 2**6)
    assert math.isnan(row["unchanged_at"])
    assert (
        "With that alone filled in, week 12 vs week 0 already reads otherwise: P changes."
        in result.sentences
    )


VARIED = np.round(np.exp(np.random.default_rng(11).normal([[2.6, 2.3, 1.9]], 0.5, (13, 3))), 1)
VARIED[[0, 3, 5, 7, 9], [2, 2, 1, 0, 2]] = NAN
VARIED[9, 1] = NAN


def filled_by_hand(row: dict[str, Any], move: float) -> rm.OccasionTable:
    """Fill the gaps of the two occasions of a row in plain loops."""
    j, k = WEEKS.index(row["first"]), WEEKS.index(row["second"])
    pairs = []
    for a, b in VARIED[:, [j, k]].tolist():
        if math.isnan(a) and math.isnan(b):
            continue
        if row["kind"] == "factor":
            ratio = row["reference"] * move
            pairs.append([b / ratio if math.isnan(a) else a, a * ratio if math.isnan(b) else b])
        else:
            gap = row["reference"] + move
            pairs.append([b - gap if math.isnan(a) else a, a + gap if math.isnan(b) else b])
    return rm.OccasionTable.from_array(pairs, occasions=[row["first"], row["second"]])


def reading_by_hand(row: dict[str, Any], move: float, scale: Scale, family: dict[str, float]):
    """Return direction and whether Holm's P is at or below 0.05, from the filled table."""
    table = filled_by_hand(row, move).on_scale(scale)
    result = getattr(rm, row["method"])(table, row["first"], row["second"])
    ps = {**family, row["label"]: result.p_value}
    adjusted = multipletests(list(ps.values()), method="holm")[1]
    estimate = present(result.estimate)
    direction = np.sign(estimate.value - estimate.neutral)
    if row["method"] == "sign_test":  # its estimate is the probability of a fall
        direction = -direction
    return direction, adjusted[list(ps).index(row["label"])]


NEUTRAL = {"sign_test": 0.5, "rank_pair": 0.5}
"""Without change; the others estimate a ratio (1) or a difference (0)."""


@pytest.mark.parametrize("scale", ["log", "raw"])
@pytest.mark.parametrize(
    "method", ["signed_rank", "sign_flip", "trimmed_pair", "paired_t", "sign_test", "rank_pair"]
)
def test_both_sides_of_every_tipping_point_are_recomputed(method: str, scale: Scale):
    plan = rm.Plan(pair=method, scale=scale)
    result = found(VARIED, plan)
    planned = result.frame[result.frame["role"] == "primary"].set_index("label")
    family = {str(label): float(p) for label, p in planned["p"].items()}
    rows = records_of(result.tipping)
    assert {row["label"] for row in rows} == set(family)
    tipped = [row for row in rows if not math.isnan(row["tipping"])]
    assert tipped
    for row in tipped:
        before = np.sign(planned["estimate"][row["label"]] - NEUTRAL.get(method, scale == "log"))
        before = -before if method == "sign_test" else before
        shown = planned["p_adjusted"][row["label"]] <= 0.05
        same = reading_by_hand(row, row["unchanged_at"], scale, family)
        other = reading_by_hand(row, row["tipping"], scale, family)
        if not math.isnan(row["unchanged_at"]):
            assert same[0] in (before, 0)
            assert (same[1] <= 0.05) == shown
        assert other[1] == pytest.approx(row["p_adjusted_at_tipping"], rel=1e-9)
        turned = [
            name
            for name, turns in (
                ("direction", other[0] == -before),
                ("P", (other[1] <= 0.05) != shown),
            )
            if turns
        ]
        assert row["changes"] == " and ".join(turned)


def test_a_value_filled_below_the_limit_enters_as_the_plan_has_it():
    """Filled with 1/100 of anything it is below 30, and half of 30 enters: a ratio of 0.15."""
    rows = [[a, b] for a, b in FALLS] + [[100, NAN]]
    table = table_of(rows, lower_limit=30)
    from robustrm.sensitivity_analysis.missing_tipping import filling_of

    filling, _ = filling_of(table, rm.Plan(), 1, ("week 0", "week 6"))
    pair = present(filling).at(-math.log(100)).log().pair("week 0", "week 6").substitute("half")
    assert sorted(np.exp(pair.paired("week 0", "week 6")[0].values))[0] == pytest.approx(0.15)


def test_nothing_is_filled_where_nobody_has_only_one_value():
    rows = [[9, 5, 3], [8, 4, 4], [7, 5, 2], [NAN, 5, NAN]]
    result = found(rows)
    assert result.tipping.empty
    (note,) = [note for note in result.notes if note.code == "no tipping point"]
    assert "nothing to fill" in note.fact


def test_nothing_is_filled_where_most_values_lie_beyond_a_limit():
    values = np.array([[9.0, 1.0], [8.0, 1.0], [7.0, 1.0], [6.0, NAN]])
    table = table_of(values, below=values == 1)
    result = missing_sensitivity(table, rm.Plan(), root=1)
    assert result.tipping.empty
    assert any("beyond a limit" in n.fact for n in result.notes if n.code == "no tipping point")


def test_the_filling_is_said_to_be_deterministic():
    (note,) = [note for note in found(ONE_GAP).notes if note.code == "deterministic filling"]
    assert "nothing is drawn at random" in note.fact
    assert "No earlier value is carried forward" in note.action


@pytest.mark.parametrize("scale", ["log", "raw"])
@pytest.mark.parametrize("method", ["signed_rank", "sign_flip", "sign_test", "trimmed_pair"])
def test_the_scan_reads_a_pair_as_the_method_does(method: str, scale: Scale):
    """Small whole values: ties, zeros and values below 3 are common."""
    rng, plan = np.random.default_rng(5), rm.Plan(pair=method, scale=scale)
    for _ in range(20):
        values = np.maximum(rng.integers(1, 9, (9, 2)), 3).astype(float)
        table = table_of(values, below=values == 3).on_scale(scale)
        direction, p = read_pair(table, (WEEKS[0], WEEKS[1]), method, plan, (0.05,), 1)
        result = getattr(rm, method)(table, *WEEKS[:2])
        assert p == result.p_value
        assert direction == direction_of(result.estimate)


def test_the_scan_closes_in_on_the_first_change():
    looked: list[float] = []

    def changes(at: float) -> bool:
        looked.append(at)
        return 2.345 <= at < 3.1 or at > 9

    before, after = present(first_change(changes, [1.0, 2.0, 3.0, 4.0, 10.0]))
    assert before < 2.345 <= after
    assert after - before <= 1e-3
    assert max(looked) == 3.0
    assert first_change(lambda at: at > 20, [1.0, 10.0]) is None
    assert first_change(lambda at: True, [1.0]) == (0.0, 0.0)


def test_the_range_of_the_scan_is_the_stated_one():
    factors = np.exp(steps_of(np.array([0.1]), "log"))
    assert (factors[0], factors[-1], len(factors)) == pytest.approx((10**0.1, 100, 20))
    shifts = steps_of(np.array([-3.0, 2.0]), "raw")
    assert (shifts[0], shifts[-1]) == pytest.approx((0.05, 50))
    assert steps_of(np.zeros(3), "raw") == []


# ── ranks at the ends ─────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize("seed", range(4))
def test_bounds_of_a_pair_by_all_placements(seed: int):
    """Every missing change is a rise or a fall larger than all observed: 2ᵐ placements."""
    rng = np.random.default_rng(seed)
    values = rng.integers(1, 40, (8, 3)).astype(float)
    values[:, 2] += values[:, 0] == values[:, 2]  # no zero changes
    values[rng.permutation(8)[:3], rng.integers(0, 2, 3) * 2] = NAN
    plan = ALONE.replace(marker_kind="score")
    result = found(values, plan)
    changes = (values[:, 2] - values[:, 0]).tolist()
    observed = [change for change in changes if not math.isnan(change)]
    placements = list(itertools.product((-1000.0, 1000.0), repeat=len(changes) - len(observed)))
    ranked = [signed_rank_p([*observed, *placed]) for placed in placements]
    signs = [
        signed_rank_p(np.sign([*observed, *placed]).tolist())  # equal sizes: the sign test
        for placed in placements
    ]
    for method, ps in (("signed_rank", ranked), ("sign_test", signs)):
        row = row_of(result.frame, method=method, adjust="none", assumption="none on the gaps")
        assert (row["p_low"], row["p_high"]) == pytest.approx((min(ps), max(ps)), rel=1e-12)
        assert row["n"] == 8
        assert math.isnan(row["p"])


def friedman_p(rows: list[list[float]]) -> float:
    scores = [[2 * r - 2 * (len(row) + 1) for r in twice_ranks(row)] for row in rows]
    values = values_by_sums(scores, spread)
    return share_at_least(values, float(spread(np.sum(scores, axis=0)[None].astype(float))[0]))


def placed_rows(rows: list[list[float]]) -> list[list[list[float]]]:
    """Return the table with every gap at −1 or at 100, in all ways."""
    gaps = [(i, j) for i, row in enumerate(rows) for j, cell in enumerate(row) if math.isnan(cell)]
    tables = []
    for ends in itertools.product((-1.0, 100.0), repeat=len(gaps)):
        filled = [list(row) for row in rows]
        for (i, j), end in zip(gaps, ends, strict=True):
            filled[i][j] = end
        tables.append(filled)
    return tables


GAPPED: dict[str, list[list[float]]] = {
    "two gaps at one occasion": [[3, 2, 1], [5, 4, NAN], [9, 7, 8], [6, 5, NAN], [2, 3, 1]],
    "ties": [[3, 3, NAN], [5, 4, 4], [9, NAN, 9], [6, 5, NAN], [2, 2, 1]],
    "two gaps in one row": [[3, 2, 1], [5, NAN, NAN], [9, 7, 8], [NAN, 5, 4], [2, 3, 1]],
}


@pytest.mark.parametrize("name", GAPPED)
def test_bounds_of_the_friedman_test_by_all_placements(name: str):
    rows = GAPPED[name]
    ps = [friedman_p(table) for table in placed_rows(rows)]
    row = row_of(found(rows).frame, method="friedman", assumption="none on the gaps")
    assert (row["p_low"], row["p_high"]) == pytest.approx((min(ps), max(ps)), rel=1e-12)
    assert row["n"] == 5


def test_with_too_many_placements_an_occasion_goes_together(monkeypatch):
    rows = GAPPED["two gaps at one occasion"]
    monkeypatch.setattr(missing_bounds, "MOST_PLACEMENTS", 2)
    together = [
        table for table in placed_rows(rows) if table[1][2] == table[3][2]
    ]  # both gaps are at week 12
    ps = [friedman_p(table) for table in together]
    row = row_of(found(rows).frame, method="friedman", assumption="none on the gaps")
    assert row["subjects_used"].endswith("the missing values of an occasion at one end together")
    assert row["placements"] == 2
    assert (row["p_low"], row["p_high"]) == pytest.approx((min(ps), max(ps)), rel=1e-12)


def test_bounds_in_words():
    """Six falls; a seventh subject falls (2/2⁷) or rises most (rank 7: c(7) = 19, 38/2⁷)."""
    told = [text for text in found(ONE_GAP).sentences if "best to the worst" in text]
    assert told[0] == (
        "week 12 vs week 0, each missing value at one of its two ends, lowest or highest (1 "
        "subject of 7 with a gap): from the best to the worst ranks, P before adjustment is "
        "0.016 to 0.297 by the Wilcoxon signed-rank test (on both sides of 0.05); 0.016 to 0.125 "
        "by the sign test (on both sides of 0.05)."
    )
    assert told[1].startswith("All occasions, each missing value at one of its two ends")


def test_somebody_without_any_value_is_not_placed():
    with_nobody = [*ONE_GAP, [NAN, NAN, NAN]]
    one, other = (
        result.frame[result.frame["assumption"] == "none on the gaps"]
        for result in (found(ONE_GAP), found(with_nobody))
    )
    pd.testing.assert_frame_equal(one, other, check_dtype=False)


# ── as a whole ────────────────────────────────────────────────────────────────────────────


def test_the_order_of_the_rows_plays_no_part():
    table = table_of(VARIED, subjects=[f"P{i}" for i in range(13)])
    turned = table.select(subjects=table.subjects[::-1])
    one, other = (missing_sensitivity(t, rm.Plan(), root=1).to_dict() for t in (table, turned))
    assert one == other


def test_it_can_be_written_as_json():
    held = found(VARIED, rm.Plan()).to_dict()
    assert json.loads(json.dumps(held, allow_nan=False)) == held
    assert len(held["tipping"]) == 4


def test_progress_is_told():
    told: list[tuple[int, int]] = []
    missing_sensitivity(
        table_of(ONE_GAP), ALONE, root=1, progress=lambda done, total: told.append((done, total))
    )
    assert told == [(i, 5) for i in range(1, 6)]


@pytest.mark.parametrize(
    "plan",
    [
        rm.Plan(),
        rm.Plan(marker_kind="score", adjust="none"),
        rm.Plan(pair="sign_test", sides=1, direction="less", missing="complete"),
        rm.Plan(pair="conover", adjust="single-step"),
        rm.Plan(pair="rank_pair", contrasts="all", omnibus="aligned_ranks"),
    ],
    ids=["default", "raw", "one-sided", "family", "all pairs"],
)
def test_no_banned_phrase(plan: rm.Plan):
    for rows in (VARIED, ONE_GAP, [[3, NAN, 1], [NAN, 2, 2], [4, 3, NAN]]):
        result = found(rows, plan)
        words = " ".join([*result.sentences, *map(str, result.notes)])
        hits = [m[0] for banned in BANNED for m in re.finditer(banned, words, re.IGNORECASE)]
        assert hits == []


def test_a_table_of_gaps_is_answered_without_a_number():
    """Nobody has both week 0 and week 12."""
    result = found([[3, 2, NAN], [NAN, 2, 2], [4, 3, NAN]])
    row = row_of(result.frame, subjects_used="all available pairs")
    assert row["n"] == 0
    assert math.isnan(row["p"])
    assert result.tipping.empty
    assert sentence(result, "week 12 vs week 0 cannot be tested")
