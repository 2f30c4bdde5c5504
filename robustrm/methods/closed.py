"""Closed permutation testing of pairs of occasions.

H_ab says that swapping a subject's values at a and b changes nothing, given the others. An
intersection of such hypotheses is a set partition of the occasions: within each block all
orders are equally likely. A pair is rejected when every partition that joins it is.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Literal, cast
from zlib import crc32

import numpy as np

from robustrm._checks import check_choice
from robustrm._format import listing
from robustrm.errors import ArgumentError, BudgetError
from robustrm.kernels.null.engine import tail
from robustrm.kernels.null.forms import centring
from robustrm.kernels.null.results import Tail
from robustrm.kernels.null.tables import permutation_tables
from robustrm.kernels.null.work import BUDGET, plan_work
from robustrm.kernels.scores import aligned_scores
from robustrm.methods.additive import check_null, monte_carlo_notes
from robustrm.methods.beyond import MOSTLY_BEYOND, is_mostly_beyond
from robustrm.methods.registry import CLOSED_METHODS
from robustrm.methods.sign_flip import NAMES, mean_shift
from robustrm.results import Comparison, Note, TestResult
from robustrm.table import OccasionTable
from robustrm.ties import Floats

MOST_OCCASIONS = 6
Partition = tuple[tuple[int, ...], ...]
Places = tuple[int, int]


@dataclass(frozen=True, slots=True)
class ClosedTest:
    """What closed testing says of one pair.

    Parameters
    ----------
    raw : Tail
        The pair alone: its own values swapped.
    p_adjusted : float
        The largest p value over the partitions that join the pair.
    partition : str
        The partition that gave it.
    deciding : Tail
        How that p value was found.
    contrast : float
        Difference of the mean scores, later less earlier.
    smallest : float
        The smallest adjusted p value that any arrangement of these scores could give.
    """

    raw: Tail
    p_adjusted: float
    partition: str
    deciding: Tail
    contrast: float
    smallest: float


def partitions_of(pairs: Sequence[Places], k: int) -> list[Partition]:
    """Return the partitions that are intersections of the pairs' hypotheses.

    Each joins some of the pairs; with all pairs of k occasions these are all set partitions
    but the one without a joined pair.

    Examples
    --------
    >>> partitions_of([(0, 1), (0, 2)], 3)
    [((0, 1), (2,)), ((0, 1, 2),), ((0, 2), (1,))]
    """
    alone: Partition = tuple((j,) for j in range(k))
    found = {alone}
    for pair in pairs:
        found |= {_joined(partition, pair) for partition in found}
    return sorted(found - {alone})


def _joined(partition: Partition, pair: Places) -> Partition:
    merged = [block for block in partition if set(block) & set(pair)]
    others = [block for block in partition if not set(block) & set(pair)]
    return tuple(sorted([*others, tuple(sorted(place for block in merged for place in block))]))


def joins(partition: Partition, pair: Places) -> bool:
    """Whether one block of the partition holds both occasions."""
    return any(set(pair) <= set(block) for block in partition)


def closed_tests(
    scores: Floats,
    pairs: Sequence[Places],
    labels: Sequence[str],
    *,
    null: str,
    stages: Sequence[int],
    thresholds: Sequence[float],
    root: np.random.SeedSequence,
) -> list[ClosedTest]:
    """Test every partition of the family and give each pair its largest p value.

    Parameters
    ----------
    scores : array (n, k)
        Row-centred scores of complete rows, computed once from the whole table.
    pairs : sequence of (int, int)
        The declared family, as places in `labels`.
    labels : sequence of str
        Occasions.
    null : {"auto", "exact", "monte carlo"}
        As for a single test; the work budget is shared among the partitions.
    stages, thresholds
        Monte Carlo draws, and the levels that a p value is compared with.
    root : SeedSequence
        Every partition draws from a stream of its own.

    Returns
    -------
    list of ClosedTest
        One a pair, in order.

    Raises
    ------
    BudgetError
        With ``null="exact"`` when a partition is beyond its share of the budget.
    """
    partitions = partitions_of(pairs, len(labels))
    check_null(null)
    tails = {
        partition: tail(
            permutation_tables(scores, blocks=partition),
            scores.sum(axis=0),
            centring(len(labels), blocks=partition),
            null=_within_budget(scores, partition, null, BUDGET / len(partitions)),
            budget=BUDGET / len(partitions),
            stages=stages,
            thresholds=thresholds,
            rng=_stream(root, partition),
        )
        for partition in partitions
    }
    smallest = smallest_closed(scores)
    means = scores.mean(axis=0)
    return [_closed_test(pair, tails, means, smallest, labels) for pair in pairs]


def _within_budget(
    scores: Floats, partition: Partition, null: str, budget: float
) -> Literal["auto", "exact", "monte carlo"]:
    if null == "exact":
        tables = permutation_tables(scores, blocks=partition)
        cost = plan_work(tables, centring(scores.shape[1], blocks=partition), budget=budget)
        if not cost.affordable:
            raise BudgetError(
                "`null` must be 'auto' or 'monte carlo' for closed testing of this table, got "
                f"'exact': {cost.sentence}."
            )
    return cast(Literal["auto", "exact", "monte carlo"], null)


def _closed_test(
    pair: Places,
    tails: dict[Partition, Tail],
    means: Floats,
    smallest: float,
    labels: Sequence[str],
) -> ClosedTest:
    joining = [partition for partition in tails if joins(partition, pair)]
    alone = _joined(tuple((j,) for j in range(len(labels))), pair)
    worst = max(joining, key=lambda partition: tails[partition].p_value)
    return ClosedTest(
        raw=tails[alone],
        p_adjusted=tails[worst].p_value,
        partition=written(worst, labels),
        deciding=tails[worst],
        contrast=float(np.subtract(*means[list(pair)][::-1])),
        smallest=smallest,
    )


def closed_scores(used: OccasionTable) -> dict[str, Floats]:
    """Return the scores of each method of closed testing, from the whole table."""
    values = used.centred_scores()
    return {"sign_flip": values, "aligned_ranks": aligned_scores(values)}


def smallest_closed(scores: Floats) -> float:
    """Return the smallest adjusted p value that any outcome of these scores could give.

    From three subjects on, of the partitions that join a pair the pair alone has the largest
    smallest p: two of the 2ᵐ sign patterns of the m subjects whose scores differ at all.
    Larger blocks have more arrangements. With ties inside rows not every pair may reach it.
    """
    moving = int((np.ptp(scores, axis=1) > 0).sum())
    return math.ldexp(1.0, 1 - moving) if moving else 1.0


def _stream(root: np.random.SeedSequence, partition: Partition) -> np.random.Generator:
    key = crc32(repr(partition).encode())
    seed = np.random.SeedSequence(root.entropy, spawn_key=(*root.spawn_key, key))
    return np.random.default_rng(seed)


def written(partition: Partition, labels: Sequence[str]) -> str:
    """Return the joined blocks in words: ``"week 0 with week 2; week 6 with week 12"``."""
    blocks = [block for block in partition if len(block) > 1]
    return "; ".join(listing([labels[j] for j in block]) for block in blocks)


def closed_comparison(
    used: OccasionTable,
    pair: tuple[str, str],
    method: str,
    test: ClosedTest,
    p_holm: float,
    *,
    level: float,
    root: np.random.SeedSequence,
) -> Comparison:
    """Make the row of one pair with its closed p value.

    Estimate and interval are those of the sign flip of the values, also with aligned ranks,
    which a note says.
    """
    values = used.paired(*pair)[0].values
    by_ranks = method == "aligned_ranks"
    names = NAMES[used.scale == "log"]
    # aligned scores are 2k times the ranks
    statistic = test.contrast / (2 * used.n_occasions) if by_ranks else float(values.mean())
    symbol = "difference of mean aligned ranks"
    if not by_ranks:
        symbol = "mean log ratio" if used.scale == "log" else "mean difference"
    shift = None
    if not is_mostly_beyond(used.select(occasions=pair)):
        places = tuple(used.column("family", label) for label in pair)
        shift = mean_shift(values, used, level, _stream(root, (places,)))
    result = TestResult(
        method=method,
        statistic=statistic,
        statistic_name=symbol,
        df=(),
        p_value=test.raw.p_value,
        null=test.raw.null,
        n_subjects=used.n_subjects,
        n_occasions=2,
        hypothesis=(
            "Swapping a subject's values at the two occasions changes nothing, given the others."
        ),
        estimand="shift of the subject-centred values, by ranks" if by_ranks else names,
        scale=used.scale,
        alternative="two-sided",
        p_interval=test.raw.p_interval,
        arrangements=test.raw.arrangements,
        draws=test.raw.draws,
        estimate=shift,
        subjects=used.ids,
        notes=(
            *monte_carlo_notes(test.raw, ()),
            *((MOSTLY_BEYOND,) if shift is None else ()),
            *((_INTERVAL_OF_VALUES,) if by_ranks else ()),
        ),
        details={
            "smallest_p": test.smallest,
            "p_holm": p_holm,
            "partition": test.partition,
            "partition_null": test.deciding.null,
            "partition_p_interval": test.deciding.p_interval,
        },
    )
    return Comparison(*pair, result, test.p_adjusted)


_INTERVAL_OF_VALUES = Note(
    "interval of the values",
    "P is that of the aligned ranks; estimate and interval are those of the sign flip of the "
    "values.",
    "They need not agree at the level.",
)


def check_closed(method: str, k: int, settings: Mapping[str, Any]) -> None:
    """Refuse a method, direction or number of occasions that closed testing does not take.

    Raises
    ------
    ArgumentError
        With what it takes.
    """
    if method not in CLOSED_METHODS:
        named = " or ".join(repr(name) for name in CLOSED_METHODS)
        raise ArgumentError(
            f"`method` must be {named} with adjust='closed', got {method!r}: the scores are "
            "computed once from the whole table."
        )
    if k > MOST_OCCASIONS:
        raise ArgumentError(
            f"`adjust` 'closed' takes at most {MOST_OCCASIONS} occasions, got {k}. Use 'holm', "
            "or select occasions."
        )
    if settings.get("alternative", "two-sided") != "two-sided":
        raise ArgumentError(
            "`alternative` must be 'two-sided' with adjust='closed', got "
            f"{settings['alternative']!r}: a partition has no direction."
        )
    known = ("alternative", "substitute", "level", "null", "draws", "thresholds")
    for name in settings:
        check_choice("options with adjust='closed'", name, known)
