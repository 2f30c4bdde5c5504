"""Level of the joint test of a grid: the cells, a small run, and the shipped table."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy import stats

from robustrm.sensitivity_analysis.branches import branches
from robustrm.trials import joint_page, tabulating
from robustrm.trials.__main__ import main
from robustrm.trials.joint import (
    JOINT,
    MEDIAN,
    READINGS,
    SMALLEST,
    JointRow,
    cell_rows,
    cells,
    gaps_of,
    joint_table,
    table_of,
)
from robustrm.trials.level import Run

EVIDENCE = Path(__file__).resolve().parents[2] / "docs" / "evidence"
SMALL = Run(datasets=5, seed=1, draws=99)


@pytest.fixture(scope="module")
def small() -> list[JointRow]:
    return joint_table(SMALL)


def test_every_grid_declares_twelve_branches_and_every_cell_is_exchangeable():
    assert [len(list(branches(cell.choices))) for cell in cells()] == [12] * 6
    assert all(cell.design.exchangeable for cell in cells())
    assert len({cell.name for cell in cells()}) == 6


def test_a_cell_has_its_share_below_a_limit_and_missing():
    limited = next(cell for cell in cells() if cell.design.limit)
    values = np.maximum(np.random.default_rng(1).random((14, 3)), 0.3)
    table = table_of(values, limited, np.zeros((14, 3), dtype=bool))
    np.testing.assert_array_equal(table.below, values == 0.3)
    assert table.lower_limit.min() == 0.3
    gapped = next(cell for cell in cells() if cell.missing)
    assert gaps_of(gapped, 1).sum() == 4  # 10% of 42
    np.testing.assert_array_equal(gaps_of(gapped, 1), gaps_of(gapped, 1))


def test_one_row_a_reading_and_the_joint_one_alone_has_a_limit(small: list[JointRow]):
    assert [row.reading for row in small] == list(READINGS) * 6
    assert {row.reading for row in small if row.asked} == {JOINT}
    # .05 + 3 standard errors of five tables, by hand
    assert {row.limit for row in small if row.asked} == {round(0.05 + 3 * (0.0475 / 5) ** 0.5, 5)}
    assert all(1 <= row.different <= 12 for row in small)


def test_the_smallest_p_is_below_the_level_whenever_the_median_is(small: list[JointRow]):
    rates = {(row.about, row.n, row.errors, row.reading): row.rejections for row in small}
    for (about, n, errors, reading), hits in rates.items():
        if reading == MEDIAN:
            assert hits <= rates[about, n, errors, SMALLEST]


def test_the_same_seed_remakes_a_cell():
    cell = cells()[1]
    assert cell_rows(cell, SMALL) == cell_rows(cell, SMALL)


def test_progress_runs_to_the_end():
    told: list[tuple[int, int]] = []
    joint_table(replace(SMALL, datasets=2), progress=lambda *step: told.append(step))
    assert told[-1] == (12, 12)


def test_the_command_writes_both_files(tmp_path: Path):
    words = ["grid", "--datasets", "2", "--draws", "99", "--seed", "1", "--out", str(tmp_path)]
    main(words)
    rows = tabulating.read_csv(tmp_path / joint_page.CSV, JointRow)
    assert rows == joint_table(replace(SMALL, datasets=2))
    assert (tmp_path / joint_page.PAGE).read_text(encoding="utf-8").startswith("# Joint test")


def test_a_rate_above_its_limit_is_bold(small: list[JointRow]):
    rows = [replace(row, holds=False, rate=0.5) if row.asked else row for row in small]
    page = joint_page.page(rows, "x")
    assert "stays within its limit in 0 of 6 cells" in page
    assert page.count("**0.5000**") == 6


# ── the shipped table ─────────────────────────────────────────────────────────────────────────


@pytest.fixture(scope="module")
def shipped() -> list[JointRow]:
    return tabulating.read_csv(EVIDENCE / joint_page.CSV, JointRow)


def test_the_shipped_rates_hold(shipped: list[JointRow]):
    asked = [row for row in shipped if row.asked]
    assert len(asked) == 6
    for row in asked:
        assert (row.datasets, row.draws, row.declared) == (2000, 199, 12)
        # .05 + 3 standard errors of 2,000 tables
        assert row.rate <= 0.05 + 3 * (0.05 * 0.95 / 2000) ** 0.5
        assert row.rate == row.rejections / row.datasets


def test_the_shipped_page_is_that_of_the_rows(shipped: list[JointRow]):
    page = (EVIDENCE / joint_page.PAGE).read_text(encoding="utf-8")
    (made_by,) = [line for line in page.splitlines() if line.startswith("Made with ")]
    assert page == joint_page.page(shipped, made_by.removeprefix("Made with ").rstrip("."))


@pytest.mark.slow
def test_a_shipped_cell_is_remade_to_the_last_count(shipped: list[JointRow]):
    run = Run(datasets=2000, seed=shipped[0].seed, draws=199)
    assert cell_rows(cells()[0], run) == shipped[: len(READINGS)]


@pytest.mark.slow
def test_a_fresh_run_holds_its_level():
    # SciPy's binomial limit of one in a million
    (row, *_) = cell_rows(cells()[1], Run(datasets=300, seed=99, draws=99))
    assert row.rejections <= stats.binom.isf(1e-6, 300, 0.05)
