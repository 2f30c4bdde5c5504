"""A declared family of comparisons between occasions, tested and adjusted together."""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from typing import Any
from zlib import crc32

import numpy as np

from robustrm._checks import check_choice, check_draws, check_level, check_member
from robustrm._format import counted, level_text, listing, number, number_range
from robustrm.errors import ArgumentError, TooFewError
from robustrm.methods.additive import Rng, complete_rows
from robustrm.methods.adjusting import TITLES, adjusted
from robustrm.methods.closed import check_closed, closed_comparison, closed_scores, closed_tests
from robustrm.methods.rank_sums import family_notes
from robustrm.methods.registry import (
    ADJUSTMENTS,
    FAMILIES,
    METHODS,
    SINGLE_STEP_METHODS,
    Method,
)
from robustrm.methods.registry import method as registered
from robustrm.results import Comparison, FollowUps, Note, TestResult
from robustrm.table import OccasionTable

Pair = tuple[str, str]


def follow_up(
    table: OccasionTable,
    *,
    method: str = "signed_rank",
    family: str | Sequence[Pair] = "first",
    adjust: str | None = None,
    intervals: str = "separate",
    level: float = 0.95,
    null: str = "auto",
    rng: Rng = None,
    options: Mapping[str, Any] | None = None,
) -> FollowUps:
    """Compare pairs of occasions as one declared family.

    Parameters
    ----------
    table : OccasionTable
        Each pair uses all subjects that have both of its occasions, so n may differ.
    method : str, default "signed_rank"
        Test for every pair, or a method of a whole family (``"nemenyi"``, ``"conover"``);
        ``robustrm methods`` lists them.
    family : {"first", "all", "successive"} or list of (earlier, later), default "first"
        Each later occasion against the first, all pairs, each occasion against the one
        before it, or named pairs.
    adjust : str, optional
        Adjustment of the p values over the family: ``"none"``, ``"bonferroni"``, ``"holm"``
        (the default), ``"hochberg"``, ``"hommel"``, ``"bh"`` or ``"closed"``. The last is
        closed permutation testing with method ``"sign_flip"`` or ``"aligned_ranks"`` on the
        rows complete on all occasions; each row says which partition of the occasions gave
        its p, with Holm beside. Methods of a whole family take ``"single-step"`` alone, which
        is their default: their p values are adjusted over all pairs of occasions.
    intervals : {"separate", "simultaneous"}, default "separate"
        Separate intervals hold `level` each; simultaneous ones hold it together, made at
        the Bonferroni level. Those of ``"nemenyi"`` and ``"conover"`` are always simultaneous.
    level : float, default 0.95
        Confidence level.
    null : str, default "auto"
        Passed to the method where it takes it.
    rng : Generator, SeedSequence, int or None
        Randomness of Monte Carlo nulls; every pair draws from a stream of its own, so adding
        a pair never changes the p value of another.
    options : mapping, optional
        Further options of the method, such as ``{"zeros": "drop"}``.

    Returns
    -------
    FollowUps
        All members of the family in their declared order. One that cannot be tested stays
        in the family and counts in the adjustment, with p NaN and a note.

    Raises
    ------
    ArgumentError
        When the family, method or an option is not known, or an option or adjustment is not
        one that the method takes.
    TooFewError
        When closed testing or a method of a whole family has too few complete subjects.

    Notes
    -----
    The planned comparisons do not depend on the overall test: they are shown whatever it
    says. Holm, Hochberg, Hommel and Bonferroni control the familywise error (Hochberg and
    Hommel under non-negative dependence), Benjamini-Hochberg the false discovery rate.

    Closed permutation testing rejects a pair when every partition of the occasions that joins
    it is rejected, the scores permuted within the blocks of the partition. It controls the
    familywise error when each pair's hypothesis means that swapping its two values changes
    nothing given the other occasions; that is more than a symmetric difference of the pair
    alone, and under serial correlation with personal trends the error can be larger.

    References
    ----------
    .. [1] Holm, S. (1979). A simple sequentially rejective multiple test procedure.
       Scandinavian Journal of Statistics 6, 65-70.
    .. [2] Hochberg, Y. (1988). A sharper Bonferroni procedure for multiple tests of
       significance. Biometrika 75, 800-802.
    .. [3] Hommel, G. (1988). A stagewise rejective multiple test procedure based on a
       modified Bonferroni test. Biometrika 75, 383-386.
    .. [4] Benjamini, Y. and Hochberg, Y. (1995). Controlling the false discovery rate.
       Journal of the Royal Statistical Society B 57, 289-300.
    .. [5] Marcus, R., Peritz, E. and Gabriel, K. R. (1976). On closed testing procedures with
       special reference to ordered analysis of variance. Biometrika 63, 655-660.
    .. [6] Petrondas, D. A. and Gabriel, K. R. (1983). Multiple comparisons by rerandomization
       tests. Journal of the American Statistical Association 78, 949-957.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[91, 72, 60], [40, 31, 25], [120, 125, 80], [66, 50, 59], [33, 21, 20], [75, 60, 44]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ... )
    >>> family = follow_up(table.log())
    >>> [(c.second, round(c.p_value, 4), round(c.p_adjusted, 4)) for c in family]
    [('week 6', 0.0625, 0.0625), ('week 12', 0.0312, 0.0625)]
    """
    own = method in SINGLE_STEP_METHODS
    adjust = _settled(adjust, method, own=own)
    check_choice("intervals", intervals, ("separate", "simultaneous"))
    check_level(level)
    pairs = declared_pairs(table, family)
    each = level if intervals == "separate" else 1 - (1 - level) / len(pairs)
    settings = {
        "thresholds": tuple((1 - level) / i for i in range(1, len(pairs) + 1)),
        **(options or {}),
        "level": each,
        "null": null,
    }
    root = _root(rng)
    if own:
        intervals = "simultaneous"
        comparisons, smallest = _whole_family(table, pairs, method, settings, level)
    elif adjust == "closed":
        comparisons, smallest = _closed_family(table, pairs, method, settings, root)
    else:
        comparisons, smallest = _tested_family(
            table, pairs, method, settings, root, adjust=adjust, alpha=1 - level
        )
    return FollowUps(
        comparisons=comparisons,
        method=method,
        family=family if isinstance(family, str) else "named",
        adjust=adjust,
        intervals=intervals,
        level=level,
        smallest_p=min(smallest_p(c) for c in comparisons),
        smallest_p_adjusted=min(smallest),
        notes=(
            family_notes(comparisons, level)
            if own
            else _notes(comparisons, adjust, intervals, level)
        ),
    )


def _settled(adjust: str | None, method: str, *, own: bool) -> str:
    """Return the adjustment: that of the method where it has one of its own."""
    if adjust is None:
        return "single-step" if own else "holm"
    check_choice("adjust", adjust, ADJUSTMENTS)
    if own and adjust != "single-step":
        raise ArgumentError(
            f"`adjust` must be 'single-step' with method {method!r}, got {adjust!r}: its p "
            "values are adjusted over all pairs of occasions. Leave it out."
        )
    if adjust == "single-step" and not own:
        named = " or ".join(map(repr, SINGLE_STEP_METHODS))
        raise ArgumentError(f"`method` must be {named} with adjust='single-step', got {method!r}.")
    return adjust


def smallest_p(comparison: Comparison) -> float:
    """Return the smallest unadjusted p a comparison could have had; 0 where there is none."""
    # a parametric p value has no smallest one
    return float(comparison.result.details.get("smallest_p") or 0.0)


def _tested_family(
    table: OccasionTable,
    pairs: Sequence[Pair],
    method: str,
    settings: Mapping[str, Any],
    root: np.random.SeedSequence,
    *,
    adjust: str,
    alpha: float,
) -> tuple[tuple[Comparison, ...], list[float]]:
    results = [_tested(table, pair, method, settings, _stream(root, pair)) for pair in pairs]
    p_adjusted = adjusted([result.p_value for result in results], adjust)
    results = _over_substitutes(results, p_adjusted, adjust, alpha)
    comparisons = tuple(
        Comparison(*pair, result, p)
        for pair, result, p in zip(pairs, results, p_adjusted, strict=True)
    )
    # the most favourable outcome has all comparisons at their smallest together
    return comparisons, adjusted([smallest_p(c) for c in comparisons], adjust)


def _over_substitutes(
    results: list[TestResult], p_adjusted: list[float], adjust: str, alpha: float
) -> list[TestResult]:
    """Add to every row how its adjusted p moves when one substitute enters in all rows alike.

    Step-down adjustment moves a row's p with those of the others, also where no value of its
    own lies below a limit.
    """
    spreads = [result.details.get("substitutes") for result in results]
    steps = next((len(spread["p_values"]) for spread in spreads if spread), 0)
    if not steps:
        return results
    by_step = [
        adjusted(
            [
                spread["p_values"][i] if spread else result.p_value
                for spread, result in zip(spreads, results, strict=True)
            ],
            adjust,
        )
        for i in range(steps)
    ]
    moved = []
    for row, (result, spread) in enumerate(zip(results, spreads, strict=True)):
        ps = [step[row] for step in by_step] + [p_adjusted[row]]
        signs = set(spread["directions"]) if spread else {0}
        steady = len({p <= alpha for p in ps}) == 1 and len(signs) == 1
        over = {"p_adjusted": (min(ps), max(ps)), "reading": "unchanged" if steady else "changes"}
        moved.append(replace(result, details={**result.details, "over_substitutes": over}))
    return moved


def declared_pairs(
    table: OccasionTable, family: str | Sequence[Pair], argument: str = "family"
) -> list[Pair]:
    """Return the pairs (earlier, later) of a family, in the order of the table's occasions.

    `argument` is the caller's name for it in messages.
    """
    labels = table.occasions
    if isinstance(family, str):
        check_choice(argument, family, FAMILIES)
        if family == "first":
            return [(labels[0], label) for label in labels[1:]]
        if family == "successive":
            return list(itertools.pairwise(labels))
        return list(itertools.combinations(labels, 2))
    pairs = [tuple(pair) for pair in family]
    if not pairs or any(len(pair) != 2 for pair in pairs):
        raise ArgumentError(f"`{argument}` must hold pairs of two occasions, got {family!r}.")
    for pair in pairs:
        for label in pair:
            check_member(argument, label, labels)
    if len({frozenset(pair) for pair in pairs}) < len(pairs) or any(a == b for a, b in pairs):
        raise ArgumentError(f"`{argument}` must hold different pairs, got {family!r}.")
    return [(a, b) for a, b in pairs]


def _root(rng: Rng) -> np.random.SeedSequence:
    if isinstance(rng, np.random.SeedSequence):
        return rng
    if isinstance(rng, np.random.Generator):
        return np.random.SeedSequence(int(rng.integers(2**63)))
    return np.random.SeedSequence(rng)


def _stream(root: np.random.SeedSequence, pair: Pair) -> np.random.SeedSequence:
    key = crc32("\x1f".join(pair).encode())
    return np.random.SeedSequence(root.entropy, spawn_key=(*root.spawn_key, key))


def _tested(
    table: OccasionTable,
    pair: Pair,
    method: str,
    settings: Mapping[str, Any],
    seed: np.random.SeedSequence,
) -> TestResult:
    names = tuple(entry.name for entry in METHODS if entry.kind != "omnibus")
    entry = registered(check_choice("method", method, names))
    _check_options(settings, entry)
    taken = {name: value for name, value in settings.items() if name in entry.options}
    if "rng" in entry.options:
        taken["rng"] = seed
    try:
        return entry.load()(table, *pair, **taken)
    except TooFewError as error:
        return _not_estimable(table, pair, method, str(error))


def _check_options(settings: Mapping[str, Any], entry: Method) -> None:
    # offered to every method, used by those that take them
    common = {"level", "null", "rng", "thresholds"}
    for name in settings:
        if name not in common:
            check_choice(f"options of {entry.name}", name, entry.options)


def _whole_family(
    table: OccasionTable,
    pairs: Sequence[Pair],
    method: str,
    settings: Mapping[str, Any],
    level: float,
) -> tuple[tuple[Comparison, ...], list[float]]:
    """Return what a method of a whole family says of the declared pairs, and its smallest p."""
    entry = registered(method)
    _check_options(settings, entry)
    function: Callable[..., tuple[Comparison, ...]] = getattr(entry.module(), entry.name)
    comparisons = function(table, pairs, level=level)
    return comparisons, [
        float(comparison.result.details.get("smallest_p_adjusted", 0.0))
        for comparison in comparisons
    ]


def _closed_family(
    table: OccasionTable,
    pairs: Sequence[Pair],
    method: str,
    settings: Mapping[str, Any],
    root: np.random.SeedSequence,
) -> tuple[tuple[Comparison, ...], list[float]]:
    """Return closed comparisons on the rows complete on all occasions, and their smallest p."""
    check_closed(method, table.n_occasions, settings)
    substitute = settings.get("substitute", "half")
    used = complete_rows(table, "Closed permutation testing").substitute(substitute)
    tests = closed_tests(
        closed_scores(used)[method],
        [(used.column("first", a), used.column("second", b)) for a, b in pairs],
        used.occasions,
        null=settings["null"],
        stages=check_draws(settings.get("draws")),
        thresholds=settings["thresholds"][:1],
        root=root,
    )
    p_holm = adjusted([test.raw.p_value for test in tests], "holm")
    comparisons = tuple(
        closed_comparison(used, pair, method, test, holm, level=settings["level"], root=root)
        for pair, test, holm in zip(pairs, tests, p_holm, strict=True)
    )
    return comparisons, [test.smallest for test in tests]


def _not_estimable(table: OccasionTable, pair: Pair, method: str, reason: str) -> TestResult:
    used = table.comparable(pair)
    return TestResult(
        method=method,
        statistic=math.nan,
        statistic_name="statistic",
        df=(),
        p_value=math.nan,
        null="exact",
        n_subjects=used.n_subjects,
        n_occasions=2,
        hypothesis="not tested",
        estimand="not estimable",
        scale=table.scale,
        subjects=used.ids,
        notes=(Note("not estimable", reason, "The comparison stays in the family and counts."),),
        details={"smallest_p": 1.0},
    )


def _substitutes_note(comparisons: Sequence[Comparison], adjust: str) -> list[Note]:
    told = [(c.label, c.result.details.get("over_substitutes")) for c in comparisons]
    ranges = [(label, over) for label, over in told if over is not None]
    if not ranges or adjust == "none" or len(comparisons) == 1:
        return []
    shown = "; ".join(f"{label} {number_range(*over['p_adjusted'])}" for label, over in ranges)
    crossing = [label for label, over in ranges if over["reading"] == "changes"]
    return [
        Note(
            "substitutes, adjusted",
            f"Over the same substitutes the P values after {TITLES[adjust]} are: {shown}.",
            f"The reading depends on the substitute for {listing(crossing)}."
            if crossing
            else "No reading depends on the substitute.",
        )
    ]


def _notes(
    comparisons: Sequence[Comparison], adjust: str, intervals: str, level: float
) -> tuple[Note, ...]:
    m = len(comparisons)
    notes = []
    has_interval = any(c.estimate is not None and c.estimate.low is not None for c in comparisons)
    if m > 1 and has_interval and intervals == "separate" and adjust != "none":
        notes.append(
            Note(
                "separate intervals",
                f"The intervals hold {level_text(level)} each and are not adjusted for "
                f"{counted(m, 'comparison')}; the p values are, after {TITLES[adjust]}.",
                "An interval may exclude no change where the adjusted p value does not.",
                "Simultaneous intervals go with Bonferroni-adjusted P.",
            )
        )
    if m > 1 and has_interval and intervals == "simultaneous":
        notes.append(
            Note(
                "simultaneous intervals",
                f"The {m} intervals hold {level_text(level)} together: each is made at level "
                f"{number(1 - (1 - level) / m, 5)} (Bonferroni).",
                ""
                if adjust == "bonferroni"
                else "They go with Bonferroni-adjusted P: another adjusted P can fall below the "
                "level where the interval includes no change.",
            )
        )
    if has_interval and comparisons[0].result.alternative in ("greater", "less"):
        fact = "P values are one-sided, intervals two-sided."
        notes.append(Note("one-sided", fact, "They need not agree at the level."))
    notes.extend(_substitutes_note(comparisons, adjust))
    sizes = sorted({c.result.n_subjects for c in comparisons})
    if len(sizes) > 1:
        notes.append(
            Note(
                "different n",
                f"Comparisons rest on {sizes[0]} to {sizes[-1]} subjects: each uses all who "
                "have both occasions.",
                "Rows with different n describe different groups of people.",
            )
        )
    return tuple(notes)
