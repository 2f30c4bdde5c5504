"""Level and power by simulation: the batched tests are the methods, and the evidence holds.

Expected p values come from the methods on the same data, from the engine's exact laws, and from
every arrangement of small tables.
"""

from __future__ import annotations

import itertools
import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

import robustrm as rm
from robustrm.errors import ArgumentError
from robustrm.kernels.null.engine import law, tail
from robustrm.kernels.null.forms import centring, linear
from robustrm.kernels.null.tables import permutation_tables, sign_tables
from robustrm.kernels.scores import mean_scores
from robustrm.methods.adjusting import adjusted
from robustrm.methods.registry import method
from robustrm.simulation import Design, draw
from robustrm.trials import evidence
from robustrm.trials.__main__ import main
from robustrm.trials.families import (
    CLOSED,
    FAMILIES,
    adjusted_p_values,
    all_pairs,
    closed_p,
    holm_p,
)
from robustrm.trials.level import (
    ALPHA,
    Row,
    Run,
    cells_a,
    cells_b,
    cells_c,
    family_rows,
    is_asked,
    is_inside,
    level_rows,
    mean_level,
    standard_error,
    with_limits,
    z_of,
)
from robustrm.trials.p_values import (
    MIRRORED,
    OMNIBUS,
    PAIRS,
    PERMUTED,
    TESTS,
    needs_draws,
    p_values,
    p_values_of,
)

EVIDENCE = Path(__file__).resolve().parents[1] / "docs" / "evidence"


def table_of(values: np.ndarray) -> rm.OccasionTable:
    labels = [f"visit {j}" for j in range(values.shape[1])]
    return rm.OccasionTable.from_array(values, occasions=labels)


def ends(table: rm.OccasionTable) -> tuple[str, ...]:
    return (table.occasions[0], table.occasions[-1])


def rounded(n: int, k: int, seed: int, decimals: int = 2) -> np.ndarray:
    return np.round(draw(Design(n=n, k=k), 1, seed=seed)[0], decimals)


def within_monte_carlo(p_drawn, p_exact, draws: int) -> bool:
    """Whether drawn p values lie in the central 1 − 1e-5 of their binomial law."""
    hits = np.rint(np.asarray(p_drawn) * (draws + 1) - 1)
    low, high = stats.binom.interval(1 - 1e-5, draws, np.clip(p_exact, 0, 1))
    return bool(((low <= hits) & (hits <= high)).all())


# ── the batched tests are the methods ─────────────────────────────────────────────────────


@pytest.mark.parametrize("test", [*PERMUTED, *MIRRORED])
@pytest.mark.parametrize(("n", "k", "decimals"), [(7, 3, 2), (6, 4, 0), (9, 5, 15)])
def test_scores_are_those_of_the_method(test: str, n: int, k: int, decimals: int):
    values = rounded(n, k, seed=n, decimals=decimals)
    table = table_of(values)
    on = ends(table) if test in PAIRS else ()
    problem = method(test).module().problem(table, *on)
    # the method puts rows in canonical order and may use another unit: compare sorted shares
    ours = {**PERMUTED, **MIRRORED}[test](values).reshape(n, -1)
    theirs = np.asarray(problem.scores).reshape(n, -1)
    ours, theirs = (rows / max(np.abs(rows).max(), 1e-9) for rows in (ours, theirs))
    ours, theirs = (rows[np.lexsort(np.round(rows, 6).T)] for rows in (ours, theirs))
    np.testing.assert_allclose(ours, theirs, atol=1e-9)


@pytest.mark.parametrize("test", ["friedman", "anova", "signed_rank", "sign_test", "paired_t"])
@pytest.mark.parametrize(("n", "k"), [(6, 3), (9, 4), (11, 3)])
def test_p_values_without_draws_are_those_of_the_method(test: str, n: int, k: int):
    design = Design(n=n, k=k)
    found = p_values(design, [test], 12, draws=99, seed=2)[:, 0]
    assert not needs_draws(test, design)
    for values, p in zip(draw(design, 12, seed=2), found, strict=True):
        table = table_of(values)
        on = ends(table) if test in PAIRS else ()
        assert p == pytest.approx(getattr(rm, test)(table, *on).p_value, rel=1e-9)


@pytest.mark.parametrize("test", [*PERMUTED, *MIRRORED])
@pytest.mark.parametrize("errors", ["normal", "lognormal"])
def test_drawn_p_values_agree_with_the_exact_ones(test: str, errors):
    # 30% below a limit: everything is tied somewhere, so every test is drawn
    design = Design(n=6, k=3, errors=errors, limit=0.3)
    assert needs_draws(test, design)
    found = p_values(design, [test], 6, draws=4_999, seed=3)[:, 0]
    for values, p in zip(draw(design, 6, seed=3), found, strict=True):
        table = table_of(values)
        on = ends(table) if test in PAIRS else ()
        exact = getattr(rm, test)(table, *on, null="exact").p_value
        assert within_monte_carlo(p, exact, 4_999)


@pytest.mark.parametrize("family", CLOSED)
@pytest.mark.parametrize("k", [3, 4])
def test_closed_p_values_agree_with_the_exact_follow_ups(family: str, k: int):
    values = rounded(5, k, seed=k) + np.arange(k) * 0.4
    found = closed_p(CLOSED[family](values)[None], 4_999, np.random.default_rng(1))[0]
    pairs = rm.follow_up(
        table_of(values), method=family.removeprefix("closed "), family="all", adjust="closed"
    )
    exact = {(pair.first, pair.second): pair.p_adjusted for pair in pairs}
    ordered = [exact[f"visit {a}", f"visit {b}"] for a, b in all_pairs(k)]
    # a largest p value of several drawn ones is a little above the largest exact one
    assert within_monte_carlo(found, ordered, 4_999)


def test_holm_is_that_of_the_library():
    values = draw(Design(n=9, k=4, shift=(0.0, 0.0, 0.0, 1.5)), 6, seed=4)
    pairs = all_pairs(4)
    for each, found in zip(values, holm_p(values), strict=True):
        raw = [rm.signed_rank(table_of(each[:, pair]), "visit 0", "visit 1").p_value
               for pair in map(list, pairs)]  # fmt: skip
        np.testing.assert_allclose(found, adjusted(raw, "holm"))


# ── streams ───────────────────────────────────────────────────────────────────────────────


def test_more_data_sets_and_other_tests_change_no_p_value():
    design = Design(n=6, k=3, errors="t3")
    few = p_values(design, TESTS, 30, draws=99, seed=1)
    many = p_values(design, TESTS, 130, draws=99, seed=1)
    np.testing.assert_array_equal(many[:30], few)
    for place, test in enumerate(TESTS):
        alone = p_values(design, [test], 30, draws=99, seed=1)
        np.testing.assert_array_equal(alone[:, 0], few[:, place])
    assert (p_values(design, TESTS, 30, draws=99, seed=2) != few).any(axis=0).all()


def test_more_data_sets_change_no_adjusted_p_value():
    design = Design(n=6, k=3, shift=(0.0, 0.0, 1.0))
    few = adjusted_p_values(design, 20, draws=99, seed=1)
    assert few.shape == (20, len(FAMILIES), 3)
    np.testing.assert_array_equal(adjusted_p_values(design, 120, draws=99, seed=1)[:20], few)


def test_rearrangements_are_drawn_anew_for_each_data_set():
    values = np.repeat(rounded(8, 3, seed=5)[None], 40, axis=0)
    found = p_values_of(
        values,
        ["aligned_ranks", "row_flip"],
        draws=99,
        permutations=np.random.default_rng(1),
        mirrors=np.random.default_rng(2),
        resamples=np.random.default_rng(3),
        tied=False,
    )
    assert (np.ptp(found, axis=0) > 0).all()


def test_progress_is_told_after_every_block():
    seen: list[tuple[int, int]] = []
    p_values(
        Design(n=4, k=3),
        ["anova"],
        150,
        seed=1,
        progress=lambda done, all_: seen.append((done, all_)),
    )
    assert seen == [(100, 150), (150, 150)]


def test_what_is_not_offered_is_refused():
    with pytest.raises(ArgumentError, match="Did you mean 'friedman'"):
        p_values(Design(n=4, k=3), ["fridman"], 10, seed=1)
    with pytest.raises(ArgumentError, match=r"`limit` must be 0 .+, got 0\.3"):
        adjusted_p_values(Design(n=4, k=3, limit=0.3), 10, seed=1)


# ── exact level on an orbit: no sampling error ────────────────────────────────────────────


def assert_level(p: np.ndarray, weights: np.ndarray | None = None) -> None:
    """P(p <= a) <= a at every attainable a."""
    shares = np.full(len(p), 1 / len(p)) if weights is None else weights
    for a in np.unique(p):
        assert shares[p <= a * (1 + 1e-12)].sum() <= a * (1 + 1e-9)


CELLS = st.lists(st.lists(st.integers(0, 4), min_size=3, max_size=3), min_size=2, max_size=3)


@pytest.mark.property
@pytest.mark.parametrize("test", PERMUTED)
@given(rows=CELLS)
def test_a_permutation_test_is_level_on_every_orbit(test: str, rows: list[list[int]]):
    # Every arrangement is scored afresh, as if it were the data: that p depends on the orbit
    # and the statistic alone is part of what is shown.
    orders = [list(itertools.permutations(row)) for row in rows]
    arranged = np.array(list(itertools.product(*orders)), dtype=float)
    scores = PERMUTED[test](arranged)
    form = centring(3)
    distinct, inverse = np.unique(np.round(scores.sum(axis=1), 9), axis=0, return_inverse=True)
    first = [int(np.flatnonzero(inverse.ravel() == place)[0]) for place in range(len(distinct))]
    found = [
        tail(permutation_tables(scores[i]), scores[i].sum(axis=0), form, null="exact").p_value
        for i in first
    ]
    assert_level(np.array(found)[inverse.ravel()])


@pytest.mark.property
@given(rows=CELLS)
def test_the_row_flip_is_level_on_every_orbit(rows: list[list[int]]):
    values = 3.0 * np.array(rows)
    signs = np.array(list(itertools.product([-1.0, 1.0], repeat=len(rows))))
    level = values.mean(axis=1, keepdims=True)
    scores = mean_scores(level + signs[..., None] * (values - level))
    p = [
        tail(sign_tables(each), each.sum(axis=0), centring(3), null="exact").p_value
        for each in scores
    ]
    assert_level(np.array(p))


@pytest.mark.property
@pytest.mark.parametrize("test", ["signed_rank", "sign_test", "sign_flip"])
@given(rows=CELLS)
def test_a_pair_test_is_level_when_the_pair_is_swapped(test: str, rows: list[list[int]]):
    pairs = [[row, row[::-1]] for row in rows]
    arranged = np.array(list(itertools.product(*pairs)), dtype=float)
    scores = MIRRORED[test](arranged)[..., 0]
    p = [tail(sign_tables(each), each.sum(), linear(1.0), null="exact").p_value for each in scores]
    assert_level(np.array(p))


@pytest.mark.property
@pytest.mark.parametrize("test", ["friedman", "quade", "aligned_ranks"])
@given(
    rows=st.integers(3, 4).flatmap(
        lambda k: st.lists(
            st.lists(st.integers(0, 5), min_size=k, max_size=k), min_size=4, max_size=6
        )
    )
)
def test_whole_scores_are_level_by_their_law(test: str, rows: list[list[int]]):
    # k times whole numbers have whole means: rounding does not split what is tied
    scores = PERMUTED[test](len(rows[0]) * np.array(rows, dtype=float))
    null = law(permutation_tables(scores), centring(scores.shape[1]))
    assert null is not None
    p = np.array([null.at_least(value).p_value for value in null.values])
    assert_level(p, null.probabilities)


# ── tables and limits ─────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize(
    ("options", "inside"),
    [
        ({}, set(TESTS)),
        ({"errors": "t3"}, set(TESTS) - {"anova", "paired_t"}),
        ({"errors": "lognormal"}, set(TESTS) - {"anova", "paired_t", "row_flip"}),
        ({"limit": 0.3}, set(TESTS) - {"anova", "paired_t", "row_flip"}),
        ({"rho": 0.7}, set(TESTS) - set(PERMUTED)),
        ({"slope_sd": 0.5, "errors": "t3"}, {"row_flip", "signed_rank", "sign_test", "sign_flip"}),
        ({"rho": 0.7, "errors": "lognormal"}, set()),
        ({"shift": (0.0, 0.0, 1.0)}, set()),
    ],
)
def test_what_lies_inside_a_null(options, inside: set[str]):
    design = Design(n=6, k=3, **options)
    assert {test for test in TESTS if is_inside(test, design)} == inside
    # asked beyond its null: a parametric test, where the errors are symmetric
    beyond = {test for test in TESTS if is_asked(test, design)} - inside
    centred = design.symmetric and design.equal_centres
    assert beyond == ({"anova", "paired_t"} - inside if centred else set())


def test_the_limit_is_the_stated_one():
    # z = 3.1 for 24 cells and 3.7 for 240 (Bonferroni, two-sided): .065 and .069 at 2,000.
    assert z_of(24) == pytest.approx(3.08, abs=0.005)
    assert z_of(240) == pytest.approx(3.71, abs=0.005)
    assert ALPHA + z_of(24) * standard_error(2_000) == pytest.approx(0.065, abs=5e-4)
    # five cells of 20: .05 + 3 √(.05 · .95 / 100)
    row = level_rows("A", Design(n=4, k=3), Run(datasets=20, seed=1, draws=99))[0]
    assert mean_level([row] * 5)[1] == pytest.approx(0.05 + 3 * np.sqrt(0.0475 / 100))


def test_a_rate_above_its_limit_does_not_hold():
    rows = level_rows("B", Design(n=4, k=3, rho=0.7), Run(datasets=100, seed=1, draws=99))
    bad = [replace(row, rejections=60, rate=0.6) for row in rows]
    assert not any(row.holds for row in with_limits(bad))
    text = evidence.page([*with_limits(bad), *others()], "versions")
    asked = [row for row in bad if row.asked]
    assert text.count("- above it: ") == len(asked)
    # outside the null in brackets, above the limit bold
    assert "**(0.600)**" in text
    assert "**0.600**" in text


def others() -> list[Row]:
    """Rows of tables A and C, small."""
    run = Run(datasets=100, seed=1, draws=99)
    a = with_limits(level_rows("A", Design(n=4, k=3), run))
    return [*a, *with_limits(family_rows(Design(n=10, k=3, shift=(0.0, 0.0, 1.0)), run))]


def test_familywise_error_counts_data_sets_and_power_counts_pairs():
    design = Design(n=8, k=4, shift=(0.0, 0.0, 0.0, 2.0))
    run = Run(datasets=60, seed=3, draws=199)
    rejected = adjusted_p_values(design, 60, draws=199, seed=3) <= ALPHA
    rows = {(row.measure, row.test): row for row in family_rows(design, run)}
    equal = [place for place, pair in enumerate(all_pairs(4)) if 3 not in pair]
    for place, family in enumerate(FAMILIES):
        error, power = rows["familywise", family], rows["power", family]
        assert error.rejections == rejected[:, place, equal].any(axis=1).sum()
        assert power.rate == np.delete(rejected[:, place], equal, axis=1).mean()
        assert (error.inside, error.asked, power.asked, power.limit) == (True, True, False, None)


# ── the shipped evidence ──────────────────────────────────────────────────────────────────


@pytest.fixture(scope="module")
def shipped() -> list[Row]:
    return evidence.read_csv(EVIDENCE / evidence.CSV)


def test_the_csv_has_every_cell_of_the_tables(shipped: list[Row]):
    def cells(table):
        return {(r.errors, r.below_limit, r.n, r.k, r.correlation, r.spread, r.shift)
                for r in shipped if r.table == table}  # fmt: skip

    planned = {"A": cells_a(), "B": cells_b(), "C": cells_c()}
    assert {table: len(cells(table)) for table in planned} == {"A": 30, "B": 36, "C": 72}
    assert {table: len(designs) for table, designs in planned.items()} == {
        "A": 30, "B": 36, "C": 72,
    }  # fmt: skip
    for table, tests in (("A", TESTS), ("B", TESTS), ("C", FAMILIES)):
        assert {row.test for row in shipped if row.table == table} == set(tests)
    assert {row.datasets for row in shipped} == {2_000}
    assert {row.draws for row in shipped} == {0, 999}


def test_the_page_is_made_from_the_csv(shipped: list[Row]):
    text = (EVIDENCE / evidence.PAGE).read_text(encoding="utf-8")
    made_by = re.search(r"Made with (.+)\.$", text, re.M)
    assert made_by
    assert evidence.page(shipped, made_by[1]) == text


def test_the_csv_agrees_with_itself(shipped: list[Row]):
    for table in "ABC":
        rows = [row for row in shipped if row.table == table]
        assert with_limits(rows) == rows
    for row in shipped:
        pairs = row.k - 1 if row.measure == "power" else 1
        assert row.rate == pytest.approx(row.rejections / (row.datasets * pairs))


def test_the_rates_that_are_asked_to_hold_do(shipped: list[Row]):
    asked = [row for row in shipped if row.asked]
    assert len(asked) > 500
    assert [row for row in asked if not row.holds] == []


@pytest.mark.parametrize("test", TESTS)
@pytest.mark.parametrize("table", ["A", "B"])
def test_the_mean_over_cells_is_at_most_the_level(shipped: list[Row], table: str, test: str):
    asked = [r for r in shipped if r.table == table and r.test == test and r.asked]
    if table == "B" and test in PERMUTED:
        assert asked == []
        return
    mean, bound = mean_level(asked)
    assert mean <= bound


def test_the_command_writes_both_files(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys):
    shifts = {"cells_a": (), "cells_b": (), "cells_c": (0.0, 0.0, 1.0)}
    for name, shift in shifts.items():
        cells = [Design(n=10, k=3, shift=shift)]
        monkeypatch.setattr(f"robustrm.trials.level.{name}", lambda cells=cells: cells)
    main(["level", "--datasets", "12", "--draws", "99", "--seed", "5", "--out", str(tmp_path)])
    assert sorted(path.name for path in tmp_path.iterdir()) == [evidence.CSV, evidence.PAGE]
    rows = evidence.read_csv(tmp_path / evidence.CSV)
    assert {(row.datasets, row.seed) for row in rows} == {(12, 5)}
    assert len(rows) == 2 * len(TESTS) + 2 * len(FAMILIES)
    seen = capsys.readouterr()
    assert seen.out == ""
    assert "3 of 3 cells" in seen.err


# ── slow: cells remade ────────────────────────────────────────────────────────────────────


@pytest.mark.slow
@pytest.mark.parametrize(
    "design",
    [Design(n=6, k=3), Design(n=10, k=4, errors="contaminated"), Design(n=20, k=3, errors="t3")],
    ids=lambda design: design.key,
)
def test_table_a_holds_from_another_seed(design: Design):
    rows = level_rows("A", design, Run(datasets=2_000, seed=20))
    # three cells of all tests: the limit of so many rates
    limit = ALPHA + z_of(3 * len(TESTS)) * standard_error(2_000)
    assert [(row.test, row.rate) for row in rows if row.asked and row.rate > limit] == []


@pytest.mark.slow
def test_the_row_flip_holds_under_serial_correlation_from_another_seed():
    design = Design(n=10, k=4, rho=0.7)
    found = p_values(design, ["row_flip"], 2_000, seed=21)
    assert (found <= ALPHA).mean() <= ALPHA + z_of(1) * standard_error(2_000)


@pytest.mark.slow
@pytest.mark.parametrize("table", ["A", "C"])
def test_a_shipped_cell_is_made_again_to_the_last_count(shipped: list[Row], table: str):
    rows = [row for row in shipped if row.table == table and (row.n, row.k) == (10, 3)]
    run = Run(datasets=2_000, seed=shipped[0].seed)
    if table == "A":
        design = next(c for c in cells_a() if (c.errors, c.n, c.k) == ("t3", 10, 3))
        made = level_rows(table, design, run)
    else:
        design = next(c for c in cells_c() if (c.n, c.k, len(c.shift)) == (10, 3, 3))
        made = family_rows(design, run)
    kept = {(r.errors, r.correlation, r.shift, r.test, r.measure): r.rejections for r in rows}
    for row in made:
        key = (row.errors, row.correlation, row.shift, row.test, row.measure)
        assert kept[key] == row.rejections


def test_the_tests_have_a_place_in_the_list_of_methods():
    assert {method(test).kind for test in OMNIBUS} == {"omnibus"}
    assert {method(test).kind for test in PAIRS} == {"pair"}
