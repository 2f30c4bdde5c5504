"""What sizing answers: power, expected width and smallest p against the number of subjects."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Literal

from robustrm._format import DASH, aligned, declared, fixed, number, percent
from robustrm.methods.adjusting import TITLES
from robustrm.results import Note, plain
from robustrm.sizing.pilot import PilotVariation
from robustrm.sizing.study import Study

if TYPE_CHECKING:
    import pandas as pd

Role = Literal["primary", "supporting", "beside"]
# Sizes above the smallest n that must reach the target too.
FURTHER = 3
AT_LEAST_ONE = "at least one"


@dataclass(frozen=True, slots=True)
class Followed:
    """One probability of rejection that is followed over the numbers of subjects.

    Parameters
    ----------
    name : str
        What stands in the column ``test``: unique.
    role : {"primary", "supporting", "beside"}
        Planned comparisons, planned overall test, parametric.
    comparison : str
        ``"later vs earlier"``, ``"at least one"`` expected change of the family, or
        ``"all occasions"``.
    ratio : float or None
        Expected ratio of a comparison.
    outcome : str
        Which outcome of a simulated block it counts.
    places : tuple of int
        Which comparisons of the family it counts, any of them; empty for an overall test.
    """

    name: str
    role: Role
    comparison: str
    ratio: float | None
    outcome: str
    places: tuple[int, ...] = ()

    @property
    def expects_change(self) -> bool:
        """Whether a rejection is a change that is there."""
        return self.ratio != 1


def tests_of(study: Study) -> tuple[Followed, ...]:
    """Return what is followed: planned family, overall test, and the parametric ones beside."""
    plan = study.plan
    found = [
        *_family(study, f"{plan.pair}, {TITLES[plan.adjust]}", "primary", "planned"),
        Followed(plan.omnibus, "supporting", "all occasions", None, "omnibus"),
    ]
    for adjust in ("bonferroni", "holm"):
        found += _family(study, f"paired_t, {TITLES[adjust]}", "beside", adjust)
    found += [
        Followed("anova, Greenhouse-Geisser", "beside", "all occasions", None, "anova"),
        Followed("anova, uncorrected", "beside", "all occasions", None, "uncorrected"),
    ]
    # a parametric plan has what would stand beside in the plan itself
    planned = {test.name for test in found if test.role != "beside"}
    return tuple(t for t in found if t.role != "beside" or t.name not in planned)


def _family(study: Study, name: str, role: Role, outcome: str) -> list[Followed]:
    single = [
        Followed(
            f"{name}: {study.label_of(pair)}",
            role,
            study.label_of(pair),
            study.ratio_of(pair) if study.changes(pair) else 1.0,
            outcome,
            (place,),
        )
        for place, pair in enumerate(study.pairs)
    ]
    changed = tuple(test.places[0] for test in single if test.expects_change)
    if len(changed) < 2:
        return single
    return [
        Followed(f"{name}: {AT_LEAST_ONE}", role, AT_LEAST_ONE, None, outcome, changed),
        *single,
    ]


def smallest_of(sizes: Sequence[int], powers: Sequence[float], target: float) -> int | None:
    """Return the smallest n that reaches the target together with the next three numbers.

    Examples
    --------
    >>> smallest_of(range(6, 12), [0.7, 0.81, 0.79, 0.82, 0.83, 0.84], 0.8) is None
    True
    >>> smallest_of(range(6, 13), [0.7, 0.81, 0.79, 0.82, 0.83, 0.84, 0.9], 0.8)
    9
    """
    reached = {n for n, power in zip(sizes, powers, strict=True) if power >= target}
    enough = (n for n in sizes if reached.issuperset(range(n, n + FURTHER + 1)))
    return next(enough, None)


@dataclass(frozen=True, eq=False, kw_only=True)
class Sizing:
    """How many subjects a study needs, and what it can show.

    Parameters
    ----------
    study : Study
        What was assumed, with the plan.
    tests : tuple of Followed
        What is followed over the numbers of subjects.
    table : DataFrame
        ``n``, ``test``, ``role``, ``comparison``, ``ratio``, ``rejections``, ``datasets``,
        ``power``, ``low``, ``high``: share of the simulated studies in which the test rejects,
        with its 95% Monte Carlo interval (Clopper-Pearson).
    smallest : dict of str to int or None
        For every test of an expected change the smallest n such that it and the next three
        numbers reach the target; None where no n that was asked does.
    attainable : DataFrame
        ``n``, ``test``, ``comparisons``, ``adjust``, ``smallest_p``, ``smallest_p_adjusted``,
        ``reachable``: how small P can become with all subjects present.
    widths : DataFrame
        ``n``, ``comparison``, ``ratio``, ``width``, ``narrow``, ``wide``, ``level``, ``given``:
        median and 10th and 90th percentile of the width of the exact signed-rank interval over
        the simulated studies, high divided by low on the log scale, high less low on the raw one;
        the level it attains with all subjects present, and the share of studies that have one.
    target : float
        Power asked for.
    datasets : int
        Simulated studies of every size.
    seed : int
        Root of all streams.
    pilot : PilotVariation or None
        Where the CVs come from.
    sentence : str
        For a protocol.
    cautions : tuple of Note
        What the numbers do not say.
    """

    study: Study
    tests: tuple[Followed, ...]
    table: pd.DataFrame
    smallest: dict[str, int | None]
    attainable: pd.DataFrame
    widths: pd.DataFrame
    target: float
    datasets: int
    seed: int
    pilot: PilotVariation | None
    sentence: str
    cautions: tuple[Note, ...]

    def to_dict(self) -> dict[str, Any]:
        """Return plain values, tables as lists of rows."""
        study = self.study
        assumed = {
            f.name: getattr(study, f.name) for f in dataclasses.fields(study) if f.name != "plan"
        }
        found: dict[str, Any] = plain(
            {
                "assumed": {**assumed, "scale": study.scale},
                "pilot": self.pilot,
                "target": self.target,
                "datasets": self.datasets,
                "seed": self.seed,
                "smallest": self.smallest,
                "table": self.table.to_dict("records"),
                "attainable": self.attainable.to_dict("records"),
                "widths": self.widths.to_dict("records"),
                "sentence": self.sentence,
                "cautions": self.cautions,
            }
        )
        return {**found, "plan": study.plan.to_dict()}

    def __str__(self) -> str:
        return "\n\n".join(
            [
                assumed_text(self.study),
                self._tests_text(),
                self._sizes_text(),
                f"For a protocol\n{self.sentence}",
                "\n".join(["Cautions", *(f"- {caution}" for caution in self.cautions)]),
                f"Seed {self.seed}",
            ]
        )

    def power_at(self, test: str, n: int) -> tuple[float, float, float]:
        """Return power and its Monte Carlo limits of a test with n subjects."""
        row = self.table[(self.table["test"] == test) & (self.table["n"] == n)].iloc[0]
        return float(row["power"]), float(row["low"]), float(row["high"])

    def _tests_text(self) -> str:
        last = int(self.table["n"].max())
        rows = []
        for test in self.tests:
            n = self.smallest.get(test.name)
            shown = last if n is None else n
            asked = _smallest_text(n, last) if test.expects_change else "no change"
            power = _with_interval(*self.power_at(test.name, shown))
            rows.append([test.name, _ratio_text(test.ratio), asked, str(shown), power])
        studies = f"{self.datasets:,} simulated studies of each size"
        head = (
            f"Smallest n from which the power is at least {declared(self.target)}, for it and the "
            f"next {FURTHER} numbers ({studies}, 95% Monte Carlo interval)"
        )
        return f"{head}\n{aligned(['test', 'ratio', 'smallest n', 'n', 'power at n'], rows)}"

    def _sizes_text(self) -> str:
        """Return a line for every n: what is planned, the weakest of it, the widest interval."""
        planned = [test for test in self.tests if test.role == "primary" and test.expects_change]
        single = [test.name for test in planned if test.comparison != AT_LEAST_ONE]
        power = self.table.pivot_table(index="n", columns="test", values="power")
        widest = self.widths.groupby("n")["width"].max().to_dict()
        least = self.attainable[self.attainable["adjust"] == self.study.plan.adjust]
        smallest = dict(zip(least["n"], least["smallest_p_adjusted"], strict=True))
        overall = self.study.plan.omnibus
        rows = []
        for n, row in power.iterrows():
            any_of = fixed(float(row[planned[0].name]), 2) if planned else DASH
            weakest = fixed(float(row[single].min()), 2) if planned else DASH
            least_p = number(smallest.get(n))
            powers = (any_of, weakest, fixed(float(row[overall]), 2))
            rows.append([str(n), *powers, fixed(float(widest[n]), 2), least_p])
        kind = "high/low" if self.study.scale == "log" else "high − low"
        head = (
            f"Planned tests by n: power for any and for the hardest expected change, and of "
            f"{overall}; expected width of the widest interval ({kind}); smallest adjusted P"
        )
        return (
            f"{head}\n{aligned(['n', 'any', 'hardest', 'overall', 'width', 'P'], rows, words=())}"
        )


def assumed_text(study: Study) -> str:
    """Return what was assumed, as text."""
    later = zip(study.labels[1:], study.ratios[1:], strict=True)
    expected = ", ".join(f"{declared(ratio)} at {label}" for label, ratio in later)
    lines = [
        f"Assumed: {study.distribution} values, CV within people {cv_text(study.cv_within)}, "
        f"between people {cv_text(study.cv_between)}",
        f"Expected ratios to {study.labels[0]}: {expected}",
    ]
    if study.limit:
        lines.append(f"{percent(study.limit)} of the values below the limit of detection")
    if study.dropout:
        lines.append(f"{percent(study.dropout)} of the subjects lost by the last occasion")
    return "\n".join(lines)


def _ratio_text(ratio: float | None) -> str:
    return "" if ratio is None else declared(round(ratio, 3))


def cv_text(cv: float) -> str:
    """Return a CV as it was given; one from a pilot with three digits.

    Examples
    --------
    >>> cv_text(0.42), cv_text(0.3933358)
    ('0.42', '0.393')
    """
    return declared(float(f"{cv:.3g}"))


def _smallest_text(n: int | None, last: int) -> str:
    return f"not to {last}" if n is None else str(n)


def _with_interval(power: float, low: float, high: float) -> str:
    return f"{fixed(power, 3)} [{fixed(low, 3)}, {fixed(high, 3)}]"
