"""What Quade's, Page's, Skillings and Mack's, the sign and the sign-flip test find."""

from __future__ import annotations

import functools
from collections.abc import Callable, Iterator
from typing import Any

import robustrm as rm
from robustrm.kernels.ranks import midranks
from robustrm.kernels.score_statistics import total
from robustrm.methods import quade as quade_file
from tests.reference.cases import Check, case
from tests.reference.checks_omnibus import FRIEDMAN, friedman, of_result, table_of
from tests.reference.checks_pairs import differences_of
from tests.reference.checks_pairs import table_of as pair_of

PAIR = ("before", "after")


def _checks(name: str, fields: dict[str, Callable[[], Any]]) -> Iterator[Check]:
    for field, find in fields.items():
        yield Check(name, field, find)


# ── Quade's test ──────────────────────────────────────────────────────────────────────────────

LOTION = "quade_conover_lotion"


@functools.cache
def quade() -> rm.TestResult:
    """Quade's test of seven stores and five brands, beyond an exact p."""
    return rm.quade(table_of(LOTION), draws=99, rng=1)


def _quade() -> Iterator[Check]:
    yield from _checks(
        LOTION,
        {
            "published.T3": lambda: quade().statistic,
            "published.df": lambda: quade().df,
            "recomputed.Q": lambda: midranks(table_of(LOTION).spans().sizes).tolist(),
            "recomputed.Sj": lambda: quade().details["weighted_sums"],
            # the scores are four times Quade's
            "recomputed.A": lambda: float(total(quade_file.problem(table_of(LOTION)).scores)) / 16,
            "recomputed.B": lambda: sum(s**2 for s in quade().details["weighted_sums"]) / 7,
            "recomputed.F": lambda: quade().statistic,
            "recomputed.df1": lambda: quade().df[0],
            "recomputed.df2": lambda: quade().df[1],
            "recomputed.p": lambda: quade().details["p_f"],
        },
    )
    yield from of_result(LOTION, "recomputed.friedman_same_data", friedman, FRIEDMAN)


# ── Page's trend test ─────────────────────────────────────────────────────────────────────────


@functools.cache
def page(name: str) -> rm.TestResult:
    """Page's test of a case, its columns in the order in which they should rise."""
    table = table_of(name)
    return rm.page_trend(table, order=table.occasions, alternative="greater")


def _page() -> Iterator[Check]:
    yield from _checks(
        "page_cotton",
        {
            "published.L": lambda: page("page_cotton").statistic,
            "recomputed.L": lambda: page("page_cotton").statistic,
            "recomputed.p_exact": lambda: page("page_cotton").p_value,
            "recomputed.scipy_exact": lambda: page("page_cotton").p_value,
            "recomputed.z": lambda: page("page_cotton").details["z"],
            "recomputed.p_normal": lambda: page("page_cotton").details["p_normal"],
        },
    )
    yield from of_result("page_cotton", "recomputed.friedman", friedman, FRIEDMAN)
    yield Check(
        "orthodont_battery", "recomputed.page_L", lambda: page("orthodont_battery").statistic
    )


# ── the Skillings-Mack test ───────────────────────────────────────────────────────────────────


@functools.cache
def skillings_mack(name: str) -> rm.TestResult:
    """The Skillings-Mack test of a case."""
    return rm.skillings_mack(table_of(name), draws=99, rng=1)


def _skillings_mack() -> Iterator[Check]:
    name, identity = "skillings_mack_1981", "skillings_mack_identity_friedman"
    yield from _checks(
        name,
        {
            "published.SM": lambda: skillings_mack(name).statistic,
            "published.df": lambda: skillings_mack(name).df[0],
            "recomputed.A": lambda: skillings_mack(name).details["adjusted_sums"],
            "recomputed.T": lambda: skillings_mack(name).statistic,
            "recomputed.df": lambda: skillings_mack(name).df[0],
            "recomputed.p": lambda: skillings_mack(name).details["p_chi2"],
        },
    )
    yield Check(identity, "recomputed.SM", lambda: skillings_mack(identity).statistic)
    yield Check(identity, "recomputed.Friedman", lambda: friedman(identity).statistic)


# ── the sign test ─────────────────────────────────────────────────────────────────────────────


@functools.cache
def sign_test(name: str, alternative: str = "two-sided") -> rm.TestResult:
    """Sign test of a sample against a value, or of so many falls among so many changes."""
    data = case(name).data
    if "x" in data and "mu0" in data:
        differences = [x - data["mu0"] for x in data["x"]]
    else:
        differences = [-1] * data["x"] + [1] * (data["n"] - data["x"])
    return rm.sign_test(pair_of(differences), *PAIR, alternative=alternative)


def _sign_test() -> Iterator[Check]:
    name = "sign_statsmodels"

    def counted(field: str) -> int:
        return int(sign_test(name).details[field])

    yield from _checks(
        name,
        {
            "published.p": lambda: sign_test(name).p_value,
            "published.M": lambda: (counted("n_rose") - counted("n_fell")) / 2,
            "recomputed.plus": lambda: counted("n_rose"),
            "recomputed.minus": lambda: counted("n_fell"),
            "recomputed.n": lambda: counted("n_rose") + counted("n_fell"),
            "recomputed.p_one": lambda: sign_test(name, "greater").p_value,
            "recomputed.p_two": lambda: sign_test(name).p_value,
        },
    )
    for section in ("published", "recomputed"):
        yield Check("sign_siegel", f"{section}.p_one", _siegel_p)


def _siegel_p() -> float:
    return sign_test("sign_siegel", "greater").p_value


# ── the sign flip ─────────────────────────────────────────────────────────────────────────────

MAIZE = "darwin_maize_permutation"


@functools.cache
def maize(alternative: str = "two-sided") -> rm.TestResult:
    """Sign flip of Darwin's maize."""
    differences = case(MAIZE).data["differences_eighths_inch"]
    return rm.sign_flip(pair_of(differences), *PAIR, alternative=alternative)


@functools.cache
def maize_t() -> rm.TestResult:
    """Paired t of the same differences."""
    return rm.paired_t(pair_of(case(MAIZE).data["differences_eighths_inch"]), *PAIR)


def _count(alternative: str) -> float:
    """How many of the 2^15 sign patterns lie in the tail."""
    return maize(alternative).p_value * 2**15


def _maize() -> Iterator[Check]:
    yield from _checks(
        MAIZE,
        {
            "published.sum": lambda: 15 * maize().statistic,
            "published.n_exceed": lambda: 2**15 - _count("less"),
            "published.n_equal": lambda: _count("greater") + _count("less") - 2**15,
            "published.n_two_sided": lambda: _count("two-sided"),
            "published.total": lambda: maize().arrangements,
            "published.t": lambda: maize_t().statistic,
            "published.df": lambda: maize_t().df[0],
            "recomputed.sum": lambda: 15 * maize().statistic,
            "recomputed.n_ge": lambda: _count("greater"),
            "recomputed.n_gt": lambda: 2**15 - _count("less"),
            "recomputed.n_abs_ge": lambda: _count("two-sided"),
            "recomputed.total": lambda: maize().arrangements,
            "recomputed.p_greater": lambda: maize("greater").p_value,
            "recomputed.p_two": lambda: maize().p_value,
            "recomputed.t": lambda: maize_t().statistic,
            "recomputed.p_t": lambda: maize_t().p_value,
        },
    )
    poplar = "wilcoxon_poplar_aluminium"
    yield Check(
        poplar,
        "recomputed.signflip_p",
        lambda: rm.sign_flip(pair_of(differences_of(poplar)), *PAIR).p_value,
    )


CHECKS = (*_quade(), *_page(), *_skillings_mack(), *_sign_test(), *_maize())
