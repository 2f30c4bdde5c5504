"""The plan: everything that is fixed before looking at the data, in one frozen object.

Every default of the package stands here and nowhere else. A plan is written and read as
TOML; options of the command line are edits of a plan.
"""

from __future__ import annotations

import dataclasses
import hashlib
import math
import os
import tomllib
import types
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal, Self

from robustrm._checks import (
    STAGES,
    check_choice,
    check_count,
    check_draws,
    check_level,
    check_share,
    nearest,
)
from robustrm.errors import ArgumentError, PlanError
from robustrm.methods.registry import ADJUSTMENTS
from robustrm.plan.checking import (
    Family,
    Limit,
    check_answer,
    check_created,
    check_digest,
    check_margin,
    check_pair,
    check_seed,
    check_text,
    checked_companions,
    checked_family,
    checked_limit,
    checked_occasions,
    methods_for,
)
from robustrm.plan.grid import GridChoices, checked_grid
from robustrm.results import Scale

MarkerKind = Literal["concentration", "count", "score"]
COMPANIONS = (
    "trimmed_anova",
    "rank_anova",
    "hotelling",
    "sign_test",
    "trimmed_difference",
    "trimmed_pair",
    "rank_pair",
    "nemenyi",
    "conover",
)
"""What stands beside the planned tests unless a plan says otherwise."""

_GRID = GridChoices()

_CHOICES: Mapping[str, tuple[str, ...]] = types.MappingProxyType(
    {
        "marker_kind": ("concentration", "count", "score"),
        "zeros": ("pratt", "drop"),
        "adjust": ADJUSTMENTS,
        "intervals": ("separate", "simultaneous"),
        "substitute": ("half", "root2", "limit"),
        "missing": ("available", "complete"),
        "purpose": ("exploratory", "confirmatory"),
        "design": ("single-arm", "randomised-order"),
    }
)


@dataclass(frozen=True, kw_only=True)
class Plan:
    """What is decided before the data are looked at.

    Parameters
    ----------
    marker, unit : str or None
        What is measured, and in which unit.
    occasions : tuple of str
        The occasions in their order; empty takes those of the file.
    lower_limit, upper_limit : float, tuple of (float or None), or None
        Limits of detection: one number, or one an occasion.
    estimand : str or None
        The target of estimation in the words of the protocol.
    marker_kind : {"concentration", "count", "score"}
        A concentration is analyzed as ratios on the log scale, counts and scores raw.
    scale : {"raw", "log"} or None
        Declared scale; None takes the one that `marker_kind` implies.
    contrasts : {"first", "all", "successive"} or tuple of pairs
        Primary family: each later occasion against the first, all pairs, each occasion
        against the one before, or named pairs (earlier, later).
    pair : str
        Method for each comparison, or for all of them together.
    omnibus : str
        Method for the overall test, which supports the planned contrasts.
    companions : tuple of str
        Methods whose results stand beside the planned ones, each with its own estimand; the
        parametric results always do.
    zeros : {"pratt", "drop"}
        What the signed-rank test does with zero differences.
    adjust : {"none", "bonferroni", "holm", "hochberg", "hommel", "bh", "closed", "single-step"}
        Adjustment of the p values over the family; ``"closed"`` takes `pair` ``"sign_flip"``
        or ``"aligned_ranks"``, ``"single-step"`` takes ``"nemenyi"`` or ``"conover"``.
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
    missing : {"available", "complete"}
        Whether a comparison uses all subjects who have both of its occasions, or those with
        every occasion.
    margin : float or None
        What counts as no relevant change: a ratio such as 1.25 on the log scale, a difference
        on the raw one.
    margin_reason : str or None
        Where the margin comes from; needed with one.
    trim : float
        Share cut at each end by the trimmed means, in [0, 0.5).
    winsorize : float
        Share pulled in at each end by the Winsorized permutation test, in [0, 0.5).
    in_time : bool
        Whether the occasions are ordered in time; the row flip then stands beside the overall
        test, from 8 complete subjects.
    purpose : {"exploratory", "confirmatory"}
        In an exploratory study (a pilot) estimates come first and p values are labelled.
    design : {"single-arm", "randomised-order"}
        Decides the wording: a single-arm change gets no causal verb.
    selected : bool or None
        Whether people were selected on a high value of the marker, after which later values are
        expected to lie lower without any change of the person; None leaves it open.
    own_runs : bool or None
        Whether each occasion was assayed in a run of its own, so that a difference between runs
        enters every comparison; None leaves it open.
    stages : tuple of int
        Monte Carlo draws, raised stage by stage while a p value is not resolved.
    bootstrap_draws : int
        Bootstrap resamples.
    grid : GridChoices, or a mapping of its keys
        The specifications that the sensitivity analysis crosses with one another.
    seed : int or None
        Root of all random streams; None draws one and records it.
    created : str or None
        Date of writing, as the file says: its word, and no proof.
    data_digest : str or None
        SHA-256 of the data file that was at hand when the plan was written; None says that it
        was written without data.
    amendments : tuple of str
        What was changed after the plan was written, in words.

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

    marker: str | None = None
    unit: str | None = None
    occasions: tuple[str, ...] = ()
    lower_limit: Limit | None = None
    upper_limit: Limit | None = None
    estimand: str | None = None
    marker_kind: MarkerKind = "concentration"
    scale: Scale | None = None
    contrasts: Family = "first"
    pair: str = "signed_rank"
    omnibus: str = "friedman"
    companions: tuple[str, ...] = COMPANIONS
    zeros: Literal["pratt", "drop"] = "pratt"
    adjust: str = "holm"
    intervals: Literal["separate", "simultaneous"] = "separate"
    level: float = 0.95
    sides: Literal[1, 2] = 2
    direction: Literal["greater", "less"] = "greater"
    substitute: Literal["half", "root2", "limit"] = "half"
    missing: Literal["available", "complete"] = "available"
    margin: float | None = None
    margin_reason: str | None = None
    trim: float = 0.2
    winsorize: float = 0.1
    in_time: bool = True
    purpose: Literal["exploratory", "confirmatory"] = "exploratory"
    design: Literal["single-arm", "randomised-order"] = "single-arm"
    selected: bool | None = None
    own_runs: bool | None = None
    stages: tuple[int, ...] = STAGES
    bootstrap_draws: int = 9_999
    grid: GridChoices = _GRID
    seed: int | None = None
    created: str | None = None
    data_digest: str | None = None
    amendments: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        for name, options in _CHOICES.items():
            check_choice(name, getattr(self, name), options)
        if self.scale is not None:
            check_choice("scale", self.scale, ("raw", "log"))
        check_choice("direction", self.direction, ("greater", "less"))
        if self.sides not in (1, 2) or isinstance(self.sides, bool):
            raise ArgumentError(f"`sides` must be 1 or 2, got {self.sides!r}.")
        if not isinstance(self.in_time, bool):
            raise ArgumentError(f"`in_time` must be true or false, got {self.in_time!r}.")
        for name in ("selected", "own_runs"):
            check_answer(name, getattr(self, name))
        check_pair(self.pair, self.adjust, self.sides)
        check_choice("omnibus", self.omnibus, methods_for("omnibus"))
        check_level(self.level)
        check_share("trim", self.trim)
        check_share("winsorize", self.winsorize)
        check_count("bootstrap_draws", self.bootstrap_draws, least=99)
        check_seed(self.seed)
        check_margin(self.margin, self.margin_reason)
        for name in ("marker", "unit", "estimand", "margin_reason"):
            check_text(name, getattr(self, name))
        check_created(self.created)
        check_digest(self.data_digest)
        self._settle()

    def _settle(self) -> None:
        """Turn lists, as TOML has them, into the tuples that a frozen plan holds."""
        occasions = checked_occasions(self.occasions)
        settled = {
            "occasions": occasions,
            "lower_limit": checked_limit("lower_limit", self.lower_limit, occasions),
            "upper_limit": checked_limit("upper_limit", self.upper_limit, occasions),
            "contrasts": checked_family(self.contrasts),
            "companions": checked_companions(self.companions),
            "stages": check_draws(tuple(self.stages), "stages"),
            "grid": checked_grid(self.grid),
            "amendments": tuple(str(text) for text in self.amendments),
        }
        for name, value in settled.items():
            object.__setattr__(self, name, value)

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

    def amended(self, **changes: Any) -> Self:
        """Return the plan with some keys changed, each change put down as an amendment.

        What the plan left open is filled in; that changes nothing that was planned.
        """
        changed = self.replace(**changes)
        told = tuple(
            f"{name}: {_told(getattr(self, name))} was planned, "
            f"{_told(getattr(changed, name))} was used"
            for name in changes
            if getattr(changed, name) != getattr(self, name)
            and getattr(self, name) not in (None, ())
        )
        return changed.replace(amendments=(*self.amendments, *told))

    def to_dict(self) -> dict[str, Any]:
        """Return all keys with plain values, None included."""
        return {f.name: _listed(getattr(self, f.name)) for f in dataclasses.fields(self)}

    def to_toml(self) -> str:
        """Return the plan as TOML; what is empty is left out, as TOML has no null.

        An occasion without a limit stands as nan.
        """
        import tomli_w

        optional = {f.name for f in dataclasses.fields(self) if f.default in (None, ())}
        kept = {
            name: [math.nan if v is None else v for v in value] if _is_limit(name, value) else value
            for name, value in self.to_dict().items()
            if not (name in optional and value in (None, []))
        }
        return tomli_w.dumps(kept)

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


def _is_limit(name: str, value: object) -> bool:
    return name.endswith("_limit") and isinstance(value, list)


def _listed(value: Any) -> Any:
    """Return tuples as lists and a grid as a table, as TOML and JSON have them."""
    if isinstance(value, GridChoices):
        return value.to_dict()
    return [_listed(item) for item in value] if isinstance(value, tuple) else value


def _told(value: Any) -> str:
    return "nothing" if value in (None, ()) else repr(_listed(value))


def _refuse_unknown(values: Mapping[str, Any], error: type[ArgumentError | PlanError]) -> None:
    known = [f.name for f in dataclasses.fields(Plan)]
    for key in values:
        if key not in known:
            guess = nearest(key, known)
            hint = f"Did you mean {guess!r}?" if guess else f"Keys are: {', '.join(known)}."
            raise error(f"The plan has no key {key!r}. {hint}")
