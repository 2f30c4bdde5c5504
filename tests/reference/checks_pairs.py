"""What the signed rank and the trimmed means find for the published cases of two occasions."""

from __future__ import annotations

import bisect
import functools
import itertools
from collections.abc import Callable, Iterator, Sequence
from typing import Any

import numpy as np

import robustrm as rm
from robustrm.kernels import location, walsh
from tests.reference.cases import Check, case

# Differences stand on values of about this size; the decimals of the sum stay exact.
BASE = 100.0
ALPHAS = {"exact05": 0.05, "exact10": 0.10, "exact01": 0.01}


def table_of(differences: Sequence[float]) -> rm.OccasionTable:
    """Make a table whose differences "after" − "before" are the ones given."""
    values = [[BASE, round(BASE + d, 6)] for d in differences]
    return rm.OccasionTable.from_array(values, occasions=["before", "after"])


@functools.cache
def signed_rank(differences: tuple[float, ...], **options: Any) -> rm.TestResult:
    """Signed-rank test of some differences."""
    return rm.signed_rank(table_of(differences), "before", "after", **options)


def differences_of(name: str) -> tuple[float, ...]:
    """Differences of a case, in one of the three ways in which the cases give them."""
    data = case(name).data
    if "d" in data:
        return tuple(data["d"])
    if "aug" in data:
        pairs = zip(data["aug"], data["nov"], strict=True)
        return tuple(round(aug - nov, 1) for aug, nov in pairs)
    repeats = zip(data["values"], data["freq"], strict=True)
    return tuple(itertools.chain.from_iterable([value] * count for value, count in repeats))


def found(name: str, field: str, **options: Any) -> Any:
    """Return one number of the signed-rank test of a case, by the name that the cases use."""
    differences = differences_of(name)
    result = signed_rank(differences, **options)
    if field in ("T_plus", "T_minus"):
        return result.details[field.lower()]
    if field == "n":  # differences that take part
        return result.n_subjects - result.details["n_zero"]
    if field in ("p_greater", "p_less"):
        return signed_rank(differences, alternative=field[2:], **options).p_value
    return result.details["p_normal"] if field == "p_normal" else result.p_value


def _fields(name: str, names: dict[str, str], **options: Any) -> Iterator[Check]:
    for field, ours in names.items():
        yield Check(name, field, functools.partial(found, name, ours, **options))


def _exact(prefix: str) -> dict[str, str]:
    ours = {"T_plus", "T_minus", "n", "p_greater", "p_less", "p_two"}
    return {f"{prefix}{field}": field for field in ours}


def _maize() -> Iterator[Check]:
    yield from _fields("wilcoxon_1945_maize", _exact("recomputed."))
    names = {
        "published.T_minus": "T_minus",
        "published.T_plus": "T_plus",
        "published.p_two_exact": "p_two",
        "published.p_greater": "p_greater",
        "published.p_normal_two": "p_normal",
        "recomputed.normal/T_plus": "T_plus",
        "recomputed.normal/T_minus": "T_minus",
        "recomputed.normal/p_two": "p_normal",
    }
    yield from _fields("wilcoxon_1945_maize", names)


def _zeros() -> Iterator[Check]:
    for rule, word in (("pratt", "pratt"), ("drop", "wilcox")):
        names = {
            f"published.{word}_T": "T_plus",
            f"published.{word}_p": "p_normal",
            f"recomputed.{word}/T_plus": "T_plus",
            f"recomputed.{word}/T_minus": "T_minus",
            f"recomputed.{word}/p_two": "p_normal",
            **_exact(f"recomputed.exact_{word}/"),
        }
        yield from _fields("wilcoxon_zeros_pratt", names, zeros=rule)


def _poplar() -> Iterator[Check]:
    name = "wilcoxon_poplar_aluminium"
    yield from _fields(name, _exact("recomputed."))
    yield from _fields(name, {"published.W": "T_plus", "published.P": "p_two"})
    yield Check(name, "recomputed.HL", lambda: _shift(name).value)
    yield Check(name, "recomputed.ci", lambda: _interval(differences_of(name), 0.95))
    yield Check(name, "recomputed.t", lambda: _poplar_t(name))
    yield from _yuen(name, "yuen20", 0.2)


def _poplar_t(name: str) -> tuple[float, float]:
    result = rm.paired_t(table_of(differences_of(name)), "before", "after")
    return result.statistic, result.p_value


# ── trimmed means ─────────────────────────────────────────────────────────────────────────────

YUEN: dict[str, Callable[[rm.TestResult], Any]] = {
    "tmean_x": lambda r: r.details["trimmed_means"][1],
    "tmean_y": lambda r: r.details["trimmed_means"][0],
    "diff": lambda r: r.estimate and r.estimate.value,
    "se": lambda r: r.details["standard_error"],
    "t": lambda r: r.statistic,
    "df": lambda r: r.df[0],
    "p": lambda r: r.p_value,
    "ci95": lambda r: r.estimate and [r.estimate.low, r.estimate.high],
}
ONE_SAMPLE: dict[str, Callable[[rm.TestResult], Any]] = {
    "n": lambda r: r.n_subjects,
    "g": lambda r: r.details["g"],
    "h": lambda r: r.details["h"],
    "tmean": lambda r: r.estimate and r.estimate.value,
    "sw2": lambda r: r.details["winsorized_sd"] ** 2,
    "se_1m2g": lambda r: r.details["standard_error_nominal"],
    "se_h": lambda r: r.details["standard_error"],
    "df": lambda r: r.df[0],
}


@functools.cache
def trimmed_pair(name: str, trim: float) -> rm.TestResult:
    """August − November: the case names August x, and the package gives second − first."""
    data = case(name).data
    rows = list(zip(data["nov"], data["aug"], strict=True))
    table = rm.OccasionTable.from_array(rows, occasions=["nov", "aug"])
    return rm.trimmed_pair(table, "nov", "aug", trim=trim)


@functools.cache
def trimmed_difference(differences: tuple[float, ...]) -> rm.TestResult:
    """Test of the 20% trimmed mean of some differences."""
    return rm.trimmed_difference(table_of(differences), "before", "after")


def _yuen(name: str, section: str, trim: float) -> Iterator[Check]:
    for field, read in YUEN.items():
        find = functools.partial(lambda r: r(trimmed_pair(name, trim)), read)
        yield Check(name, f"recomputed.{section}/{field}", find)


def _one_sample(name: str, data: tuple[float, ...], fields: dict[str, str]) -> Iterator[Check]:
    for field, ours in fields.items():
        find = functools.partial(lambda o: ONE_SAMPLE[o](trimmed_difference(data)), ours)
        yield Check(name, field, find)


def _trimmed() -> Iterator[Check]:
    name, section = "yuen_paired_poplar", "recomputed.one_sample_trimmed_on_differences"
    yield from _yuen(name, "trim20", 0.2)
    yield from _yuen(name, "trim0", 0.0)
    yield Check(name, "recomputed.paired_t", lambda: _poplar_t(name))
    yield from _one_sample(
        name, differences_of(name), {f"{section}/{field}": field for field in ONE_SAMPLE}
    )
    yield Check(name, f"{section}/wmean", lambda: _winsorized_mean(name))
    fields = {
        "published.se": "se_1m2g",
        "published.df": "df",
        "recomputed.se_1m2g": "se_1m2g",
        "recomputed.se_h": "se_h",
        "recomputed.df": "df",
    }
    yield from _one_sample("trimmed_dana20", tuple(case("trimmed_dana20").data["x"]), fields)


def _winsorized_mean(name: str) -> float:
    return float(location.winsorized(np.array(differences_of(name)), 0.2).mean())


def _shift(name: str) -> rm.Estimate:
    estimate = signed_rank(differences_of(name)).estimate
    assert estimate is not None
    return estimate


def _interval(differences: tuple[float, ...], level: float) -> list[float | None]:
    """Rank of the Walsh average at the lower limit, attained level, and the limits."""
    estimate = signed_rank(differences, level=level).estimate
    rank = walsh.interval_rank(len(differences), level)
    assert estimate is not None
    assert rank is not None
    return [rank.rank, estimate.level, estimate.low, estimate.high]


def _hodges_lehmann() -> Iterator[Check]:
    name = "hl_maize"
    yield Check(name, "recomputed.estimate", lambda: _shift(name).value)
    yield Check(name, "recomputed.n_walsh", _number_of_averages)
    yield Check(name, "recomputed.ci", lambda: _interval(differences_of(name), 0.95))
    yield Check(name, "recomputed.levels", _levels)


def _number_of_averages() -> int:
    return int(walsh.walsh_averages(np.array(differences_of("hl_maize"), dtype=float)).size)


def _levels() -> list[list[float | None]]:
    """Ask for each attained level of the list: the interval that holds just it comes back."""
    wanted = [row[1] for row in case("hl_maize").at("recomputed.levels")]
    return [_interval(differences_of("hl_maize"), level) for level in wanted]


def _scipy_ten() -> Iterator[Check]:
    name = "wilcoxon_exact_scipy10"
    yield from _fields(name, _exact("recomputed."))
    yield from _fields(name, {"published.two": "p_two", "published.greater": "p_greater"})


# ── critical values ───────────────────────────────────────────────────────────────────────────


def p_at(n: int, t_minus: int) -> float:
    """p of n untied differences whose falls have ranks that sum to `t_minus`."""
    signs = dict.fromkeys(range(1, n + 1), 1)
    for rank in range(n, 0, -1):  # any whole sum up to n (n + 1) / 2 can be made, largest first
        if rank <= t_minus:
            signs[rank], t_minus = -1, t_minus - rank
    return signed_rank(tuple(rank * sign for rank, sign in signs.items())).p_value


def critical(n: int, alpha: float) -> int | None:
    """Largest smaller rank sum whose two-sided p is at most alpha, by the test itself."""
    sums = range(n * (n + 1) // 4)
    reached = bisect.bisect_right(sums, alpha, key=functools.partial(p_at, n))
    return reached - 1 if reached else None


def critical_by_interval(n: int, alpha: float) -> int | None:
    """The same number from the rank of the interval's limit: C = critical value + 1."""
    rank = walsh.interval_rank(n, 1 - alpha)
    return None if rank is None else rank.rank - 1


def _critical_values() -> Iterator[Check]:
    for n in case("wilcoxon_critical_05").at("published.n_p05"):
        find = functools.partial(critical_by_interval, int(n), 0.05)
        yield Check("wilcoxon_critical_05", f"published.n_p05/{n}", find)
    for column, alpha in ALPHAS.items():
        for n in case("wilcoxon_critical_05").at(f"recomputed.{column}"):
            find = functools.partial(critical_by_interval, int(n), alpha)
            yield Check("wilcoxon_critical_05", f"recomputed.{column}/{n}", find)
    for n in case("wilcoxon_critical_01").published:
        find = functools.partial(critical, int(n), 0.01)
        yield Check("wilcoxon_critical_01", f"published.{n}", find)
        yield Check("wilcoxon_critical_01", f"recomputed.{n}", find)


CHECKS = (
    *_maize(),
    *_zeros(),
    *_poplar(),
    *_trimmed(),
    *_hodges_lehmann(),
    *_scipy_ten(),
    *_critical_values(),
)
