"""A plan meets a table: everything that is computed for a report, and who is in it."""

from __future__ import annotations

import dataclasses
import importlib.metadata
import platform
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any
from zlib import crc32

import numpy as np

from robustrm._format import counted, listing, number, percent
from robustrm.errors import DataError, TooFewError
from robustrm.ledger import Ledger
from robustrm.methods.attainable import Attainable, attainable_of
from robustrm.methods.effects import Effect, effect_sizes
from robustrm.methods.follow_up import follow_up
from robustrm.methods.registry import method as registered
from robustrm.methods.summary import OccasionSummary, summarize
from robustrm.plan import Plan
from robustrm.results import FollowUps, Note, Role, Scale, TestResult, plain
from robustrm.table import OccasionTable

Progress = Callable[[int, int], None]


@dataclass(frozen=True, slots=True)
class Row:
    """One result with its role in the analysis.

    Parameters
    ----------
    role : {"primary", "supporting", "sensitivity", "supplementary"}
        Primary: planned contrasts. Supporting: the overall test. Sensitivity: the same
        estimand under other assumptions. Supplementary: another estimand.
    label : str
        What is compared, in words.
    result : TestResult
        The result.
    p_adjusted : float or None
        p value adjusted over its family, where it belongs to one.
    adjust : str or None
        The adjustment.
    """

    role: Role
    label: str
    result: TestResult
    p_adjusted: float | None = None
    adjust: str | None = None

    def to_dict(self) -> dict[str, Any]:
        """Return plain values."""
        return {
            "role": self.role,
            "label": self.label,
            "adjust": self.adjust,
            "p_adjusted": plain(self.p_adjusted),
            "result": self.result.to_dict(),
        }


@dataclass(frozen=True, slots=True)
class Inclusion:
    """Whether one subject is in one analysis, and why not."""

    analysis: str
    subject: str
    included: bool
    reason: str


@dataclass(frozen=True, slots=True)
class Skip:
    """An analysis that was asked for and could not be made."""

    analysis: str
    reason: str


@dataclass(frozen=True)
class Analysis:
    """Everything that one plan says about one table.

    Parameters
    ----------
    plan : Plan
        What was fixed beforehand.
    table : OccasionTable
        The data on the raw scale, subjects in natural order.
    scale : {"raw", "log"}
        Scale of the planned analysis.
    attainable : Attainable
        The smallest p values that the family could reach.
    primary : FollowUps
        The planned contrasts with their estimates and intervals.
    omnibus : TestResult or None
        The overall test that supports them.
    supplementary, beside : tuple of Row
        Results about other estimands; the parametric results on both scales.
    effects : tuple of Effect
        Effect sizes of the planned contrasts and of the overall test.
    summary : tuple of OccasionSummary
        What was measured at each occasion.
    inclusions : tuple of Inclusion
        Every subject in every analysis.
    skips : tuple of Skip
        Analyses that could not be made, with the reason.
    ledger : Ledger
        What was done to the cells.
    notes : tuple of Note
        What a reader must know of the analysis as a whole.
    record : mapping
        File digest, versions, platform and seed: what differs between two runs that agree.
    """

    plan: Plan
    table: OccasionTable
    scale: Scale
    attainable: Attainable
    primary: FollowUps
    omnibus: TestResult | None
    supplementary: tuple[Row, ...]
    beside: tuple[Row, ...]
    effects: tuple[Effect, ...]
    summary: tuple[OccasionSummary, ...]
    inclusions: tuple[Inclusion, ...]
    skips: tuple[Skip, ...]
    ledger: Ledger
    notes: tuple[Note, ...]
    record: Mapping[str, Any] = field(default_factory=dict)

    def rows(self) -> tuple[Row, ...]:
        """Return all results as rows with their roles: primary first, parametric last."""
        primary = tuple(
            Row("primary", c.label, c.result, c.p_adjusted, self.primary.adjust)
            for c in self.primary
        )
        overall = () if self.omnibus is None else (Row("supporting", _ALL, self.omnibus),)
        return (*primary, *overall, *self.supplementary, *self.beside)

    def to_dict(self) -> dict[str, Any]:
        """Return the versioned document of the report as plain values."""
        from robustrm.report.document import document

        return document(self)

    def write_report(self, folder: str | Path) -> Path:
        """Write the whole report into `folder`, which must not hold another report.

        Parameters
        ----------
        folder : str or Path
            Output folder; it appears whole or not at all.

        Returns
        -------
        Path
            The folder.
        """
        from robustrm.report.folder import write_report

        return write_report(self, folder)

    def __str__(self) -> str:
        overall = [] if self.omnibus is None else [str(self.omnibus)]
        return "\n\n".join([str(self.attainable), str(self.primary), *overall])


_ALL = "all occasions"


def analyze(
    table: OccasionTable,
    plan: Plan | None = None,
    *,
    rng: np.random.Generator | int | None = None,
    progress: Progress | None = None,
) -> Analysis:
    """Analyze one marker as planned, with the parametric result beside.

    Parameters
    ----------
    table : OccasionTable
        The data, on the raw scale.
    plan : Plan, optional
        What was fixed beforehand; the defaults if not given.
    rng : Generator or int, optional
        Root of the random streams of Monte Carlo nulls. Default: the plan's seed, else fresh
        entropy, which is recorded.
    progress : callable, optional
        Called with (done, total) after each step.

    Returns
    -------
    Analysis
        All results with their roles; ``write_report`` makes the report.

    Raises
    ------
    DataError
        When the scale is logarithmic and a value is zero or negative.
    ArgumentError
        When the plan names an occasion that the table does not have.

    Notes
    -----
    The scale follows the plan: a marker declared a concentration is compared as ratios, on
    logs. Nothing in the data changes the scale or the tests. The planned contrasts are
    computed and shown whatever the overall test says.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[91, 72, 60], [40, 31, 25], [120, 125, 80], [66, 50, 59], [33, 21, 20], [75, 60, 44]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ...     marker="ferritin",
    ...     unit="µg/L",
    ... )
    >>> analysis = analyze(table)
    >>> [round(c.estimate.value, 2) for c in analysis.primary]
    [0.78, 0.64]
    >>> analysis.attainable.smallest_p_adjusted, analysis.attainable.reachable
    (0.0625, False)
    """
    settled = plan if plan is not None else Plan()
    root = _root(settled, rng)
    raw = table.in_natural_order()
    scaled = raw.on_scale(settled.used_scale)
    steps = _Steps(progress, total=6)

    primary = _primary(scaled, settled, root)
    steps.done()
    omnibus, skipped = _omnibus(scaled, settled, root)
    steps.done()
    beside, skipped_beside = _beside(raw, settled)
    steps.done()
    effects = effect_sizes(scaled, primary, omnibus)
    steps.done()
    summary = summarize(raw, substitute=settled.substitute)
    steps.done()
    analysis = Analysis(
        plan=settled,
        table=raw,
        scale=settled.used_scale,
        attainable=attainable_of(primary),
        primary=primary,
        omnibus=omnibus,
        supplementary=(),
        beside=beside,
        effects=effects,
        summary=summary,
        inclusions=(),
        skips=(*skipped, *skipped_beside),
        ledger=scaled.ledger,
        notes=_notes(raw, settled, summary),
        record=_record(raw, settled, root),
    )
    steps.done()
    return dataclasses.replace(analysis, inclusions=_inclusions(analysis))


class _Steps:
    """Counts finished steps for a progress callback."""

    def __init__(self, progress: Progress | None, total: int) -> None:
        self.progress, self.total, self.count = progress, total, 0

    def done(self) -> None:
        self.count += 1
        if self.progress is not None:
            self.progress(self.count, self.total)


def _root(plan: Plan, rng: np.random.Generator | int | None) -> int:
    """Return the 128-bit root of all streams, in the documented order of precedence."""
    if isinstance(rng, np.random.Generator):
        high, low = rng.integers(2**63, size=2).tolist()
        return int(high) << 64 | int(low)
    if rng is not None:
        return int(rng)
    if plan.seed is not None:
        return plan.seed
    entropy = np.random.SeedSequence().entropy
    return entropy if isinstance(entropy, int) else 0


def stream(root: int, name: str, block: int = 0) -> np.random.SeedSequence:
    """Return the random stream of one method: adding a method never changes another's."""
    return np.random.SeedSequence(root, spawn_key=(crc32(name.encode()), block))


def _primary(table: OccasionTable, plan: Plan, root: int) -> FollowUps:
    entry = registered(plan.pair)
    offered = {
        "alternative": plan.alternative,
        "zeros": plan.zeros,
        "substitute": plan.substitute,
        "draws": plan.stages,
        "thresholds": _thresholds(table, plan),
    }
    return follow_up(
        table,
        method=plan.pair,
        family=plan.contrasts,
        adjust=plan.adjust,
        intervals=plan.intervals,
        level=plan.level,
        rng=stream(root, plan.pair),
        options={name: value for name, value in offered.items() if name in entry.options},
    )


def _thresholds(table: OccasionTable, plan: Plan) -> tuple[float, ...]:
    """Return the levels that a p value of the family is compared with, step-down ones too."""
    k = table.n_occasions
    sizes = {"first": k - 1, "successive": k - 1, "all": k * (k - 1) // 2}
    m = sizes[plan.contrasts] if isinstance(plan.contrasts, str) else len(plan.contrasts)
    alpha = 1 - plan.level
    return tuple(alpha / i for i in range(1, m + 1))


def _omnibus(
    table: OccasionTable, plan: Plan, root: int
) -> tuple[TestResult | None, tuple[Skip, ...]]:
    entry = registered(plan.omnibus)
    offered = {
        "draws": plan.stages,
        "thresholds": (1 - plan.level,),
        "rng": stream(root, plan.omnibus),
        "substitute": plan.substitute,
    }
    options = {name: value for name, value in offered.items() if name in entry.options}
    try:
        return entry.load()(table, **options), ()
    except TooFewError as error:
        return None, (Skip(f"{entry.title} ({table.scale} scale)", str(error)),)


def _beside(raw: OccasionTable, plan: Plan) -> tuple[tuple[Row, ...], tuple[Skip, ...]]:
    rows: list[Row] = []
    skips: list[Skip] = []
    for scale in ("raw", "log"):
        role: Role = "sensitivity" if scale == plan.used_scale else "supplementary"
        try:
            table = raw.on_scale(scale)
            rows.append(_parametric_omnibus(table, role, plan))
            rows.extend(_parametric_pairs(table, role, plan))
        except (TooFewError, DataError) as error:
            reason = error.problems[0].message if isinstance(error, DataError) else str(error)
            skips.append(Skip(f"parametric results ({scale} scale)", reason))
    return tuple(rows), tuple(skips)


def _parametric_omnibus(table: OccasionTable, role: Role, plan: Plan) -> Row:
    return Row(role, _ALL, registered("anova").load()(table, substitute=plan.substitute))


def _parametric_pairs(table: OccasionTable, role: Role, plan: Plan) -> list[Row]:
    family = follow_up(
        table,
        method="paired_t",
        family=plan.contrasts,
        adjust="bonferroni",
        intervals=plan.intervals,
        level=plan.level,
        options={"alternative": plan.alternative, "substitute": plan.substitute},
    )
    return [Row(role, c.label, c.result, c.p_adjusted, family.adjust) for c in family]


def _inclusions(analysis: Analysis) -> tuple[Inclusion, ...]:
    """Return the status of every subject in every analysis; included ones add up to its n."""
    table = analysis.table
    result: list[Inclusion] = []
    for row in analysis.rows():
        name = f"{registered(row.result.method).title}, {row.result.scale} scale: {row.label}"
        used = set(row.result.subjects)
        result.extend(
            Inclusion(name, subject, subject in used, "" if subject in used else table.reason(i))
            for i, subject in enumerate(table.subjects)
        )
    return tuple(result)


def _notes(
    table: OccasionTable, plan: Plan, summary: Sequence[OccasionSummary]
) -> tuple[Note, ...]:
    candidates = (
        _exploratory_note(plan),
        _design_note(plan),
        _missing_note(table),
        _limit_note(table, plan),
        _spread_note(summary),
    )
    return (*table.notes, *(note for note in candidates if note is not None))


def _exploratory_note(plan: Plan) -> Note | None:
    if plan.purpose != "exploratory":
        return None
    return Note(
        "exploratory",
        "The study is declared exploratory.",
        "Estimates and intervals come first; p values are exploratory.",
        "A change of this size needs confirming in a study planned for it.",
    )


def _design_note(plan: Plan) -> Note | None:
    if plan.design != "single-arm":
        return None
    return Note(
        "single arm",
        "The study had no control group.",
        "A change over time cannot be attributed to any intervention.",
        "Selection of people on a high value, season, handling of samples and the passing of "
        "time can move a marker as well.",
    )


def _missing_note(table: OccasionTable) -> Note | None:
    incomplete = np.flatnonzero(table.missing.any(axis=1)).tolist()
    if not incomplete:
        return None
    who = listing([table.subjects[i] for i in incomplete])
    verb = "lacks" if len(incomplete) == 1 else "lack"
    return Note(
        "missing occasions",
        f"{len(incomplete)} of {counted(table.n_subjects, 'subject')} {verb} an occasion ({who}).",
        "They are not in the overall tests; each comparison uses all who have both occasions.",
        "Ask whether the reason for the gap has to do with the value that is missing.",
    )


def _limit_note(table: OccasionTable, plan: Plan) -> Note | None:
    below, above = int(table.below.sum()), int(table.above.sum())
    if not below + above:
        return None
    shares = [
        f"{table.occasions[j]} {percent(float(share))}"
        for j, share in enumerate(table.censored.sum(axis=0) / (~table.missing).sum(axis=0))
        if share > 0
    ]
    counts = f"{counted(below, 'value')} below and {above} above a limit ({listing(shares)})."
    return Note(
        "limits",
        counts,
        f"Ranked beyond all measured values; below the limit entered as "
        f"{_SUBSTITUTE_WORDS[plan.substitute]} where a size is needed.",
        "The range over other substitutes is given with each estimate that depends on it.",
    )


_SUBSTITUTE_WORDS = {
    "half": "half the limit",
    "root2": "the limit divided by √2",
    "limit": "the limit",
}


def _spread_note(summary: Sequence[OccasionSummary]) -> Note | None:
    wide = [s for s in summary if s.mean is not None and s.sd is not None and s.sd > s.mean > 0]
    if not wide:
        return None
    shown = listing([f"{s.occasion} ({number(s.sd)} and {number(s.mean)})" for s in wide])
    return Note(
        "sd exceeds mean",
        f"The SD exceeds the mean at {shown}.",
        "Mean (SD) is then not a usable summary.",
        "Report the median with quartiles, or the geometric mean with its factor.",
    )


def _record(table: OccasionTable, plan: Plan, root: int) -> dict[str, Any]:
    versions = {name: importlib.metadata.version(name) for name in ("numpy", "scipy", "pandas")}
    return {
        "source": plain(dict(table.source)),
        "plan_digest": plan.digest,
        "seed": str(root),
        "versions": {
            "robustrm": importlib.metadata.version("robustrm"),
            "python": platform.python_version(),
            **versions,
        },
        "platform": platform.platform(),
    }
