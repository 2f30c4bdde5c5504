"""The record of the advice: its cells, its tests, and what was shipped."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pytest

import robustrm as rm
from robustrm.advice.record import likely_law, nearest, record
from robustrm.advice.rule import Facts
from robustrm.plan import Plan
from robustrm.simulation import draw
from robustrm.trials import grid, grid_page, habits
from robustrm.trials.own_design import simulate_own_design
from robustrm.trials.tabulating import read_csv

ROOT = Path(__file__).resolve().parents[2]
RECORD = ROOT / "robustrm" / "advice" / "record.csv"
PAGE = ROOT / "docs" / "evidence" / "advice.md"


@pytest.fixture(scope="module")
def shipped() -> list[grid.GridRow]:
    return read_csv(RECORD, grid.GridRow)


def test_the_grid_is_the_fraction_that_is_declared():
    cells = grid.cells()
    assert len(cells) <= grid.MOST_CELLS
    assert len({(cell.group, cell.name) for cell in cells}) == len(cells)
    assert sum(cell.group == "pair" for cell in cells) <= 24
    assert sum(cell.group == "regret" for cell in cells) == 24
    null = [cell for cell in cells if cell.group == "null"]
    assert {(c.design.n, c.design.k) for c in null} == {(n, k) for n in (6, 10, 20) for k in (3, 4)}
    assert {c.design.errors for c in null} == set(grid.LAWS)
    assert all(cell.design.exchangeable for cell in null)
    assert not any(c.design.exchangeable for c in cells if c.group == "not exchangeable")


def test_the_page_is_made_from_the_shipped_rows(shipped):
    made = grid_page.page_text(shipped).splitlines()
    told = PAGE.read_text(encoding="utf-8").splitlines()
    # versions stand in one line
    assert [a for a, b in zip(made, told, strict=True) if a != b and "Made with" not in a] == []


def test_every_verdict_of_the_shipped_record_holds(shipped):
    found = grid_page.verdicts(shipped)
    assert len(found) == 6
    assert not [text for text in found if "does not hold" in text]


def test_the_advised_test_is_what_advice_gives_on_the_data_sets():
    for cell in (grid.Cell("pair", grid.base(limit=0.4)), grid.Cell("null", grid.base(n=6))):
        for values in draw(cell.design, 3, seed=5):
            lowest = values.min() if cell.design.limit else None
            table = rm.OccasionTable.from_array(
                values,
                occasions=["a", "b", "c"],
                below=values == values.min() if cell.design.limit else None,
                lower_limit=lowest,
            )
            assert rm.advise(table).plan.omnibus == grid.advised_test(cell)


def test_a_score_is_not_taken_on_logs():
    cell = grid.Cell("null", grid.base(errors="normal"))
    assert grid.LOG not in grid.tests_of(cell)
    assert grid.LOG in grid.tests_of(grid.Cell("null", grid.base()))


def test_the_pretest_takes_f_where_the_residuals_pass():
    rng = np.random.default_rng(1)
    plain = rng.standard_normal((40, 14, 3))
    f_p, friedman_p = np.full(40, 0.2), np.full(40, 0.7)
    assert (habits.pretest_p(plain, f_p, friedman_p) == 0.2).mean() > 0.8
    assert (habits.pretest_p(np.exp(2 * plain), f_p, friedman_p) == 0.7).mean() > 0.9


def test_the_smallest_p_is_the_smallest_of_those_tried():
    found = {test: np.array([0.5, 0.2]) for test in habits.TRIED}
    found["friedman"] = np.array([0.01, 0.9])
    assert habits.smallest_p(found).tolist() == [0.01, 0.2]


def test_regret_is_measured_on_the_half_that_did_not_choose():
    """Two tests: the second is best in the first half only, the advised one in the second."""
    tests = (grid.ADVISED, *grid.LEVEL_HOLDING)
    hits = np.zeros((8, len(tests)), bool)
    hits[:4, 2] = True  # best where it is chosen, never hits where it is measured
    hits[4:, 0] = True
    hits[4:, 3] = True
    # chosen on the first half: test 2, measured on the second: 0 − 1; chosen on the second: test 3,
    # measured on the first: 0 − 0
    assert grid.regret(hits, tests) == pytest.approx((-1 + 0) / 2)


def test_neither_block_nor_progress_changes_a_count():
    cell = grid.Cell("factor", grid.changed(grid.base(n=6)), grid.CHANGE)
    seen: list[tuple[int, int]] = []
    told = grid.rejected(cell, 150, draws=99, seed=3, progress=lambda *step: seen.append(step))
    assert seen == [(100, 150), (150, 150)]
    assert (told[:100] == grid.rejected(cell, 100, draws=99, seed=3)).all()


@pytest.mark.slow
@pytest.mark.parametrize("place", [0, 3, 60])
def test_a_shipped_cell_is_remade_to_the_last_count(shipped, place):
    """The base, the smallest study, and a cell of the null."""
    cell = grid.cells()[place]
    run = next(row for row in shipped if row.group == cell.group)
    made = grid.cell_rows(cell, run.datasets, draws=run.draws, seed=run.seed)
    by_place: dict[grid.GridRow, list[grid.GridRow]] = {}
    for row in shipped:
        key = dataclasses.replace(row, test="", rejections=0, rate=0)
        by_place.setdefault(key, []).append(row)
    assert made in list(by_place.values())


# ── what the advice quotes ────────────────────────────────────────────────────────────────────


def facts(n: int, k: int, **plan) -> Facts:
    return Facts(Plan(**plan), None, n, k)


def test_every_cell_that_can_be_quoted_has_the_tests_that_are_named():
    for cell in record():
        assert {"advised", "anova, raw"} <= set(cell.power)
        assert ("anova, log" in cell.power) == cell.errors.startswith("log")


@pytest.mark.parametrize(("n", "k"), [(14, 3), (6, 3), (20, 4), (8, 3)])
def test_the_nearest_cell_of_a_cell_is_itself(n, k):
    cell = nearest(facts(n, k))
    assert (cell.errors, cell.n, cell.k, cell.limit) == ("lognormal", n, k, 0.0)


def test_a_score_is_compared_with_errors_that_add():
    assert nearest(facts(14, 3, marker_kind="score")).errors == "normal"


def test_laws_are_told_by_their_tails():
    made = {
        law: rm.diagnose(
            rm.OccasionTable.from_array(
                draw(grid.base(n=400, errors=law), 1, seed=2)[0], occasions=["a", "b", "c"]
            )
        ).blind.shape
        for law in ("normal", "t3", "skewed", "lognormal", "log-t3")
    }
    for law, shapes in made.items():
        scale = "log" if law.startswith("log") else "raw"
        assert likely_law(scale, shapes[scale]) == law


def test_a_study_of_ones_own_is_simulated_at_its_size():
    found = simulate_own_design(facts(6, 3), datasets=60, draws=99, seed=2)
    assert (found.design.n, found.design.k) == (6, 3)
    assert "Share of 60 simulated data sets" in str(found)
    level = {row.test: row.rate for row in found.level}
    power = {row.test: row.rate for row in found.power}
    assert power["advised"] > level["advised"]
