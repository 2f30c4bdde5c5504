"""The engine against published exact tables; each file in tests/reference names its source."""

from __future__ import annotations

import itertools
import json
import math
from pathlib import Path

import numpy as np
import pytest
from scipy import stats

from robustrm.kernels.null.engine import law, tail
from robustrm.kernels.null.forms import centring, linear, quadratic
from robustrm.kernels.null.tables import permutation_tables, sign_tables

pytestmark = pytest.mark.reference

FOLDER = Path(__file__).resolve().parents[1] / "reference"


def case(name):
    return json.loads((FOLDER / f"{name}.json").read_text(encoding="utf-8"))


def whole_law(tables, form):
    null = law(tables, form)
    assert null is not None
    return null


def friedman_law(n, k):
    """Law of the sum of squared deviations of rank sums, n subjects without ties."""
    return whole_law(permutation_tables(np.tile(np.arange(1.0, k + 1), (n, 1))), centring(k))


def critical(values, tails, level):
    """Smallest attainable value whose tail is at most `level`."""
    kept = values[tails <= level * (1 + 1e-12)]
    return kept.min() if len(kept) else None


@pytest.mark.parametrize(("n", "k"), [(3, 3), (4, 3), (2, 4), (3, 4)])
def test_friedman_tails(n, k):
    name = f"k{k}n{n}"
    null = friedman_law(n, k)
    chi2 = 12 * null.values / (n * k * (k + 1))
    tails = [null.at_least(value).p_value for value in null.values]
    recomputed = np.array(case("friedman_exact_tail_table")["recomputed"][name])
    np.testing.assert_allclose(chi2, recomputed[:, 0], atol=1e-6)
    np.testing.assert_allclose(tails, recomputed[:, 1], rtol=1e-12)
    for value, probability in case("friedman_exact_tail_table")["published"][name].items():
        nearest = tails[int(np.abs(chi2 - float(value)).argmin())]
        assert nearest == pytest.approx(probability, abs=0.00051)


@pytest.mark.parametrize(
    ("n", "k"),
    [(n, k) for k, last in ((3, 15), (4, 8), (5, 4)) for n in range(2 + (k == 3), last + 1)],
)
def test_friedman_critical_values(n, k):
    published = case("friedman_exact_critical_table")["published"][str(k)][str(n)]
    null = friedman_law(n, k)
    tails = np.array([null.at_least(value).p_value for value in null.values])
    for level, value in zip((0.05, 0.01), published, strict=True):
        found = critical(12 * null.values / (n * k * (k + 1)), tails, level)
        assert found == (value if value is None else pytest.approx(value, abs=0.0051))


@pytest.mark.parametrize(("n", "k"), [(30, 3), (30, 4), (10, 5), (5, 6)])
def test_friedman_moments(n, k):
    # Mean k - 1 and variance 2 (k - 1)(n - 1)/n of the statistic (Friedman 1937).
    null = friedman_law(n, k)
    chi2 = 12 * null.values / (n * k * (k + 1))
    mean = (chi2 * null.probabilities).sum()
    assert mean == pytest.approx(k - 1, rel=1e-12)
    variance = ((chi2 - mean) ** 2 * null.probabilities).sum()
    assert variance == pytest.approx(2 * (k - 1) * (n - 1) / n, rel=1e-12)
    assert null.probabilities[-1] == pytest.approx(1 / math.factorial(k) ** (n - 1), rel=1e-12)


def test_kendall_s_for_five_objects_and_three_judges():
    null = friedman_law(3, 5)
    for source, tolerance in (("published", 0.00051), ("recomputed", 1e-12)):
        for value, probability in case("kendall_S_exact_n5_m3")[source].items():
            assert null.at_least(float(value)).p_value == pytest.approx(probability, abs=tolerance)


@pytest.mark.parametrize("k", [3, 4, 5, 6])
def test_page_critical_values(k):
    for n, published in case("page_critical_tables")["published"][str(k)].items():
        ranks = np.arange(1.0, k + 1)
        null = whole_law(permutation_tables(np.tile(ranks, (int(n), 1))), linear(ranks))
        tails = np.array([null.at_least(value).p_value for value in null.values])
        assert [critical(null.values, tails, level) for level in (0.05, 0.01, 0.001)] == published


def test_darwin_maize():
    maize = case("darwin_maize_permutation")
    eighths = np.array(maize["data"]["differences_eighths_inch"], dtype=float)
    result = tail(sign_tables(eighths), eighths.sum(), linear(1))
    assert result.arrangements == maize["published"]["total"]
    assert result.p_value == maize["published"]["n_two_sided"] / 32768
    null = whole_law(sign_tables(eighths), linear(1))
    assert null.at_least(314).weight == 835 + 28
    assert null.at_least(316).weight == 835
    # Real scores with the same ties: the differences times an irrational number.
    other = tail(sign_tables(eighths * math.pi), eighths.sum() * math.pi, linear(1))
    assert other.p_value == result.p_value


@pytest.mark.parametrize(("name", "level"), [("05", 0.05), ("01", 0.01)])
def test_signed_rank_critical_values(name, level):
    published = case(f"wilcoxon_critical_{name}")["published"]
    for n, value in published.get("n_p05", published).items():
        size = int(n)
        null = whole_law(sign_tables(np.arange(1.0, size + 1)), linear(1))
        smaller = (size * (size + 1) / 2 + null.values) / 2  # T = the sum of positive ranks
        p_values = np.array([2 * null.at_most(v).p_value for v in null.values])
        assert smaller[p_values <= level].max() == value


def test_skillings_mack_tails_with_two_missing_cells():
    # 5 subjects x 3 occasions, 864 arrangements, enumerated here. Fixing a complete subject, a
    # short cut that missing cells forbid, would give 120/864 and 66/864 instead.
    seen = np.ones((5, 3), dtype=bool)
    seen[0, 0] = seen[1, 1] = False
    count = seen.sum(axis=1, keepdims=True)
    ranks = np.cumsum(seen, axis=1)
    scores = np.where(seen, np.sqrt(12 / (count + 1)) * (ranks - (count + 1) / 2), 0)
    # Skillings & Mack (1981): T = s' V^- s, V the conditional covariance given the pattern.
    scale = (scores**2).sum(axis=1) / (count[:, 0] - 1)
    covariance = sum(
        a * (np.diag(row) - np.outer(row, row) / row.sum())
        for a, row in zip(scale, seen.astype(float), strict=True)
    )
    size, axes = np.linalg.eigh(covariance)
    matrix = (axes[:, 1:] / np.sqrt(size[1:])).T

    tables = permutation_tables(scores, observed=seen)
    vectors = [table.listed().vectors for table in tables]
    values: dict[float, list[np.ndarray]] = {}
    for choice in itertools.product(*vectors):
        total = np.sum(choice, axis=0)
        values.setdefault(round(float(((matrix @ total) ** 2).sum()), 9), []).append(total)
    counts = np.cumsum([len(values[v]) for v in sorted(values, reverse=True)])
    found = {
        round(tail(tables, values[v][0], quadratic(matrix)).p_value * 864)
        for v in sorted(values, reverse=True)
    }
    assert found == set(counts.tolist())
    assert {122, 74} <= found  # .14120 and .08565
    assert not {120, 66} & found


def test_sums_of_signs_agree_with_the_binomial_law_far_into_the_tail():
    null = whole_law(sign_tables(np.ones(900)), linear(1))
    for value in (900, 600, 300, 0):
        expected = stats.binom.logsf((900 + value) // 2 - 1, 900, 0.5)
        assert null.at_least(value).log_p == pytest.approx(expected, rel=1e-12)
    assert null.at_least(900).p_value == 2.0**-900


def test_counts_keep_their_precision_where_float64_would_overflow():
    null = whole_law(sign_tables(np.ones(1500)), linear(1))
    assert null.exponent > 0
    assert null.at_least(1500).log_p == pytest.approx(-1500 * math.log(2), rel=1e-12)
    assert null.at_least(1500).p_value > 0
    assert null.at_least(2).log_p == pytest.approx(stats.binom.logsf(750, 1500, 0.5), rel=1e-11)
