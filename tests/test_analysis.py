"""A plan meets a table: roles, what stands beside, who is in it, and what may not matter."""

from __future__ import annotations

import json
import math
from importlib.resources import files

import numpy as np
import pytest

import robustrm as rm
from robustrm.analysis import stream
from robustrm.results import note_codes
from tests.methods.tables import LABELS, present, raw

NAN = math.nan
ROWS = [
    [9.1, 7.2, 6.0],
    [4.0, 3.1, 2.5],
    [12.0, 12.5, 8.0],
    [6.6, 5.0, 5.9],
    [3.3, 2.1, 2.0],
    [47.5, 26.0, 30.4],
    [5.2, 5.6, NAN],
    [8.8, NAN, 7.9],
]
TABLE = raw(ROWS)


def document(analysis: rm.Analysis) -> dict:
    """Everything an analysis says, without the record of the run."""
    found = json.loads(json.dumps(analysis.to_dict(), allow_nan=False))
    del found["record"]
    return found


def overall_p(table: rm.OccasionTable) -> float:
    return present(rm.analyze(table).omnibus).p_value


# ── roles and rows ────────────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize(("scale", "same", "other"), [("log", "log", "raw"), ("raw", "raw", "log")])
def test_every_row_has_its_role(scale, same, other):
    rows = rm.analyze(TABLE, rm.Plan(scale=scale)).rows()
    roles = [(row.role, row.result.method, row.result.scale) for row in rows]
    assert roles[:3] == [
        ("primary", "signed_rank", scale),
        ("primary", "signed_rank", scale),
        ("supporting", "friedman", scale),
    ]
    beside = {row for row in roles if row[1] in ("anova", "paired_t")}
    assert beside == {
        ("sensitivity", "anova", same),
        ("sensitivity", "paired_t", same),
        ("supplementary", "anova", other),
        ("supplementary", "paired_t", other),
    }


def test_the_primary_family_is_the_follow_up_of_the_plan():
    plan = rm.Plan(contrasts="all", adjust="hommel", zeros="drop", level=0.9, sides=1)
    analysis = rm.analyze(TABLE, plan)
    expected = rm.follow_up(
        TABLE.log(),
        family="all",
        adjust="hommel",
        level=0.9,
        options={"zeros": "drop", "alternative": "greater"},
    )
    assert [c.p_adjusted for c in analysis.primary] == [c.p_adjusted for c in expected]
    assert [c.estimate for c in analysis.primary] == [c.estimate for c in expected]
    assert present(analysis.omnibus).p_value == rm.friedman(TABLE).p_value


def test_the_parametric_results_stand_beside_on_both_scales_with_bonferroni():
    beside = rm.analyze(TABLE).beside
    for scale, table in (("raw", TABLE), ("log", TABLE.log())):
        rows = [row for row in beside if row.result.scale == scale]
        assert [row.result.method for row in rows] == ["anova", "paired_t", "paired_t"]
        assert rows[0].result.p_value == rm.anova(table).p_value
        for row, later in zip(rows[1:], LABELS[1:], strict=False):
            alone = rm.paired_t(table, LABELS[0], later)
            assert row.result.estimate == alone.estimate
            assert row.p_adjusted == pytest.approx(min(1, 2 * alone.p_value))
            assert row.adjust == "bonferroni"


def test_planned_contrasts_are_shown_whatever_the_overall_test_says():
    flat = raw([[5.0, 5.1, 4.9], [7.0, 6.8, 7.1], [3.0, 3.1, 3.2], [9.0, 9.1, 8.8]])
    steep = raw([[9, 6, 4], [8, 5, 3], [7, 4, 2], [19, 12, 8], [29, 14, 9], [6, 5, 1]])
    for table in (flat, steep):
        analysis = rm.analyze(table)
        assert len(analysis.primary) == 2
        assert all(c.estimate is not None for c in analysis.primary)
        assert all(c.label in str(analysis) for c in analysis.primary)
    assert overall_p(flat) > 0.05 > overall_p(steep)


def test_every_result_carries_estimand_scale_and_n():
    for row in rm.analyze(TABLE).rows():
        assert row.result.estimand
        assert row.result.scale in ("raw", "log")
        assert row.result.n_subjects == len(row.result.subjects) > 0


# ── what could not be done ────────────────────────────────────────────────────────────────────


def test_a_zero_stops_a_log_plan_with_the_question():
    table = raw([[0.0, 1.2], [2.0, -1.0], [3.0, 1.0]])
    with pytest.raises(rm.DataError, match="below a limit, or a true zero") as caught:
        rm.analyze(table)
    assert [p.code for p in caught.value.problems] == ["not positive", "not positive"]
    assert "'S1' has 0 at 'week 0'" in str(caught.value)
    assert "'S2' has −1.00 at 'week 2'" in str(caught.value)


@pytest.mark.parametrize("plan", [rm.Plan(scale="raw"), rm.Plan(marker_kind="count")])
def test_a_zero_on_the_raw_scale_costs_only_the_log_results_beside(plan):
    table = raw([[0, 1, 2], [2, 3, 5], [3, 1, 4], [7, 2, 9]])
    analysis = rm.analyze(table, plan)
    assert {row.result.scale for row in analysis.beside} == {"raw"}
    (skip,) = analysis.skips
    assert skip.analysis == "parametric results (log scale)"
    assert "below a limit, or a true zero?" in skip.reason


def test_what_too_few_subjects_leave_undone_is_listed_with_its_reason():
    rows = [[1.0, 2.0, NAN], [2.0, 3.5, NAN], [3.0, NAN, 1.0], [4.0, 5.0, NAN]]
    analysis = rm.analyze(raw(rows))
    assert analysis.omnibus is None
    reasons = {skip.analysis: skip.reason for skip in analysis.skips}
    assert (
        "needs at least 1 subject with all 3 occasions, got none"
        in reasons["Friedman test (log scale)"]
    )
    assert "Within-subject analysis of variance (raw scale)" in reasons
    pairs = [row for row in analysis.beside if row.result.method == "paired_t"]
    assert {row.result.n_subjects for row in pairs} == {3, 1}
    assert [c.result.n_subjects for c in analysis.primary] == [3, 1]


# ── who is in it ──────────────────────────────────────────────────────────────────────────────


def test_inclusions_add_up_to_the_n_of_every_analysis():
    analysis = rm.analyze(TABLE)
    counts: dict[str, int] = {}
    for entry in analysis.inclusions:
        counts[entry.analysis] = counts.get(entry.analysis, 0) + entry.included
        assert bool(entry.reason) != entry.included
    assert list(counts.values()) == [row.result.n_subjects for row in analysis.rows()]
    assert len(analysis.inclusions) == TABLE.n_subjects * len(counts)


def test_a_subject_left_out_is_named_with_the_occasion_that_is_missing():
    left = [e for e in rm.analyze(TABLE).inclusions if not e.included]
    assert {(e.subject, e.reason) for e in left} == {
        ("S7", "no value at week 6 (missing)"),
        ("S8", "no value at week 2 (missing)"),
    }


def test_the_smallest_attainable_p_is_said():
    analysis = rm.analyze(raw(ROWS[:6]), rm.Plan(contrasts="all"))
    assert analysis.attainable.smallest_p_adjusted == pytest.approx(3 * 2.0**-5)
    assert "With 6 subjects and 3 comparisons the smallest p is 0.03" in str(analysis)
    assert document(analysis)["attainable"]["reachable"] is False


# ── notes ─────────────────────────────────────────────────────────────────────────────────────


def test_notes_say_what_the_design_cannot_show():
    codes = note_codes(rm.analyze(TABLE).notes)
    assert {"exploratory", "single arm", "missing occasions", "sd exceeds mean"} <= set(codes)
    plan = rm.Plan(purpose="confirmatory", design="randomised-order")
    codes = note_codes(rm.analyze(raw([[1, 2], [2, 3], [3, 5]]), plan).notes)
    assert codes == ()


def test_values_beyond_a_limit_are_counted_in_a_note():
    below = [[False, False, True], *[[False] * 3] * 3]
    rows = [[2.0, 1.0, 0.3], [3.0, 2.0, 1.5], [1.0, 0.8, 0.7], [4.0, 3.0, 2.0]]
    analysis = rm.analyze(raw(rows, below=below, lower_limit=0.3))
    (note,) = [note for note in analysis.notes if note.code == "limits"]
    assert "1 value below and 0 above a limit (week 6 25%)" in note.fact


# ── what may not matter ───────────────────────────────────────────────────────────────────────


def test_shuffling_the_rows_changes_nothing():
    names = [f"P{i}" for i in range(1, 9)]
    expected = document(rm.analyze(raw(ROWS, subjects=names), rng=1))
    rng = np.random.default_rng(3)
    for _ in range(3):
        order = rng.permutation(8)
        table = raw(np.array(ROWS)[order], subjects=[names[i] for i in order])
        assert document(rm.analyze(table, rng=1)) == expected


def test_renaming_the_subjects_changes_no_number():
    def numbers(names):
        return [
            (row.result.statistic, row.result.p_value, row.p_adjusted, row.result.estimate)
            for row in rm.analyze(raw(ROWS, subjects=names), rng=1).rows()
        ]

    assert numbers([f"A{i}" for i in range(8)]) == numbers([f"B{9 - i}" for i in range(8)])


def test_the_root_of_all_draws_follows_its_stated_order():
    wide = raw(np.random.default_rng(0).lognormal(size=(40, 6)).round(3))
    plan = rm.Plan(stages=(99,), omnibus="friedman", seed=5)

    def run(**options):
        analysis = rm.analyze(wide, plan, **options)
        assert present(analysis.omnibus).null == "monte carlo"
        return analysis

    by_plan, by_argument = run(), run(rng=6)
    assert by_plan.record["seed"] == "5"
    assert by_argument.record["seed"] == "6"
    assert by_plan.omnibus.p_value == run(rng=5).omnibus.p_value
    generator = run(rng=np.random.default_rng(1))
    assert generator.record["seed"] == run(rng=np.random.default_rng(1)).record["seed"]
    assert int(generator.record["seed"]) > 2**64
    again = run(rng=int(generator.record["seed"]))
    assert document(again) == document(generator)


def test_a_fresh_root_is_recorded():
    one, other = (rm.analyze(TABLE, rm.Plan(companions=())) for _ in range(2))
    assert one.record["seed"] != other.record["seed"]
    # everything but bootstrap intervals of effect sizes is exact here
    assert {**document(one), "effects": []} == {**document(other), "effects": []}


def test_streams_of_different_methods_are_different_and_fixed():
    assert stream(1, "friedman").spawn_key != stream(1, "quade").spawn_key
    assert stream(1, "friedman").generate_state(2).tolist() == (
        stream(1, "friedman").generate_state(2).tolist()
    )


# ── the rest ──────────────────────────────────────────────────────────────────────────────────


def test_progress_is_told_step_by_step_to_the_end():
    seen = []
    rm.analyze(TABLE, progress=lambda done, total: seen.append((done, total)))
    assert [done for done, _ in seen] == list(range(1, len(seen) + 1))
    assert seen[-1][0] == seen[-1][1]
    assert len({total for _, total in seen}) == 1


def test_a_planned_occasion_that_the_table_has_not_is_refused():
    plan = rm.Plan(contrasts=(("week 0", "week 5"),))
    with pytest.raises(rm.ArgumentError, match=r"`contrasts` must name one of .*got 'week 5'"):
        rm.analyze(TABLE, plan)


def test_effects_and_summary_are_those_of_the_methods():
    analysis = rm.analyze(TABLE)
    names = [effect.estimate.name for effect in analysis.effects]
    assert names[0] == "probability of a fall"
    assert names[-1] == "Kendall's W"
    assert [s.n for s in analysis.summary] == [8, 7, 7]


def test_the_table_of_an_analysis_is_raw_and_in_natural_order():
    names = ["P10", "P9", "P2", "P1", "P30", "P4", "P20", "P3"]
    analysis = rm.analyze(raw(ROWS, subjects=names))
    assert analysis.table.subjects == ("P1", "P2", "P3", "P4", "P9", "P10", "P20", "P30")
    assert analysis.table.scale == "raw"
    assert analysis.scale == "log"


# ── what a first user meets ───────────────────────────────────────────────────────────────────


def test_a_pair_against_time_is_refused_with_the_right_order():
    plan = rm.Plan(contrasts=(("week 6", "week 0"),), sides=1, direction="less")
    with pytest.raises(rm.ArgumentError, match=r"Did you mean \('week 0', 'week 6'\)\?"):
        rm.analyze(TABLE, plan)
    unordered = rm.analyze(TABLE, plan.replace(in_time=False)).primary
    assert unordered["week 6", "week 0"].label == "week 0 vs week 6"


def test_another_kind_of_plan_or_table_is_refused():
    with pytest.raises(rm.ArgumentError, match="`plan` a Plan, got OccasionTable and dict"):
        rm.analyze(TABLE, {"adjust": "holm"})  # type: ignore[arg-type]


def test_the_adjusted_p_is_followed_over_the_substitutes():
    """On the demo Holm's P of week 12 crosses .05 while the unadjusted P stays below."""
    path = str(files("robustrm.demo") / "calprotectin.csv")
    weeks = ["week 0", "week 2", "week 6", "week 12"]
    family = rm.analyze(rm.read_table(path, subject="patient", occasions=weeks)).primary
    details = family["week 0", "week 12"].result.details
    spread, over = details["substitutes"], details["over_substitutes"]
    assert spread["p_value"][1] <= 0.05 < over["p_adjusted"][1]
    assert (spread["reading"], over["reading"]) == ("unchanged", "changes")
    (note,) = [note for note in family.notes if note.code == "substitutes, adjusted"]
    assert note.consequence == "The reading depends on the substitute for week 12 vs week 0."
    # by hand: Holm multiplies the smallest of three p values by 3
    assert over["p_adjusted"][0] == pytest.approx(3 * spread["p_value"][0])
