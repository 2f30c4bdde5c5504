"""Equal trimmed means, unequal spread: the design, the batched tests, and the shipped table.

Expected p values come from the methods on the same data; the trimmed mean of a law from SciPy's
quadrature.
"""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest
from scipy import integrate, stats

import robustrm as rm
from robustrm.errors import ArgumentError
from robustrm.kernels.bootstrap import resampled_rows
from robustrm.methods.registry import method
from robustrm.simulation import BLOCK, Design, draw, lognormal_trimmed_mean
from robustrm.trials import location_page, tabulating
from robustrm.trials.__main__ import main
from robustrm.trials.level import Row, Run
from robustrm.trials.location import (
    LIMITS,
    NULLS,
    TIMES,
    cells,
    location_rows,
    location_table,
)
from robustrm.trials.p_values import BOOTSTRAP, FURTHER, OMNIBUS, bootstrap_t_p, p_values

EVIDENCE = Path(__file__).resolve().parents[2] / "docs" / "evidence"
STRETCH = (1.0, 1.0, 2.0, 4.0)


def table_of(values: np.ndarray) -> rm.OccasionTable:
    labels = [f"visit {j}" for j in range(values.shape[1])]
    return rm.OccasionTable.from_array(values, occasions=labels)


def stretched(errors: str, n: int = 10) -> Design:
    return next(design for design in cells() if (design.errors, design.n) == (errors, n))


# ── the design ────────────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize(("centre", "sd"), [(0.0, 1.0), (0.3, 0.5), (-1.0, 2.0)])
def test_the_trimmed_mean_of_a_lognormal_law_is_that_of_quadrature(centre: float, sd: float):
    law = stats.lognorm(sd, scale=np.exp(centre))
    low, high = law.ppf(0.2), law.ppf(0.8)
    expected, _ = integrate.quad(lambda x: x * law.pdf(x), low, high, epsabs=1e-12, epsrel=1e-12)
    assert lognormal_trimmed_mean(centre, sd) == pytest.approx(expected / 0.6, rel=1e-9)


@pytest.mark.parametrize("errors", ["normal", "lognormal"])
def test_stretched_occasions_are_one_law_stretched_about_its_trimmed_mean(errors: str):
    design = stretched(errors)
    values = draw(design, 2_000, seed=3).reshape(-1, 4)
    # P(y <= 0) is that of the law below its trimmed mean, whatever the factor: x <= c
    centre = 0.0 if errors == "normal" else np.log(lognormal_trimmed_mean(0.0, 1.0))
    for x in (-0.5, 0.0, 0.5):
        point = x if errors == "normal" else np.exp(centre + x) - np.exp(centre)
        expected = stats.norm.cdf(x if errors == "normal" else centre + x)
        shares = (values / STRETCH <= point).mean(axis=0)
        # five standard errors of the number drawn
        assert np.abs(shares - expected).max() <= 5 * np.sqrt(0.25 / len(values))
    if errors == "normal":
        # SD of x is 1, the correlation of two occasions 1/2
        found = np.cov(values / STRETCH, rowvar=False)
        assert np.abs(found - (0.5 + 0.5 * np.eye(4))).max() <= 5 * np.sqrt(2 / len(values))


def test_to_stretch_changes_no_stream_of_a_design_that_does_not():
    assert Design(n=6, k=3, rho=0.7).key == "n=6, k=3, rho=0.7"
    assert stretched("normal").key.endswith("stretch=(1.0, 1.0, 2.0, 4.0)")


def test_what_is_stretched_is_not_exchangeable():
    assert not stretched("normal").exchangeable
    assert Design(n=6, k=3, stretch=(2.0, 2.0, 2.0)).exchangeable
    assert stretched("normal").symmetric
    assert not stretched("lognormal").symmetric


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"stretch": (1.0, 2.0)}, "`stretch` must have one number for each of the 3 occasions"),
        ({"stretch": (1.0, 0.0, 2.0)}, "`stretch` must hold positive numbers"),
        ({"shift": (0.0, 0.0, 1.0)}, "`stretch` asks for occasions that are alike before"),
        ({"slope_sd": 0.5}, r"leave `shift`, `spread` and `slope_sd` .+ slope_sd=0\.5"),
        ({"errors": "log-t3"}, "known for normal, t3, contaminated and lognormal errors, got"),
        ({"errors": "skewed"}, "known for normal, t3, contaminated and lognormal errors, got"),
    ],
)
def test_what_cannot_be_stretched_is_refused(options, message: str):
    with pytest.raises(ArgumentError, match=message):
        Design(**{"n": 6, "k": 3, "stretch": (1.0, 2.0, 4.0), **options})


# ── the batched tests are the methods ─────────────────────────────────────────────────────


@pytest.mark.parametrize("test", [test for test in FURTHER if test != BOOTSTRAP])
@pytest.mark.parametrize(("n", "k"), [(6, 3), (10, 4), (11, 5)])
def test_p_values_are_those_of_the_method(test: str, n: int, k: int):
    design = Design(n=n, k=k, errors="t3", shift=(*(0.0,) * (k - 1), 0.5))
    found = p_values(design, [test], 12, draws=99, seed=2)[:, 0]
    for values, p in zip(draw(design, 12, seed=2), found, strict=True):
        assert p == pytest.approx(getattr(rm, test)(table_of(values)).p_value, rel=1e-9)


@pytest.mark.parametrize("n", [6, 10])
def test_bootstrap_p_values_are_those_of_the_method_on_the_same_resamples(n: int):
    values = draw(stretched("lognormal", 10), 3, seed=2)[:, :n]
    tables = [table_of(each) for each in values]
    # the method puts rows in canonical order
    ordered = np.stack([table.comparable().values for table in tables])
    found = bootstrap_t_p(ordered, 499, np.random.default_rng(7))
    rng = np.random.default_rng(7)
    for table, p in zip(tables, found, strict=True):
        assert p == rm.trimmed_anova(table, null="bootstrap", draws=499, rng=rng).p_value


def test_bootstrap_p_counts_the_resamples_at_least_as_large():
    # F of each resample one by one, by a formula of its own: no kernel, no batch
    (values,) = draw(stretched("normal"), 1, seed=5)
    centred = values - stats.trim_mean(values, 0.2, axis=0)
    (rows,) = resampled_rows(np.random.default_rng(3), 10, 199, 199)
    hits = sum(trimmed_f(centred[each]) >= trimmed_f(values) for each in rows)
    assert bootstrap_t_p(values[None], 199, np.random.default_rng(3)) == (hits + 1) / 200


def trimmed_f(y: np.ndarray) -> float:
    """F of 20% trimmed means by its definition, n = 10: g = 2, h = 6."""
    k = y.shape[1]
    means = stats.trim_mean(y, 0.2, axis=0)
    w = np.asarray(stats.mstats.winsorize(y, (0.2, 0.2), axis=0))
    residual = w - w.mean(axis=0) - w.mean(axis=1, keepdims=True) + w.mean()
    between = 6 * ((means - means.mean()) ** 2).sum() / (k - 1)
    return between / ((residual**2).sum() / (5 * (k - 1)))


def test_the_further_tests_are_methods():
    names = {test.split(",")[0] for test in FURTHER}
    assert {method(name).kind for name in names} == {"omnibus"}


def test_more_data_sets_and_other_tests_change_no_p_value():
    design, tests = stretched("lognormal"), list(NULLS)
    few = p_values(design, tests, 20, draws=99, seed=1)
    many = p_values(design, tests, BLOCK + 10, draws=99, seed=1)
    np.testing.assert_array_equal(many[:20], few)
    alone = p_values(design, [BOOTSTRAP], 20, draws=99, seed=1)
    np.testing.assert_array_equal(alone[:, 0], few[:, tests.index(BOOTSTRAP)])


# ── rows and limits ───────────────────────────────────────────────────────────────────────


def test_every_overall_test_is_in_the_table():
    assert set(NULLS) == {*OMNIBUS, *FURTHER}
    assert {(design.errors, design.n) for design in cells()} == {
        (law, n) for law in ("normal", "lognormal") for n in (10, 20)
    }


def test_the_judged_cell_has_more_data_sets():
    rows = location_table(Run(datasets=4, seed=1, draws=99))
    sizes = {(row.errors, row.n): row.datasets for row in rows}
    assert sizes.pop(("lognormal", 10)) == 4 * TIMES
    assert set(sizes.values()) == {4}
    assert [(r.errors, r.n, r.test) for r in rows if r.asked] == [
        ("normal", 10, "hotelling"),
        ("normal", 20, "hotelling"),
        ("lognormal", 10, "trimmed_anova"),
        ("lognormal", 10, BOOTSTRAP),
    ]
    # nothing outside its null is asked
    assert [row for row in rows if row.asked and not row.inside] == []


def test_what_lies_inside_a_null():
    rows = location_table(Run(datasets=2, seed=1, draws=99))
    inside = {(row.errors, row.test) for row in rows if row.inside}
    trimmed = {"trimmed_anova", BOOTSTRAP}
    assert inside == {("lognormal", test) for test in trimmed} | {
        ("normal", test) for test in (*trimmed, "hotelling", "anova", "row_flip")
    }


def test_a_rate_above_its_limit_is_told():
    rows = location_table(Run(datasets=20, seed=1, draws=99))
    bad = [
        Row(**{**as_dict(row), "rate": 0.5, "rejections": row.datasets // 2, "holds": False})
        if row.asked else row
        for row in rows
    ]  # fmt: skip
    text = location_page.page(bad, "versions")
    assert text.count("- **above**: ") == len(LIMITS)
    assert "Of 4 rates with a limit, 0 stay within." in text
    assert text.count("**0.500**") == len(LIMITS)


def as_dict(row: Row) -> dict:
    return {name: getattr(row, name) for name in Row.__slots__}


# ── the shipped table ─────────────────────────────────────────────────────────────────────


@pytest.fixture(scope="module")
def shipped() -> list[Row]:
    return tabulating.read_csv(EVIDENCE / location_page.CSV, Row)


def test_the_page_is_made_from_the_csv(shipped: list[Row]):
    text = (EVIDENCE / location_page.PAGE).read_text(encoding="utf-8")
    made_by = re.search(r"Made with (.+)\.$", text, re.M)
    assert made_by
    assert location_page.page(shipped, made_by[1]) == text


def test_the_csv_agrees_with_itself(shipped: list[Row]):
    assert len(shipped) == len(cells()) * len(NULLS)
    assert {row.datasets for row in shipped} == {2_000, 10_000}
    for row in shipped:
        assert row.rate == pytest.approx(row.rejections / row.datasets)
        assert row.limit == LIMITS.get((row.errors, row.n, row.test))
        assert row.holds == (None if row.limit is None else row.rate <= row.limit)


def test_the_rates_with_a_limit_hold(shipped: list[Row]):
    asked = [row for row in shipped if row.asked]
    assert len(asked) == len(LIMITS)
    assert [row for row in asked if not row.holds] == []


def test_the_command_writes_both_files(tmp_path: Path, capsys: pytest.CaptureFixture[str]):
    main(["location", "--datasets", "2", "--draws", "99", "--seed", "5", "--out", str(tmp_path)])
    names = sorted(path.name for path in tmp_path.iterdir())
    assert names == [location_page.CSV, location_page.PAGE]
    rows = tabulating.read_csv(tmp_path / location_page.CSV, Row)
    assert {row.seed for row in rows} == {5}
    first = (tmp_path / location_page.PAGE).read_bytes()
    main(["location", "--datasets", "2", "--draws", "99", "--seed", "5", "--out", str(tmp_path)])
    assert (tmp_path / location_page.PAGE).read_bytes() == first
    seen = capsys.readouterr()
    assert seen.out == ""
    assert "16 of 16 data sets" in seen.err


@pytest.mark.slow
def test_a_shipped_cell_is_made_again_to_the_last_count(shipped: list[Row]):
    design = stretched("normal", 10)
    made = location_rows(design, Run(datasets=2_000, seed=shipped[0].seed))
    kept = [row for row in shipped if (row.errors, row.n) == ("normal", 10)]
    assert [(r.test, r.rejections) for r in made] == [(r.test, r.rejections) for r in kept]
