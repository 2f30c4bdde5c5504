"""What the overall tests find for the published cases of Friedman's test and of the ANOVA."""

from __future__ import annotations

import functools
import math
from collections.abc import Callable, Iterator
from typing import Any

import numpy as np

import robustrm as rm
from robustrm.kernels import anova as kernel
from robustrm.kernels.null.engine import law
from robustrm.kernels.null.forms import centring
from robustrm.kernels.null.results import Law
from robustrm.kernels.null.tables import permutation_tables
from robustrm.methods.summary import summarize
from tests.reference.cases import Check, case

# Where the field of a case holds a Friedman result, and what of a result it holds.
FRIEDMAN: dict[str, Callable[[rm.TestResult], Any]] = {
    "rank_sums": lambda r: r.details["rank_sums"],
    "chi2": lambda r: r.statistic,
    "df": lambda r: r.df[0],
    "p_chi2": lambda r: r.details["p_chi2"],
    "F_ID": lambda r: r.details["iman_davenport_f"],
    "df1": lambda r: r.details["iman_davenport_df"][0],
    "df2": lambda r: r.details["iman_davenport_df"][1],
    "p_F": lambda r: r.details["p_iman_davenport"],
    "W": lambda r: r.details["kendall_w"],
}
ANOVA: dict[str, Callable[[rm.TestResult], Any]] = {
    "SS_cond": lambda r: r.details["ss_occasion"],
    "SS_subj": lambda r: r.details["ss_subject"],
    "SS_err": lambda r: r.details["ss_error"],
    "MS_cond": lambda r: r.details["ss_occasion"] / r.details["f_df"][0],
    "MS_err": lambda r: r.details["ss_error"] / r.details["f_df"][1],
    "F": lambda r: r.statistic,
    "df1": lambda r: r.details["f_df"][0],
    "df2": lambda r: r.details["f_df"][1],
    "p": lambda r: r.details["p_uncorrected"],
    "eps_GG": lambda r: r.details["epsilon_gg"],
    "eps_HF": lambda r: r.details["epsilon_hf"],
    "eps_LB": lambda r: r.details["epsilon_lower"],
    "p_GG": lambda r: r.p_value,
    "p_HF": lambda r: r.details["p_hf"],
    "p_LB": lambda r: r.details["p_lower"],
    "mauchly_W": lambda r: r.details["mauchly_w"],
    "mauchly_chi2": lambda r: r.details["mauchly_chi2"],
    "mauchly_df": lambda r: r.details["mauchly_df"],
    "mauchly_p": lambda r: r.details["mauchly_p"],
}

RANK_ANOVA: dict[str, Callable[[rm.TestResult], Any]] = {
    "rte": lambda r: r.details["relative_effects"],
    "ATS": lambda r: r.statistic,
    "df1": lambda r: r.df[0],
    "p": lambda r: r.p_value,
    "WTS": lambda r: r.details["wald"],
    "WTS_df": lambda r: r.details["wald_df"],
    "WTS_p": lambda r: r.details["p_wald"],
    # the two sides of the identity with the analysis of variance of the ranks
    "AnovaRM_F_on_midranks": lambda r: r.statistic,
    "df1_from_GG": lambda r: r.df[0],
}

TRIMMED: dict[str, Callable[[rm.TestResult], Any]] = {
    "tmeans": lambda r: r.details["trimmed_means"],
    "g": lambda r: r.details["g"],
    "h": lambda r: r.details["h"],
    "Qc": lambda r: r.details["qc"],
    "Qe": lambda r: r.details["qe"],
    "F": lambda r: r.statistic,
    "eps_hat": lambda r: r.details["epsilon_box"],
    "eps_tilde": lambda r: r.details["epsilon_hf"],
    "df1": lambda r: r.df[0],
    "df2": lambda r: r.df[1],
    "p": lambda r: r.p_value,
}


def table_of(name: str) -> rm.OccasionTable:
    """Make the table of a case; ranks serve as values."""
    data = case(name).data
    values = data["X"] if "X" in data else data["ranks"]
    labels = [f"occasion {j + 1}" for j in range(len(values[0]))]
    return rm.OccasionTable.from_array(values, occasions=labels)


@functools.cache
def friedman(name: str) -> rm.TestResult:
    """Friedman's test of a case; two long curves are far beyond an exact tail, and drawn."""
    return rm.friedman(table_of(name), draws=99, rng=1)


@functools.cache
def anova(name: str) -> rm.TestResult:
    """Within-subject analysis of variance of a case."""
    return rm.anova(table_of(name))


@functools.cache
def trimmed_anova(name: str) -> rm.TestResult:
    """Analysis of variance of 20% trimmed means of a case."""
    return rm.trimmed_anova(table_of(name))


def of_result(
    name: str,
    section: str,
    result: Callable[[str], rm.TestResult],
    fields: dict[str, Callable[[rm.TestResult], Any]],
) -> Iterator[Check]:
    """Yield a check for every field of a section that the table of fields knows."""
    for field in case(name).at(section):
        if field in fields:
            joint = "/" if "." in section else "."
            find = functools.partial(lambda f, n: fields[f](result(n)), field, name)
            yield Check(name, f"{section}{joint}{field}", find)


# ── exact laws ────────────────────────────────────────────────────────────────────────────────


@functools.cache
def exact_law(n: int, k: int) -> Law:
    """Null law of T = sum of squares of twice the centred rank sums, without ties."""
    found = law(permutation_tables(np.tile(2.0 * np.arange(k) - k + 1, (n, 1))), centring(k))
    assert found is not None
    return found


def friedman_tails(n: int, k: int) -> list[tuple[float, float]]:
    """Every attainable chi-square with its upper tail: 12 S / (n k (k + 1)), S = T / 4."""
    found = exact_law(n, k)
    return [
        (3 * float(value) / (n * k * (k + 1)), found.at_least(value).p_value)
        for value in found.values
    ]


def tail_list(n: int, k: int) -> list[tuple[float, float]]:
    """The full list, statistics to six decimals as the case has them."""
    return [(round(value, 6), p) for value, p in friedman_tails(n, k)]


def printed_tails(n: int, k: int, printed: dict[str, float]) -> dict[str, float]:
    """Upper tails at the statistics that a table prints, with three decimals."""
    tails = {round(value, 3): p for value, p in friedman_tails(n, k)}
    return {text: tails[float(text)] for text in printed}


def critical(n: int, k: int, alpha: float) -> float | None:
    """Smallest attainable chi-square whose upper tail is at most alpha."""
    reached = [value for value, p in friedman_tails(n, k) if p <= alpha]
    return min(reached, default=None)


def critical_table(k: str) -> dict[str, list[float | None]]:
    """Critical values of the printed table for k occasions."""
    sizes = case("friedman_exact_critical_table").published[k]
    return {n: [critical(int(n), int(k), alpha) for alpha in (0.05, 0.01)] for n in sizes}


def recomputed_critical(key: str) -> float | None:
    """Critical value for a key such as ``"k3n4a0.05"``, to the six decimals of the case."""
    k, rest = key[1:].split("n")
    n, alpha = rest.split("a")
    value = critical(int(n), int(k), float(alpha))
    return None if value is None else round(value, 6)


def kendall_tail(s: str) -> float:
    """Upper tail of Kendall's S for 3 judges and 5 objects: S is the sum of squares, T / 4."""
    return exact_law(3, 5).at_least(4 * float(s)).p_value


def _exact_checks() -> Iterator[Check]:
    tails = case("friedman_exact_tail_table")
    for key, printed in tails.published.items():
        k, n = int(key[1]), int(key[3])
        yield Check(tails.id, f"published.{key}", functools.partial(printed_tails, n, k, printed))
        yield Check(tails.id, f"recomputed.{key}", functools.partial(tail_list, n, k))
    table = case("friedman_exact_critical_table")
    for columns in table.published:
        find = functools.partial(critical_table, columns)
        yield Check(table.id, f"published.{columns}", find)
    for key in table.recomputed:
        yield Check(table.id, f"recomputed.{key}", functools.partial(recomputed_critical, key))
    kendall = case("kendall_S_exact_n5_m3")
    for section in ("published", "recomputed"):
        for key in kendall.at(section):
            yield Check(kendall.id, f"{section}.{key}", functools.partial(kendall_tail, key))


# ── Friedman's test and Kendall's W ───────────────────────────────────────────────────────────

WITH_EXACT_P = ("friedman_hw_rounding", "friedman_conover_grass", "friedman_scipy_mstats")


def _friedman_checks() -> Iterator[Check]:
    for name in (*WITH_EXACT_P, "friedman_siegel_reinforcement", "friedman_demsar"):
        yield from of_result(name, "recomputed", friedman, FRIEDMAN)
    for name in ("rmanova_ergostool", "rmanova_maxwell_delaney"):
        yield from of_result(name, "recomputed.friedman", friedman, FRIEDMAN)
    for name in ("phosphate_ogtt_battery", "orthodont_battery"):
        yield from of_result(name, "recomputed.friedman", friedman, FRIEDMAN)
    for name in WITH_EXACT_P:
        find = functools.partial(lambda n: friedman(n).p_value, name)
        yield Check(name, "recomputed.exact_conditional_p", find)
    printed = {
        "friedman_hw_rounding": {"rank_sums": "rank_sums", "S_tie_corrected": "chi2"},
        "friedman_conover_grass": {"rank_sums": "rank_sums", "T1": "chi2", "T2": "F_ID"},
        "friedman_siegel_reinforcement": {"rank_sums": "rank_sums"},
        "friedman_demsar": {"chi2_tie_corrected": "chi2", "p_corrected": "p_chi2"},
        "friedman_scipy_mstats": {"chi2": "chi2", "p": "p_chi2"},
        "kendall_w_siegel_applicants": {"R": "rank_sums", "W": "W"},
    }
    for name, fields in printed.items():
        for field, ours in fields.items():
            find = functools.partial(lambda n, o: FRIEDMAN[o](friedman(n)), name, ours)
            yield Check(name, f"published.{field}", find)
    yield Check(
        "friedman_hw_rounding",
        "recomputed.scipy",
        lambda: friedman("friedman_hw_rounding").statistic,
    )
    yield from of_result("kendall_w_siegel_applicants", "recomputed", friedman, FRIEDMAN)
    for section, field in (("published", "s"), ("recomputed", "S")):
        yield Check("kendall_w_siegel_applicants", f"{section}.{field}", _kendall_s)
    for section in ("published", "recomputed"):
        yield Check("friedman_demsar", f"{section}.avg_ranks_descending", _demsar_mean_ranks)


def _kendall_s() -> float:
    sums = np.array(friedman("kendall_w_siegel_applicants").details["rank_sums"])
    return float(((sums - sums.mean()) ** 2).sum())


def _demsar_mean_ranks() -> list[float]:
    """Mean ranks with 1 for the largest value, as the paper counts them."""
    found = friedman("friedman_demsar")
    return [found.n_occasions + 1 - s / found.n_subjects for s in found.details["rank_sums"]]


# ── analysis of variance ──────────────────────────────────────────────────────────────────────


def _anova_checks() -> Iterator[Check]:
    for name in ("rmanova_ergostool", "rmanova_maxwell_delaney"):
        yield from of_result(name, "recomputed", anova, ANOVA)
        find = functools.partial(_mauchly, name)
        yield Check(name, "recomputed.mauchly_statsmodels", find)
    yield from of_result("rmanova_maxwell_delaney", "published", anova, ANOVA)
    for name in ("phosphate_ogtt_battery", "orthodont_battery"):
        yield from of_result(name, "recomputed.rm", anova, ANOVA)
        yield Check(name, "recomputed.shape", functools.partial(_shape, name))
    phosphate = "phosphate_ogtt_battery"
    yield Check(phosphate, "recomputed.mauchly_statsmodels", functools.partial(_mauchly, phosphate))
    yield from of_result(phosphate, "recomputed.trim20", trimmed_anova, TRIMMED)
    ergostool = {
        "SS_types": "SS_cond", "SS_subjects": "SS_subj", "SS_error": "SS_err",
        "MS_error": "MS_err", "F": "F", "p": "p",
    }  # fmt: skip
    for field, ours in ergostool.items():
        find = functools.partial(lambda o: ANOVA[o](anova("rmanova_ergostool")), ours)
        yield Check("rmanova_ergostool", f"published.{field}", find)
    yield Check("rmanova_ergostool", "published.sums", lambda: _means("rmanova_ergostool", 9))
    yield Check(
        "rmanova_maxwell_delaney", "published.means", lambda: _means("rmanova_maxwell_delaney")
    )
    yield Check(
        "rmanova_maxwell_delaney",
        "published.SS_A",
        lambda: anova("rmanova_maxwell_delaney").details["ss_occasion"],
    )
    yield from _two_occasions()
    for section in ("published", "recomputed"):
        yield Check("epsilon_from_covariance_howell", f"{section}.eps_GG", lambda: _howell()[0])
        yield Check("epsilon_from_covariance_howell", f"{section}.eps_HF", lambda: _howell()[1])


def _two_occasions() -> Iterator[Check]:
    name = "rmanova_statsmodels_k2"
    for section in ("published", "recomputed"):
        yield Check(name, f"{section}.F", lambda: anova(name).statistic)
        yield Check(name, f"{section}.p", lambda: anova(name).p_value)
    yield Check(name, "published.df", lambda: anova(name).df)
    yield Check(name, "recomputed.t_squared", lambda: _paired_t(name).statistic ** 2)


def _paired_t(name: str) -> rm.TestResult:
    return rm.paired_t(table_of(name), "occasion 1", "occasion 2")


def _mauchly(name: str) -> tuple[float, float]:
    details = anova(name).details
    return details["mauchly_chi2"], details["mauchly_p"]


def _shape(name: str) -> tuple[int, int]:
    return anova(name).n_subjects, anova(name).n_occasions


def _means(name: str, times: int = 1) -> list[float]:
    return [times * (s.mean or math.nan) for s in summarize(table_of(name))]


def _howell() -> tuple[float, float]:
    """Epsilons from a pooled covariance: N − g degrees of freedom between subjects, g groups."""
    data = case("epsilon_from_covariance_howell").data
    contrasts = kernel.to_contrasts(np.array(data["pooled_cov"]))
    box = kernel.epsilon_greenhouse_geisser(contrasts)
    df = data["N"] - data["g"]
    return float(box), float(kernel.epsilon_huynh_feldt(box, data["k"], df, data["g"]))


# ── rank ANOVA-type test ──────────────────────────────────────────────────────────────────────


@functools.cache
def rank_anova(name: str) -> rm.TestResult:
    """Rank ANOVA-type test of a case."""
    return rm.rank_anova(table_of(name))


def _rank_anova_checks() -> Iterator[Check]:
    yield from of_result("rank_anova_type_identity", "recomputed", rank_anova, RANK_ANOVA)
    yield from of_result("phosphate_ogtt_battery", "recomputed.ats", rank_anova, RANK_ANOVA)


CHECKS = (*_exact_checks(), *_friedman_checks(), *_anova_checks(), *_rank_anova_checks())
