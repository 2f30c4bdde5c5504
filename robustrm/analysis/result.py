"""What an analysis holds: every result with its role, and every subject's place in it."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from robustrm._format import Style
from robustrm.advice import Advice
from robustrm.ledger import Ledger
from robustrm.methods.attainable import Attainable
from robustrm.methods.effects import Effect
from robustrm.methods.null_distribution import NullDistribution
from robustrm.methods.registry import method as registered
from robustrm.methods.summary import OccasionSummary
from robustrm.plan import Plan
from robustrm.results import FollowUps, Note, Role, Scale, TestResult, plain
from robustrm.table import OccasionTable

ALL_OCCASIONS = "all occasions"


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

    @property
    def title(self) -> str:
        """Usual name of the method; one statistic may stand against its bootstrap as well."""
        title = registered(self.result.method).title
        return f"{title}, bootstrap" if self.result.null == "bootstrap" else title

    def to_dict(self) -> dict[str, Any]:
        """Return plain values."""
        return {
            "role": self.role,
            "label": self.label,
            "adjust": self.adjust,
            "p_adjusted": plain(self.p_adjusted),
            "result": self.result.to_dict(),
        }


def references(rows: Iterable[Row]) -> dict[str, Row]:
    """Return, for each thing compared, the planned row that others stand beside."""
    found: dict[str, Row] = {}
    for row in rows:
        found.setdefault(row.label, row)
    return found


def apart(result: TestResult, reference: TestResult) -> list[str]:
    """Say in what a result differs from the planned one, so that it is not read as its equal."""
    differs = {
        "n": result.subjects != reference.subjects or result.n_subjects != reference.n_subjects,
        "scale": result.scale != reference.scale,
        "estimand": result.estimand != reference.estimand,
    }
    return [name for name, different in differs.items() if different]


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
    advice : Advice or None
        The advice that the plan came from, where it was not given.
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
        Companions of the overall test and results about other estimands; the parametric
        results on both scales.
    null_distribution : NullDistribution or None
        Null distribution of the overall test, where it is one of arrangements.
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
    advice: Advice | None
    table: OccasionTable
    scale: Scale
    attainable: Attainable
    primary: FollowUps
    omnibus: TestResult | None
    supplementary: tuple[Row, ...]
    beside: tuple[Row, ...]
    null_distribution: NullDistribution | None
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
        overall = () if self.omnibus is None else (Row("supporting", ALL_OCCASIONS, self.omnibus),)
        return (*primary, *overall, *self.supplementary, *self.beside)

    def to_dict(self) -> dict[str, Any]:
        """Return the versioned document of the report as plain values."""
        from robustrm.report.document import document

        return document(self)

    def write_report(self, folder: str | Path, *, style: Style = "medical") -> Path:
        """Write the whole report into `folder`, which an earlier report there gives way to.

        Parameters
        ----------
        folder : str or Path
            Output folder; it appears whole or not at all.
        style : {"medical", "apa"}, default "medical"
            How p values are written.

        Returns
        -------
        Path
            The folder.
        """
        from robustrm.report.folder import write_report

        return write_report(self, folder, style=style)

    def __str__(self) -> str:
        overall = [] if self.omnibus is None else [str(self.omnibus)]
        return "\n\n".join([str(self.attainable), str(self.primary), *overall])
