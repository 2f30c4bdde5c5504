"""The plan: everything that is fixed before looking at the data, in one frozen object.

Every default of the package stands here and nowhere else. A plan is written and read as
TOML; options of the command line are edits of a plan.
"""

from __future__ import annotations

import dataclasses
import hashlib
import os
import tomllib
import types
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal, Self, cast

from robustrm._checks import STAGES, check_choice, check_draws, check_level, nearest
from robustrm.errors import ArgumentError, PlanError
from robustrm.methods.registry import ADJUSTMENTS, CLOSED_METHODS, FAMILIES, METHODS
from robustrm.results import Scale

MarkerKind = Literal["concentration", "count", "score"]
Family = Literal["first", "all", "successive"] | tuple[tuple[str, str], ...]

_CHOICES: Mapping[str, tuple[str, ...]] = types.MappingProxyType(
    {
        "marker_kind": ("concentration", "count", "score"),
        "zeros": ("pratt", "drop"),
        "adjust": ADJUSTMENTS,
        "intervals": ("separate", "simultaneous"),
        "substitute": ("half", "root2", "limit"),
        "purpose": ("exploratory", "confirmatory"),
        "design": ("single-arm", "randomised-order"),
    }
)


@dataclass(frozen=True, kw_only=True)
class Plan:
    """What is decided before the data are looked at.

    Parameters
    ----------
    marker_kind : {"concentration", "count", "score"}
        A concentration is analyzed as ratios on the log scale, counts and scores raw.
    scale : {"raw", "log"} or None
        Declared scale; None takes the one that `marker_kind` implies.
    contrasts : {"first", "all", "successive"} or tuple of pairs
        Primary family: each later occasion against the first, all pairs, each occasion
        against the one before, or named pairs (earlier, later).
    pair : str
        Method for each comparison.
    omnibus : str
        Method for the overall test, which supports the planned contrasts.
    zeros : {"pratt", "drop"}
        What the signed-rank test does with zero differences.
    adjust : {"none", "bonferroni", "holm", "hochberg", "hommel", "bh", "closed"}
        Adjustment of the p values over the family; ``"closed"`` takes `pair` ``"sign_flip"``
        or ``"aligned_ranks"``.
    intervals : {"separate", "simultaneous"}
        Whether intervals hold the level each alone or all together.
    level : float
        Confidence level; the level of the tests is one minus this.
    sides : {1, 2}
        Sides of the tests; with 1 the direction is that of `direction`.
    direction : {"greater", "less"}
        Direction of one-sided tests: second occasion larger, or smaller.
    substitute : {"half", "root2", "limit"}
        What enters an estimate for a value below the limit; the range is shown beside.
    in_time : bool
        Whether the occasions are ordered in time; the row flip then stands beside the overall
        test, from 8 complete subjects.
    purpose : {"exploratory", "confirmatory"}
        In an exploratory study (a pilot) estimates come first and p values are labelled.
    design : {"single-arm", "randomised-order"}
        Decides the wording: a single-arm change gets no causal verb.
    stages : tuple of int
        Monte Carlo draws, raised stage by stage while a p value is not resolved.
    seed : int or None
        Root of all random streams; None draws one and records it.

    Raises
    ------
    ArgumentError
        When a value is outside its range.

    Examples
    --------
    >>> plan = Plan(contrasts="all").replace(adjust="hommel")
    >>> plan.contrasts, plan.adjust, plan.used_scale
    ('all', 'hommel', 'log')
    """

    marker_kind: MarkerKind = "concentration"
    scale: Scale | None = None
    contrasts: Family = "first"
    pair: str = "signed_rank"
    omnibus: str = "friedman"
    zeros: Literal["pratt", "drop"] = "pratt"
    adjust: str = "holm"
    intervals: Literal["separate", "simultaneous"] = "separate"
    level: float = 0.95
    sides: Literal[1, 2] = 2
    direction: Literal["greater", "less"] = "greater"
    substitute: Literal["half", "root2", "limit"] = "half"
    in_time: bool = True
    purpose: Literal["exploratory", "confirmatory"] = "exploratory"
    design: Literal["single-arm", "randomised-order"] = "single-arm"
    stages: tuple[int, ...] = STAGES
    seed: int | None = None

    def __post_init__(self) -> None:
        for name, options in _CHOICES.items():
            check_choice(name, getattr(self, name), options)
        if self.scale is not None:
            check_choice("scale", self.scale, ("raw", "log"))
        check_choice("direction", self.direction, ("greater", "less"))
        _check_pair(self.pair, self.adjust)
        check_choice("omnibus", self.omnibus, methods_for("omnibus"))
        check_level(self.level)
        if self.sides not in (1, 2) or isinstance(self.sides, bool):
            raise ArgumentError(f"`sides` must be 1 or 2, got {self.sides!r}.")
        if not isinstance(self.in_time, bool):
            raise ArgumentError(f"`in_time` must be true or false, got {self.in_time!r}.")
        object.__setattr__(self, "contrasts", _checked_family(self.contrasts))
        object.__setattr__(self, "stages", check_draws(tuple(self.stages), "stages"))
        _check_seed(self.seed)

    @property
    def used_scale(self) -> Scale:
        """The declared scale, or the one that the kind of marker implies."""
        if self.scale is not None:
            return self.scale
        return "log" if self.marker_kind == "concentration" else "raw"

    @property
    def alpha(self) -> float:
        """Level of the tests: one minus the confidence level, without float noise."""
        return round(1 - self.level, 12)

    @property
    def alternative(self) -> Literal["two-sided", "greater", "less"]:
        """Direction of the pairwise tests."""
        return "two-sided" if self.sides == 2 else self.direction

    @property
    def digest(self) -> str:
        """SHA-256 of the plan's canonical text: equal plans have equal digests."""
        return hashlib.sha256(self.to_toml().encode()).hexdigest()

    def replace(self, **changes: Any) -> Self:
        """Return the plan with some keys changed; unknown keys are refused."""
        _refuse_unknown(changes, ArgumentError)
        return dataclasses.replace(self, **changes)

    def to_dict(self) -> dict[str, Any]:
        """Return all keys with plain values, None included."""
        values = {f.name: getattr(self, f.name) for f in dataclasses.fields(self)}
        if not isinstance(self.contrasts, str):
            values["contrasts"] = [list(pair) for pair in self.contrasts]
        values["stages"] = list(self.stages)
        return values

    def to_toml(self) -> str:
        """Return the plan as TOML; keys that are None are left out, as TOML has no null."""
        import tomli_w

        return tomli_w.dumps({k: v for k, v in self.to_dict().items() if v is not None})

    def save(self, path: str | os.PathLike[str]) -> None:
        """Write the plan to a TOML file, whole or not at all."""
        target = Path(path)
        draft = target.with_name(f".{target.name}.part")
        draft.write_text(self.to_toml(), encoding="utf-8")
        draft.replace(target)

    @classmethod
    def load(cls, path: str | os.PathLike[str]) -> Self:
        """Read a plan from a TOML file.

        Raises
        ------
        PlanError
            When the file cannot be read, holds an unknown key (the nearest valid one is
            named) or a value outside its range.
        """
        name = Path(path).name
        try:
            values = tomllib.loads(Path(path).read_text(encoding="utf-8"))
        except OSError as error:
            message = f"The plan {name!r} cannot be read: {error.strerror}."
            raise PlanError(message) from None
        except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
            raise PlanError(f"The plan {name!r} is not valid TOML: {error}.") from None
        _refuse_unknown(values, PlanError)
        try:
            return cls(**values)
        except (ArgumentError, TypeError) as error:
            raise PlanError(f"The plan {name!r} is refused: {error}") from None


def methods_for(kind: str) -> tuple[str, ...]:
    """Return the names of the methods of one kind that a plan can name: no open options."""
    return tuple(m.name for m in METHODS if m.kind == kind and not m.requires)


def _check_pair(pair: str, adjust: str) -> None:
    if adjust != "closed":
        check_choice("pair", pair, methods_for("pair"))
    elif pair not in CLOSED_METHODS:
        raise ArgumentError(
            f"`pair` must be {' or '.join(map(repr, CLOSED_METHODS))} with `adjust` 'closed', "
            f"got {pair!r}: its scores are computed once from the whole table."
        )


def _refuse_unknown(values: Mapping[str, Any], error: type[ArgumentError | PlanError]) -> None:
    known = [f.name for f in dataclasses.fields(Plan)]
    for key in values:
        if key not in known:
            guess = nearest(key, known)
            hint = f"Did you mean {guess!r}?" if guess else f"Keys are: {', '.join(known)}."
            raise error(f"The plan has no key {key!r}. {hint}")


def _checked_family(family: str | Sequence[Sequence[str]]) -> Family:
    if isinstance(family, str):
        return cast(Family, check_choice("contrasts", family, FAMILIES))
    pairs = tuple(tuple(str(label) for label in pair) for pair in family)
    if not pairs or any(len(pair) != 2 or pair[0] == pair[1] for pair in pairs):
        raise ArgumentError(
            f"`contrasts` must be one of {', '.join(map(repr, FAMILIES))} or pairs of two "
            f"different occasions, got {family!r}."
        )
    return cast(Family, pairs)


def _check_seed(seed: int | None) -> None:
    whole = isinstance(seed, int) and not isinstance(seed, bool)
    if seed is not None and not (whole and seed >= 0):
        raise ArgumentError(f"`seed` must be a whole number of at least 0, got {seed!r}.")
