"""The specification grid: every analysis that was declared reasonable, tested together."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from robustrm.analysis import stream
from robustrm.errors import ArgumentError, TooFewError
from robustrm.kernels.binomial import clopper_pearson
from robustrm.kernels.null.joint import joint_test
from robustrm.methods.follow_up import declared_pairs
from robustrm.plan import GridChoices, Plan
from robustrm.results import Note, plain
from robustrm.sensitivity_analysis.branches import Branch, branches, merged_words
from robustrm.sensitivity_analysis.frames import records
from robustrm.sensitivity_analysis.grid_estimates import shift
from robustrm.sensitivity_analysis.grid_sentences import collapse_note, sentences
from robustrm.sensitivity_analysis.grid_tables import Sources, sources
from robustrm.sensitivity_analysis.specifications import Specified, specified, statistics
from robustrm.table import OccasionTable
from robustrm.ties import Floats

if TYPE_CHECKING:
    import pandas as pd

Progress = Callable[[int, int], None]
Tables = OccasionTable | Mapping[str, OccasionTable]

INTERVAL_LEVEL = 0.99


@dataclass(frozen=True, eq=False)
class Grid:
    """Every specification with its p value, and the one p value of all of them together.

    Parameters
    ----------
    frame : DataFrame
        One unrounded row a specification, in the declared order: its choices (``replicates``,
        ``scale``, ``test``, ``trim``, ``substitute``, ``missing``, ``outliers``; what coincides is
        joined by commas), ``branches`` (declared branches that it stands for), ``planned``
        (whether it is the overall test of the plan), ``statistic_name``, ``statistic``,
        ``p``, ``n``, ``n_pulled_in``, and of one planned contrast ``estimand``,
        ``estimate``, ``low``, ``high``, ``level``, ``n_estimate``, ``role``, ``estimate_scale``.
    contrast : tuple of str
        Occasions (first, second) of that contrast: the last one planned.
    grid_p : float
        Joint p value.
    grid_p_interval : tuple of float
        99% Monte Carlo interval of it.
    median_p : float
        Median p value over the specifications, each counted once.
    share_below : float
        Share of the specifications with a p value at or below the level; it has no p of its own.
    alpha : float
        That level.
    draws : int
        Rearranged tables.
    declared : int
        Branches that the plan declares, coinciding ones and those left out included.
    choices : GridChoices
        What the plan declares.
    unit : str or None
        Unit of differences.
    sentences : tuple of str
        What was found, in words with the numbers.
    notes : tuple of Note
        What a reader must know.
    """

    frame: pd.DataFrame
    contrast: tuple[str, str]
    grid_p: float
    grid_p_interval: tuple[float, float]
    median_p: float
    share_below: float
    alpha: float
    draws: int
    declared: int
    choices: GridChoices
    unit: str | None = None
    sentences: tuple[str, ...] = ()
    notes: tuple[Note, ...] = field(default=())

    def to_dict(self) -> dict[str, Any]:
        """Return plain values that any JSON writer takes."""
        named = ("contrast", "grid_p", "grid_p_interval", "median_p", "share_below", "alpha",
                 "draws", "declared", "unit", "sentences", "notes")  # fmt: skip
        result: dict[str, Any] = {name: plain(getattr(self, name)) for name in named}
        result["choices"] = self.choices.to_dict()
        result["frame"] = records(self.frame)
        return result


def specification_grid(
    table: Tables,
    plan: Plan | None = None,
    *,
    root: int,
    progress: Progress | None = None,
) -> Grid:
    """Test all specifications that a plan declares by one permutation test.

    Parameters
    ----------
    table : OccasionTable, or mapping of replicate rule to OccasionTable
        Raw scale. A mapping ``{"mean": one, "geometric": other}`` holds the same file read with
        each rule that ``plan.grid.replicates`` declares.
    plan : Plan, optional
        Its key `grid` declares the choices; default: the usual plan.
    root : int
        Root of the random streams. The rearrangements are those of one stream.
    progress : callable, optional
        Called with (tables done, tables).

    Returns
    -------
    Grid

    Raises
    ------
    ArgumentError
        When the tables are not those of the declared replicate rules.
    TooFewError
        When no declared branch can be computed.

    Notes
    -----
    Within each subject the cells, value and limit flag together, are permuted over the occasions
    that the subject has; the pattern of missing visits stays. The B + 1 tables, the observed one
    first, are the same for all specifications. p_sb is the share of the tables with a statistic s
    at least as large as in table b, m_b the median of p_sb over the specifications, equally
    weighted, and the joint p value the share of the tables with m_b ≤ m_0. Whatever depends on the
    data (limits, substitutes, outliers, ranks) is part of the statistic, in every table alike.

    **The null hypothesis is that of exchangeable occasions**, for all specifications at once. A
    small joint p does not say which specification is right, and serial correlation or unequal
    spread can make it small as well. The level holds for any grid that was declared beforehand
    (`docs/evidence/joint.md`).

    The Monte Carlo interval counts the B medians as independent draws around m_0. They share the
    tables that their p values are counted in, so it is approximate.

    Statistics that have a reference distribution of their own (`trimmed_anova`, `rank_anova`,
    `hotelling`) are referred to the rearranged tables here, so that p differs from that of the
    test of the same name.

    References
    ----------
    .. [1] Simonsohn, U., Simmons, J. P. and Nelson, L. D. (2020). Specification curve analysis.
       Nature Human Behaviour 4, 1208-1214.
    .. [2] Phipson, B. and Smyth, G. K. (2010). Permutation P-values should never be zero.
       Statistical Applications in Genetics and Molecular Biology 9, 39.

    Examples
    --------
    >>> table = OccasionTable.from_array(
    ...     [[91, 72, 60], [40, 31, 25], [120, 125, 80], [66, 50, 59], [33, 21, 20], [75, 60, 44]],
    ...     occasions=["week 0", "week 6", "week 12"],
    ...     marker="ferritin",
    ...     unit="µg/L",
    ... )
    >>> found = specification_grid(table, root=1)
    >>> found.declared, len(found.frame), found.draws
    (156, 18, 1999)
    >>> round(found.median_p, 3), found.grid_p < 0.05
    (0.01, True)
    """
    settled = plan or Plan()
    tables = _by_rule(table, settled.grid)
    any_table = next(iter(tables.values()))
    pair = declared_pairs(any_table, settled.contrasts, "contrasts")[-1]
    source = sources(tables)
    declared = tuple(branches(settled.grid, tuple(tables)))
    found, left_out = specified(source, declared, _is_planned(settled))
    if not found:
        raise TooFewError(
            "No declared specification can be computed: "
            + " ".join(note.fact for note in (*source.notes, *left_out))
        )
    joint = joint_test(
        statistics(
            source,
            [each.what for each in found],
            settled.grid.draws,
            np.random.default_rng(stream(root, "grid")),
            progress=progress,
        )
    )
    low, high = clopper_pearson(joint.hits, joint.draws, INTERVAL_LEVEL)
    grid = Grid(
        frame=_frame(source, found, joint.p_values, settled, pair),
        contrast=pair,
        grid_p=joint.p_value,
        grid_p_interval=(float(low), float(high)),
        median_p=joint.median,
        share_below=float(np.mean(joint.p_values <= settled.alpha)),
        alpha=settled.alpha,
        draws=joint.draws,
        declared=len(declared),
        choices=settled.grid,
        unit=any_table.unit,
    )
    notes = (*source.notes, *left_out, *collapse_note(found, len(declared)))
    return _with_words(grid, notes)


def _with_words(grid: Grid, notes: tuple[Note, ...]) -> Grid:
    values = {name: getattr(grid, name) for name in grid.__dataclass_fields__}
    told = sentences(
        grid.frame, grid_p=grid.grid_p, interval=grid.grid_p_interval, median=grid.median_p,
        alpha=grid.alpha, draws=grid.draws,
    )  # fmt: skip
    return Grid(**{**values, "sentences": told, "notes": notes})


def _by_rule(table: Tables, choices: GridChoices) -> dict[str | None, OccasionTable]:
    """Return the tables by replicate rule, None for one that is taken as it was read."""
    rules = choices.replicates
    if isinstance(table, OccasionTable):
        if len(rules) > 1:
            raise ArgumentError(
                f"`table` must hold one table for each of the replicate rules {', '.join(rules)} "
                "of the plan's grid, got a single table. Read the file with each rule and pass "
                "{'mean': ..., 'geometric': ...}."
            )
        return {rules[0] if rules else None: table}
    if set(table) != set(rules):
        raise ArgumentError(
            f"`table` must hold the replicate rules that the plan's grid declares "
            f"({', '.join(rules) or 'none'}), got {', '.join(map(str, table))}."
        )
    return {rule: table[rule] for rule in rules}


def _is_planned(plan: Plan) -> Callable[[Branch], bool]:
    """Return whether a branch is the overall test of the plan."""
    trims = {"winsorized_permutation": plan.winsorize, "trimmed_anova": plan.trim}

    def planned(branch: Branch) -> bool:
        return (
            branch.test == plan.omnibus
            and branch.scale == plan.used_scale
            and branch.trim == trims.get(branch.test)
            and branch.substitute == plan.substitute
            and (branch.missing, branch.outliers) == ("complete", "kept")
        )

    return planned


def _frame(
    source: Sources,
    found: tuple[Specified, ...],
    p_values: Floats,
    plan: Plan,
    pair: tuple[str, str],
) -> pd.DataFrame:
    import pandas as pd

    planned = _is_planned(plan)
    rows = []
    for each, p in zip(found, p_values.tolist(), strict=True):
        standing = each.branches[0]
        rows.append(
            {
                **merged_words(each.branches),
                "branches": len(each.branches),
                "planned": planned(standing),
                "statistic_name": each.what.symbol,
                "statistic": each.what.statistic,
                "p": p,
                "n": each.what.n_subjects,
                "n_pulled_in": each.what.n_pulled,
                **shift(source, standing, plan, pair).fields(),
                "estimate_scale": standing.scale,
            }
        )
    return pd.DataFrame(rows)
