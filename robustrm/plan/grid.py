"""The grid of specifications that a plan declares: which other analyses count as reasonable."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from robustrm._checks import check_choice, check_count, check_names, check_share, did_you_mean
from robustrm.errors import ArgumentError

GRID_CHOICES: Mapping[str, tuple[str, ...]] = {
    "scale": ("log", "raw"),
    "test": (
        "aligned_ranks",
        "friedman",
        "quade",
        "normal_scores",
        "mean_permutation",
        "winsorized_permutation",
        "trimmed_anova",
        "rank_anova",
        "hotelling",
    ),
    "substitute": ("half", "root2", "limit"),
    "missing": ("complete", "available"),
    "outliers": ("kept", "winsorized"),
    "replicates": ("mean", "geometric"),
}
"""What each key of the grid may hold; `trim` holds shares and `draws` a number."""


@dataclass(frozen=True, kw_only=True)
class GridChoices:
    """Choices that are crossed with one another; every combination is one branch of equal weight.

    Parameters
    ----------
    scale : tuple of {"log", "raw"}
        Scales on which values are compared.
    test : tuple of str
        Statistics over all occasions, each referred to the same rearranged tables.
    trim : tuple of float
        Shares cut (`trimmed_anova`) or pulled in (`winsorized_permutation`) at each end, in
        [0, 0.5); they play no part for the other tests.
    substitute : tuple of {"half", "root2", "limit"}
        What enters for a value below the limit.
    missing : tuple of {"complete", "available"}
        Subjects with every occasion, or all with two or more. Tests that are not sums of scores
        within subjects, and Quade's, take complete subjects alone.
    outliers : tuple of {"kept", "winsorized"}
        Values as they are, or pulled in where a subject-centred value lies beyond the median
        ± 2.24 MADN of all of them.
    replicates : tuple of {"mean", "geometric"}
        Rules by which replicates were averaged, one table a rule; empty: as the table was read.
    draws : int
        Rearranged tables besides the observed one.

    Raises
    ------
    ArgumentError
        When a value is outside its range.

    Examples
    --------
    >>> GridChoices(test=["aligned_ranks"], outliers=["kept"]).test
    ('aligned_ranks',)
    """

    scale: tuple[str, ...] = ("log", "raw")
    test: tuple[str, ...] = (
        "aligned_ranks",
        "friedman",
        "quade",
        "mean_permutation",
        "winsorized_permutation",
        "trimmed_anova",
    )
    trim: tuple[float, ...] = (0.1, 0.2)
    substitute: tuple[str, ...] = ("half", "root2", "limit")
    missing: tuple[str, ...] = ("complete", "available")
    outliers: tuple[str, ...] = ("kept", "winsorized")
    replicates: tuple[str, ...] = ()
    draws: int = 1_999

    def __post_init__(self) -> None:
        for name, options in GRID_CHOICES.items():
            argument = f"grid.{name}"
            least = 0 if name == "replicates" else 1
            values = check_names(argument, getattr(self, name), least=least)
            for value in values:
                check_choice(argument, value, options)
            object.__setattr__(self, name, values)
        object.__setattr__(self, "trim", _checked_shares(self.trim))
        check_count("grid.draws", self.draws, least=99)

    def to_dict(self) -> dict[str, Any]:
        """Return all keys with plain values."""
        values = {f.name: getattr(self, f.name) for f in dataclasses.fields(self)}
        return {k: list(v) if isinstance(v, tuple) else v for k, v in values.items()}


def checked_grid(grid: GridChoices | Mapping[str, Any]) -> GridChoices:
    """Return the grid of a plan, also from the mapping that a plan file has."""
    if isinstance(grid, GridChoices):
        return grid
    if not isinstance(grid, Mapping):
        raise ArgumentError(
            f"`grid` must be a table of choices, got {grid!r}. Write [grid] and under it, for "
            'instance, scale = ["log"].'
        )
    known = [f.name for f in dataclasses.fields(GridChoices)]
    for key in grid:
        if key not in known:
            hint = did_you_mean(key, known) or f" Keys are: {', '.join(known)}."
            raise ArgumentError(f"`grid` has no key {key!r}.{hint}")
    return GridChoices(**grid)


def _checked_shares(shares: Sequence[float]) -> tuple[float, ...]:
    """Return distinct shares, each in [0, 0.5)."""
    if isinstance(shares, (str, float, int)) or not len(shares):
        raise ArgumentError(
            f"`grid.trim` must be a list of shares, got {shares!r}. Write [0.1, 0.2]."
        )
    found = tuple(_checked_share(share) for share in shares)
    if len(set(found)) < len(found):
        raise ArgumentError(f"`grid.trim` must not repeat a share, got {list(found)!r}.")
    return found


def _checked_share(share: object) -> float:
    if not isinstance(share, (int, float)):
        raise ArgumentError(f"`grid.trim` must hold shares in [0, 0.5), got {share!r}.")
    return check_share("grid.trim", share)
