"""Diagnostics and advice: the view goes to the rule, the rule's choices go into a plan."""

from __future__ import annotations

import dataclasses
from collections.abc import Collection, Iterator
from dataclasses import dataclass
from typing import Any

from robustrm._checks import check_count
from robustrm._format import counted, fixed, number, percent
from robustrm.advice.blind import BlindFigures, blind_figures
from robustrm.advice.describe import Description, describe
from robustrm.advice.record import record_sentence
from robustrm.advice.rule import ALTERNATIVES, RULES, Facts, decided
from robustrm.advice.view import BlindView, blind_view, check_raw
from robustrm.errors import ArgumentError
from robustrm.methods.attainable import attainable_signed_rank
from robustrm.plan import Plan
from robustrm.results import Note, plain
from robustrm.table import OccasionTable

FEW_SUBJECTS = 6


@dataclass(frozen=True, slots=True)
class Diagnostics:
    """What the data look like, in two parts that are kept apart.

    Parameters
    ----------
    blind : BlindFigures
        Unchanged when a subject's values change places: what advice may use.
    described : Description
        About occasions and differences: shown, not used to choose.
    """

    blind: BlindFigures
    described: Description

    def to_dict(self) -> dict[str, Any]:
        """Return plain values."""
        return {"blind": self.blind.to_dict(), "described": self.described.to_dict()}


@dataclass(frozen=True, slots=True)
class Advice:
    """A plan with the reasons for it.

    Parameters
    ----------
    plan : Plan
        The advised plan: what the given one leaves open is filled in.
    reasons : tuple of str
        Why, one sentence a choice, with the figures behind it.
    alternatives : tuple of str
        What else could be planned for the same question.
    cautions : tuple of Note
        What the advice cannot take away.
    record : str
        What the advised test found in the simulated data most like these.
    n_subjects, n_occasions : int
        The design.
    figures : BlindFigures or None
        The figures it was made from; None from the design alone.
    """

    plan: Plan
    reasons: tuple[str, ...]
    alternatives: tuple[str, ...]
    cautions: tuple[Note, ...]
    record: str
    n_subjects: int
    n_occasions: int
    figures: BlindFigures | None

    @property
    def facts(self) -> Facts:
        """What the rule decided by, with the advised plan."""
        return Facts(self.plan, self.figures, self.n_subjects, self.n_occasions)

    def to_dict(self) -> dict[str, Any]:
        """Return plain values."""
        return {
            "plan": self.plan.to_dict(),
            **{
                f.name: plain(getattr(self, f.name))
                for f in dataclasses.fields(self)
                if f.name != "plan"
            },
        }

    def __str__(self) -> str:
        blocks = {
            "Advised": self.reasons,
            "Measured beforehand": (self.record,),
            "Could be planned instead": self.alternatives,
            "Cautions": tuple(map(str, self.cautions)),
        }
        return "\n\n".join(
            "\n".join([heading, *(f"- {line}" for line in lines)])
            for heading, lines in blocks.items()
            if lines
        )


def diagnose(table: OccasionTable, *, substitute: str = "half") -> Diagnostics:
    """Describe a table: what advice may use, and what is only shown.

    Parameters
    ----------
    table : OccasionTable
        On the raw scale.
    substitute : {"half", "root2", "limit"}, default "half"
        What enters the descriptive part for a value below the limit.

    Returns
    -------
    Diagnostics
        ``blind``: slope of spread on level, tail weight, tail balance, ties, shares at a limit,
        missing cells. ``described``: each occasion, each difference, normality of residuals,
        sphericity.

    Notes
    -----
    No P value of a diagnostic chooses anything. A test chosen after a test of normality has
    another level than the one that is printed beside it, among the data sets where it is chosen.

    References
    ----------
    .. [1] Rochon, J., Gondan, M. and Kieser, M. (2012). To test or not to test: preliminary
       assessment of normality when comparing two independent samples. BMC Medical Research
       Methodology 12, 81.
    .. [2] Tukey, J. W. (1977). Exploratory Data Analysis. Addison-Wesley.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[91, 72, 60], [40, 31, 25], [120, 125, 80], [66, 50, 59], [33, 21, 20], [75, 60, 44]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ... )
    >>> found = diagnose(table)
    >>> round(found.blind.slope, 2), found.blind.share_tied
    (0.73, 0.0)
    """
    check_raw(table)
    return Diagnostics(blind_figures(blind_view(table)), describe(table, substitute=substitute))


def advise(
    table: OccasionTable | None = None,
    *,
    n_subjects: int | None = None,
    n_occasions: int | None = None,
    plan: Plan | None = None,
    keep: Collection[str] = (),
) -> Advice:
    """Advise a plan, from the design alone or from data without looking at the occasions.

    Parameters
    ----------
    table : OccasionTable, optional
        On the raw scale. The advice sees each subject's values sorted, and which cells are
        missing; it does not see which value belongs to which occasion.
    n_subjects, n_occasions : int, optional
        The design, before there are data. Not together with `table`.
    plan : Plan, optional
        What is declared already, such as the kind of marker or the scale. A declared scale is
        never changed.
    keep : collection of str, optional
        Keys of `plan` that are declared and stay as they are, such as ``{"omnibus"}``.

    Returns
    -------
    Advice
        ``plan``, ``reasons``, ``alternatives``, ``cautions``.

    Raises
    ------
    ArgumentError
        When neither a table nor a design is given, or both.

    Notes
    -----
    The advised overall test is an exact permutation test. Rearranging a subject's values leaves
    the advice as it is, so on every set of rearranged tables one fixed test is used and its level
    holds: the argument of Hogg, Fisher & Randles, within subjects [1]_. The comparisons keep their
    level for the same reason when the two occasions of a pair are swapped. Not protected: coverage
    of intervals, the parametric rows and the whole-row sign flip, when the scale was chosen by
    data. The first rule takes the scale from the kind of marker, not from data.

    References
    ----------
    .. [1] Hogg, R. V., Fisher, D. M. and Randles, R. H. (1975). A two-sample adaptive
       distribution-free test. Journal of the American Statistical Association 70, 656-661.

    Examples
    --------
    >>> advice = advise(n_subjects=6, n_occasions=4)
    >>> advice.plan.omnibus, advice.plan.scale
    ('aligned_ranks', 'log')
    >>> advice.cautions[0].code
    'attainable'
    """
    settled = plan if plan is not None else Plan()
    if table is None:
        facts = Facts(settled, None, *_design(n_subjects, n_occasions))
    else:
        check_raw(table)
        if n_subjects is not None or n_occasions is not None:
            raise ArgumentError(
                "`n_subjects` and `n_occasions` are for a design without data, got a table too. "
                "Leave one of them out."
            )
        facts = _facts(settled, blind_view(table))
    lines = decided(facts, keep)
    advised = settled.replace(**{k: v for line in lines for k, v in line.chooses.items()})
    facts = dataclasses.replace(facts, plan=advised)
    return Advice(
        plan=advised,
        reasons=(
            *(line.because(facts) for line in lines),
            *(f"{name}: {getattr(advised, name)}, as declared." for name in _kept(keep)),
        ),
        alternatives=tuple(
            f"{chosen}: {ALTERNATIVES[chosen]}."
            for chosen in (advised.omnibus, advised.pair)
            if chosen in ALTERNATIVES
        ),
        cautions=tuple(_cautions(facts)),
        record=record_sentence(facts),
        n_subjects=facts.n_subjects,
        n_occasions=facts.n_occasions,
        figures=facts.figures,
    )


def _design(n_subjects: int | None, n_occasions: int | None) -> tuple[int, int]:
    if n_subjects is None or n_occasions is None:
        raise ArgumentError(
            "`advise` needs a table, or `n_subjects` and `n_occasions` of the design, got neither."
        )
    return (
        check_count("n_subjects", n_subjects),
        check_count("n_occasions", n_occasions, least=2),
    )


def _kept(keep: Collection[str]) -> list[str]:
    """Return the keys that the rule would choose and may not; a declared scale has its own line."""
    chosen = dict.fromkeys(key for rule in RULES for key in rule.chooses)
    return [key for key in chosen if key in keep and key != "scale"]


def _facts(plan: Plan, view: BlindView) -> Facts:
    figures = blind_figures(view)
    return Facts(plan, figures, figures.n_subjects, figures.n_occasions)


# ── cautions ──────────────────────────────────────────────────────────────────────────────


def _cautions(facts: Facts) -> Iterator[Note]:
    plan, figures = facts.plan, facts.figures
    yield from _attainable_caution(facts)
    yield Note(
        "exchangeability",
        "The overall test asks whether a subject's occasions are exchangeable.",
        "Unequal spread or serial correlation can make it reject where centers are equal.",
        "Read it with the estimates.",
    )
    if plan.in_time:
        yield Note(
            "ordered occasions",
            "Occasions in time are rarely exchangeable.",
            "The whole-row sign flip does not ask for it.",
            "From 8 complete subjects it stands beside: look at both.",
        )
    if facts.n_subjects < FEW_SUBJECTS:
        yield Note(
            "few subjects",
            f"{counted(facts.n_subjects, 'subject')} do not allow a 95% interval of the "
            "Hodges-Lehmann estimate.",
            "Below 6 subjects a study can describe, and test little.",
        )
    if figures is not None:
        yield from _data_cautions(facts, figures)


def _attainable_caution(facts: Facts) -> Iterator[Note]:
    plan = facts.plan
    family = {"first": facts.n_occasions - 1, "successive": facts.n_occasions - 1}
    family["all"] = facts.n_occasions * (facts.n_occasions - 1) // 2
    m = family[plan.contrasts] if isinstance(plan.contrasts, str) else len(plan.contrasts)
    if plan.pair not in ("signed_rank", "sign_test", "sign_flip") or plan.adjust == "closed":
        return
    reach = attainable_signed_rank(
        facts.n_subjects, m, adjust=plan.adjust, sides=plan.sides, alpha=plan.alpha
    )
    yield Note("attainable", str(reach))


def _data_cautions(facts: Facts, figures: BlindFigures) -> Iterator[Note]:
    plan = facts.plan
    if plan.used_scale == "log" and figures.lowest <= 0:
        yield Note(
            "not positive",
            f"The smallest value is {number(figures.lowest)}, which has no logarithm.",
            "The log scale cannot be used as it is.",
            "Declare a limit if it means below a limit, or the raw scale if it is a true zero.",
        )
    other = _other_scale(plan.used_scale, figures.slope)
    if other is not None:
        yield Note(
            "spread and level",
            f"The spread within subjects grows as the level to the power "
            f"{fixed(figures.slope, 2)}.",
            f"That speaks for the {other} scale; the plan keeps the {plan.used_scale} scale.",
            "Changing the scale changes the question: decide it beforehand, not by the data.",
        )
    if figures.share_at_limit > 0:
        yield Note(
            "values at a limit",
            f"{percent(figures.share_at_limit)} of the values lie beyond a limit.",
            "They are ranked as equal; sizes of change take a substitute.",
            "Look at the range over the substitutes.",
        )


def _other_scale(scale: str, slope: float) -> str | None:
    """Return the scale that the slope speaks for, where it clearly is not the one used."""
    if scale == "log" and slope < 0.25:
        return "raw"
    return "log" if scale == "raw" and slope > 0.75 else None
