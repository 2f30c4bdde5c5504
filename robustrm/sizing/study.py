"""What a study is assumed to be: variation, expected change, limit, drop-out, planned tests."""

from __future__ import annotations

import dataclasses
import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal, cast, get_args

from robustrm._checks import check_choice, check_count
from robustrm.errors import ArgumentError
from robustrm.methods.registry import P_ADJUSTMENTS
from robustrm.plan import Plan
from robustrm.results import Scale
from robustrm.simulation import TRIM, Design, Errors
from robustrm.trials.p_values import PERMUTED

Pair = tuple[int, int]

# CVs above are read as percent.
LARGEST_CV = 3.0
MOST_OCCASIONS = 6
PAIR_TESTS = (
    "signed_rank", "sign_test", "sign_flip", "trimmed_difference", "trimmed_pair", "paired_t",
)  # fmt: skip
OVERALL_TESTS = (*PERMUTED, "row_flip", "trimmed_anova", "rank_anova", "hotelling", "anova")
_WINSORIZED = 0.1


@dataclass(frozen=True, slots=True, kw_only=True)
class Study:
    """What data sets are drawn by, and which tests are planned on them.

    Parameters
    ----------
    distribution : str
        Law of the errors, one of those of `robustrm.simulation`. Where its name begins with
        "log" the marker is their exponential, ratios multiply, and the SDs are those of the
        logarithms, √ln(1 + CV²), as for a lognormal marker. Otherwise changes add, in units of
        the mean on the first occasion.
    cv_within, cv_between : float
        Coefficients of variation of one person's values, and of the persons' levels, as
        fractions.
    ratios : tuple of float
        Expected ratio of each occasion to the first, which is 1.
    labels : tuple of str
        Occasions.
    pairs : tuple of (int, int)
        Planned comparisons as places in `labels`, earlier first.
    limit : float
        Share of all values of a study below the limit of detection.
    dropout : float
        Share of the subjects who are lost by the last occasion. They leave at any later occasion
        with equal probability, do not come back, and leave whatever their values are.
    plan : Plan
    """

    distribution: Errors
    cv_within: float
    cv_between: float
    ratios: tuple[float, ...]
    labels: tuple[str, ...]
    pairs: tuple[Pair, ...]
    limit: float
    dropout: float
    plan: Plan

    @property
    def k(self) -> int:
        """Occasions."""
        return len(self.ratios)

    @property
    def scale(self) -> Scale:
        """Scale of the analysis."""
        return self.plan.used_scale

    @property
    def multiplies(self) -> bool:
        """Whether changes are ratios of the marker, rather than added to it."""
        return self.distribution.startswith("log")

    def design(self, n: int) -> Design:
        """Return how values of n subjects are drawn."""
        if self.multiplies:
            within, between = log_sd(self.cv_within), log_sd(self.cv_between)
            shift = tuple(math.log(ratio) for ratio in self.ratios)
        else:
            within, between = self.cv_within, self.cv_between
            shift = tuple(ratio - 1 for ratio in self.ratios)
        return Design(
            n=n,
            k=self.k,
            errors=self.distribution,
            within_sd=within,
            between_sd=between,
            shift=shift,
            limit=self.limit,
        )

    def ratio_of(self, pair: Pair) -> float:
        """Return the expected ratio of a comparison, later to earlier."""
        first, second = pair
        return self.ratios[second] / self.ratios[first]

    def changes(self, pair: Pair) -> bool:
        """Whether a change is expected between the two occasions."""
        first, second = pair
        return self.ratios[second] != self.ratios[first]

    def label_of(self, pair: Pair) -> str:
        """Return ``"later vs earlier"``."""
        first, second = pair
        return f"{self.labels[second]} vs {self.labels[first]}"

    @property
    def key(self) -> str:
        """Name everything that decides the result of a block, for its file and its streams."""
        fields = (f.name for f in dataclasses.fields(self) if f.name not in ("plan", "labels"))
        planned = (
            "pair", "adjust", "omnibus", "zeros", "substitute", "missing", "intervals", "level",
            "sides", "direction",
        )  # fmt: skip
        told = [f"{name}={getattr(self, name)!r}" for name in fields]
        told += [f"{name}={getattr(self.plan, name)!r}" for name in planned]
        return ", ".join([*told, f"scale={self.scale!r}"])


def log_sd(cv: float) -> float:
    """Return the SD of the logarithm of a lognormal value with this CV.

    Examples
    --------
    >>> round(log_sd(0.42), 4)
    0.4031
    """
    return math.sqrt(math.log1p(cv**2))


def checked_study(
    plan: Plan,
    *,
    cv_within: float,
    cv_between: float,
    ratios: Sequence[float] | float,
    n_occasions: int | None,
    distribution: str,
    limit: float,
    dropout: float,
) -> Study:
    """Return the study, or refuse what was assumed.

    Raises
    ------
    ArgumentError
        When a value breaks its rule, or the plan holds a test that is not simulated.
    """
    expected = _checked_ratios(ratios, n_occasions, plan)
    labels = plan.occasions or tuple(f"occasion {j + 1}" for j in range(len(expected)))
    errors = cast(Errors, check_choice("distribution", distribution, get_args(Errors)))
    study = Study(
        distribution=errors,
        cv_within=_checked_cv("cv_within", cv_within),
        cv_between=_checked_cv("cv_between", cv_between, zero=True),
        ratios=expected,
        labels=labels,
        pairs=_planned_pairs(plan, labels),
        limit=_checked_part("limit", limit),
        dropout=_checked_part("dropout", dropout),
        plan=plan,
    )
    _check_law(study)
    _check_tests(plan, study.k)
    return study


def _checked_cv(argument: str, cv: float, *, zero: bool = False) -> float:
    """Return a coefficient of variation as a fraction; 0 where that means something."""
    if LARGEST_CV < cv < 100 * LARGEST_CV:
        raise ArgumentError(
            f"`{argument}` must be a fraction, at most {LARGEST_CV:g}, got {cv!r}: did you mean "
            f"{cv / 100:g}?"
        )
    if isinstance(cv, bool) or not (0 < cv <= LARGEST_CV or (zero and cv == 0)):
        raise ArgumentError(f"`{argument}` must be a positive fraction such as 0.42, got {cv!r}.")
    return float(cv)


def _checked_part(argument: str, share: float) -> float:
    """Return a share of values or subjects in [0, 1)."""
    if isinstance(share, bool) or not 0 <= share < 1:
        hint = f" Did you mean {share / 100:g}?" if 1 < share < 100 else ""
        raise ArgumentError(f"`{argument}` must be a share in [0, 1), got {share!r}.{hint}")
    return float(share)


def _checked_ratios(
    ratios: Sequence[float] | float, n_occasions: int | None, plan: Plan
) -> tuple[float, ...]:
    """Return one expected ratio an occasion, the first 1."""
    planned = len(plan.occasions) or None
    if isinstance(ratios, (int, float)):
        k = n_occasions if n_occasions is not None else planned
        if k is None:
            raise ArgumentError(
                f"`ratios` as one smallest important ratio, here {ratios!r}, needs the number of "
                "occasions. Give `n_occasions`, or one ratio an occasion such as [1, 0.8, 0.7]."
            )
        check_count("n_occasions", k, least=2)
        listed = (*(1.0,) * (k - 1), float(ratios))
    else:
        listed = tuple(float(ratio) for ratio in ratios)
    if not all(0 < ratio < math.inf for ratio in listed):
        raise ArgumentError(f"`ratios` must be positive numbers, got {list(listed)!r}.")
    _check_occasions(listed, n_occasions, planned)
    return listed


def _check_occasions(
    listed: tuple[float, ...], n_occasions: int | None, planned: int | None
) -> None:
    k = len(listed)
    if not 2 <= k <= MOST_OCCASIONS:
        raise ArgumentError(
            f"`ratios` must hold 2 to {MOST_OCCASIONS} numbers, one an occasion, got {k}."
        )
    if listed[0] != 1:
        raise ArgumentError(
            f"`ratios` must begin with 1, the first occasion against itself, got {listed[0]!r}. "
            "Divide all by the first."
        )
    if len(set(listed)) == 1:
        raise ArgumentError(
            "`ratios` must hold a ratio other than 1: without a change there is nothing to find. "
            "Give the smallest change that matters."
        )
    for name, other in (("n_occasions", n_occasions), ("the plan's occasions", planned)):
        if other is not None and other != k:
            raise ArgumentError(
                f"`ratios` must hold one number an occasion, got {k} for {other} by {name}."
            )


def _planned_pairs(plan: Plan, labels: Sequence[str]) -> tuple[Pair, ...]:
    places = range(len(labels))
    if plan.contrasts == "first":
        return tuple((0, j) for j in places[1:])
    if plan.contrasts == "successive":
        return tuple(itertools.pairwise(places))
    if plan.contrasts == "all":
        return tuple(itertools.combinations(places, 2))
    found = []
    for first, second in plan.contrasts:
        for label in (first, second):
            check_choice("contrasts", label, labels)
        found.append((labels.index(first), labels.index(second)))
    return tuple(found)


def _check_law(study: Study) -> None:
    """Refuse a law that gives values which the planned scale has no place for."""
    if study.multiplies:
        return
    if study.scale == "log":
        raise ArgumentError(
            f"`distribution` must begin with 'log' where the plan compares ratios, got "
            f"{study.distribution!r}, which can fall below zero. Use 'lognormal' or 'log-t3', or "
            "plan the raw scale."
        )
    if study.limit:
        raise ArgumentError(
            f"`limit` must be 0 with {study.distribution!r} values, got {study.limit!r}: below a "
            "limit they may be negative. Use 'lognormal' or 'log-t3'."
        )


def _check_tests(plan: Plan, k: int) -> None:
    """Refuse a plan with a test that is not simulated, saying which are."""
    if plan.adjust != "closed":
        if plan.adjust not in P_ADJUSTMENTS or plan.pair not in PAIR_TESTS:
            raise ArgumentError(
                f"`pair` must be one of {', '.join(map(repr, PAIR_TESTS))} for a simulation, got "
                f"{plan.pair!r}. Size the study by one of these."
            )
    elif plan.sides != 2:
        raise ArgumentError(f"`sides` must be 2 with `adjust` 'closed', got {plan.sides!r}.")
    if plan.omnibus not in OVERALL_TESTS:
        raise ArgumentError(
            f"`omnibus` must be one of {', '.join(map(repr, OVERALL_TESTS))} for a simulation, "
            f"got {plan.omnibus!r}. Size the study by one of these."
        )
    usual: dict[str, tuple[float, Literal["trim", "winsorize"]]] = {
        "trimmed_difference": (TRIM, "trim"),
        "trimmed_pair": (TRIM, "trim"),
        "trimmed_anova": (TRIM, "trim"),
        "winsorized_permutation": (_WINSORIZED, "winsorize"),
    }
    for test in (plan.pair, plan.omnibus):
        share, name = usual.get(test, (None, "trim"))
        if share is not None and getattr(plan, name) != share:
            raise ArgumentError(
                f"`{name}` must be {share:g}, the usual share, for a simulation of {test!r}, got "
                f"{getattr(plan, name)!r}."
            )
