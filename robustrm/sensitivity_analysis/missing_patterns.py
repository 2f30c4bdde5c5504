"""Which occasions are missing together, why, and what those who left had shown before."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from robustrm._format import counted, listing, number
from robustrm.methods.summary import summarize
from robustrm.records.natural import natural_key
from robustrm.table import OccasionTable
from robustrm.ties import Ints

PATTERN_COLUMNS = (
    "pattern", "n_subjects", "n_missing", "monotone", "reasons", "subjects",
)  # fmt: skip
EARLIER_COLUMNS = (
    "last_occasion", "occasion", "group", "n_subjects", "n", "n_below", "n_above", "median",
    "geometric_mean",
)  # fmt: skip
NO_REASON = "no reason given"
# what a file writes for an empty cell says that a value is missing, not why
_EMPTY = frozenset({"", "-", "--", "–", "—", ".", "missing", "na", "n/a", "nan", "null", "none"})


@dataclass(frozen=True, slots=True)
class Pattern:
    """Subjects who lack the same occasions.

    Parameters
    ----------
    missing : tuple of bool
        Which occasions they lack.
    rows : tuple of int
        Their places in the table.
    """

    missing: tuple[bool, ...]
    rows: tuple[int, ...]

    @property
    def is_monotone(self) -> bool:
        """Whether every gap lies after the last value: nobody came back."""
        return list(self.missing) == sorted(self.missing)


def patterns_of(table: OccasionTable) -> tuple[Pattern, ...]:
    """Return the patterns that occur: complete first, then few gaps before many, late before early.

    Parameters
    ----------
    table : OccasionTable
        Its rows keep their order within a pattern.

    Returns
    -------
    tuple of Pattern
    """
    found: dict[tuple[bool, ...], list[int]] = {}
    for row, mask in enumerate(table.missing.tolist()):
        found.setdefault(tuple(mask), []).append(row)
    order = sorted(found, key=lambda mask: (sum(mask), mask))
    return tuple(Pattern(mask, tuple(found[mask])) for mask in order)


def pattern_words(table: OccasionTable, missing: Sequence[bool]) -> str:
    """Return a pattern in words: ``"no value at week 6"``."""
    gaps = [label for label, gap in zip(table.occasions, missing, strict=True) if gap]
    if not gaps:
        return "complete"
    return f"no value at {'any occasion' if all(missing) else listing(gaps)}"


def pattern_rows(table: OccasionTable) -> list[dict[str, Any]]:
    """Return one row a pattern, with the reasons as they were written."""
    rows = []
    for pattern in patterns_of(table):
        ids = sorted((table.subjects[i] for i in pattern.rows), key=natural_key)
        rows.append(
            {
                "pattern": pattern_words(table, pattern.missing),
                "n_subjects": len(pattern.rows),
                "n_missing": sum(pattern.missing),
                "monotone": pattern.is_monotone,
                "reasons": reason_words(reasons(table, pattern.rows)),
                "subjects": ", ".join(ids),
            }
        )
    return rows


def reasons(table: OccasionTable, rows: Sequence[int] | None = None) -> Counter[str]:
    """Count the reasons of the missing cells, as they were written."""
    places = list(range(table.n_subjects) if rows is None else rows)
    tokens = table.tokens[places][table.missing[places]].tolist()
    return Counter(NO_REASON if t.strip().casefold() in _EMPTY else t for t in tokens)


def reason_words(counts: Mapping[str, int]) -> str:
    """Return ``"haemolysed (2), no reason given (1)"``, the frequent ones first."""
    ordered = sorted(counts.items(), key=lambda item: (item[0] == NO_REASON, -item[1], item[0]))
    return ", ".join(f"{reason} ({count})" for reason, count in ordered)


def last_observed(table: OccasionTable) -> Ints:
    """Return the place of every subject's last value, −1 where there is none."""
    present = ~table.missing
    k = table.n_occasions
    last = k - 1 - np.argmax(present[:, ::-1], axis=1)
    return np.asarray(np.where(present.any(axis=1), last, -1), dtype=np.int64)


def earlier_rows(table: OccasionTable, substitute: str) -> list[dict[str, Any]]:
    """Return what those who left and those who stayed had shown until then.

    Who left after an occasion has the last value there; who stayed has a later one. Every
    occasion is taken at the limit that all of its values share, so that both groups are
    described alike.
    """
    last = last_observed(table)
    rows: list[dict[str, Any]] = []
    for j in range(table.n_occasions - 1):
        groups = {"left": np.flatnonzero(last == j), "stayed": np.flatnonzero(last > j)}
        if not groups["left"].size:
            continue
        for occasion in table.occasions[: j + 1]:
            for group, members in groups.items():
                head = {
                    "last_occasion": table.occasions[j],
                    "occasion": occasion,
                    "group": group,
                    "n_subjects": int(members.size),
                }
                rows.append({**head, **_described(table, occasion, members, substitute)})
    return rows


def _described(
    table: OccasionTable, occasion: str, members: Ints, substitute: str
) -> dict[str, Any]:
    if not members.size:
        empty = {"n": 0, "n_below": 0, "n_above": 0}
        return {**empty, "median": None, "geometric_mean": None}
    alone = table.select(occasions=(occasion,)).recensored()
    (found,) = summarize(
        alone.select(subjects=[table.subjects[i] for i in members.tolist()]), substitute=substitute
    )
    return {
        "n": found.n,
        "n_below": found.n_below,
        "n_above": found.n_above,
        "median": found.median,
        "geometric_mean": found.geometric_mean,
    }


def pattern_sentences(table: OccasionTable) -> list[str]:
    """Say how much is missing, how it is spread, and which reasons were written down."""
    missing = table.missing
    lacking = int(missing.any(axis=1).sum())
    n, k = missing.shape
    lack = "lacks" if lacking == 1 else "lack"
    first = (
        f"{lacking} of {counted(n, 'subject')} {lack} a value on at least one of {k} occasions "
        f"({int(missing.sum())} of {n * k} values); {n - lacking} are complete."
    )
    spread = "; ".join(
        f"{pattern_words(table, pattern.missing)} ({len(pattern.rows)})"
        for pattern in patterns_of(table)
    )
    return [first, f"Patterns (number of subjects): {spread}.", _reason_sentence(table)]


def _reason_sentence(table: OccasionTable) -> str:
    counts = reasons(table)
    total, unexplained = sum(counts.values()), counts[NO_REASON]
    ask = "whether the reason has to do with the value that is missing"
    if unexplained == total:
        return f"No reason is written down for any gap: ask why each visit is missing, and {ask}."
    told = f"Reasons written down: {reason_words(counts)}."
    if unexplained:
        return f"{told} Ask why the other visits are missing, and for all of them {ask}."
    return f"{told} Ask of each {ask}."


def earlier_sentences(table: OccasionTable, rows: Sequence[Mapping[str, Any]]) -> list[str]:
    """Say what those who left had at their last occasion, beside those who stayed."""
    unit = f" {table.unit}" if table.unit else ""
    sentences = []
    for left, stayed in zip(rows[::2], rows[1::2], strict=True):
        if left["occasion"] != left["last_occasion"]:
            continue
        sentences.append(
            f"After {left['occasion']}, {left['n_subjects']} left; median there "
            f"{_median(left, unit)} (n = {left['n']}), of the {stayed['n_subjects']} with a later "
            f"value {_median(stayed, unit)} (n = {stayed['n']})."
        )
    return [*sentences, "These medians are descriptive, without a test."] if sentences else []


def _median(row: Mapping[str, Any], unit: str) -> str:
    if row["median"] is None:
        return "beyond the limit" if row["n"] else number(None)
    return f"{number(row['median'])}{unit}"
