"""sample_size: from what is assumed to what the study can show."""

from __future__ import annotations

import math
import os
from collections.abc import Iterable, Sequence
from concurrent.futures import Executor
from typing import TYPE_CHECKING, Any

import numpy as np

from robustrm._checks import check_count, check_level
from robustrm.errors import ArgumentError
from robustrm.kernels import walsh
from robustrm.kernels.binomial import clopper_pearson
from robustrm.methods.attainable import attainable_signed_rank
from robustrm.plan import Plan
from robustrm.sizing.pilot import PilotVariation, pilot_variation
from robustrm.sizing.result import Followed, Sizing, smallest_of, tests_of
from robustrm.sizing.simulating import SETS, SizingJob, simulated
from robustrm.sizing.study import Study, checked_study
from robustrm.sizing.wording import cautions, sentence
from robustrm.table import OccasionTable
from robustrm.trials.p_values import PERMUTED
from robustrm.work import Block, Progress, run_blocks

if TYPE_CHECKING:
    import pandas as pd

LEAST_SUBJECTS = 3
_MONTE_CARLO_LEVEL = 0.95
_STEPPED = ("signed_rank", "sign_test", "sign_flip")


def sample_size(
    *,
    cv_within: float | None = None,
    cv_between: float | None = None,
    ratios: Sequence[float] | float,
    n: Iterable[int] | int = range(6, 41),
    plan: Plan | None = None,
    target: float = 0.8,
    rng: np.random.Generator | int | None = None,
    n_occasions: int | None = None,
    distribution: str = "lognormal",
    limit: float = 0.0,
    dropout: float = 0.0,
    pilot: OccasionTable | None = None,
    datasets: int = 2000,
    executor: Executor | None = None,
    resume: str | os.PathLike[str] | None = None,
    progress: Progress | None = None,
) -> Sizing:
    """Say how many subjects a study needs, before there are data.

    Parameters
    ----------
    cv_within, cv_between : float, optional
        Coefficients of variation as fractions: of one person's single values, the assay
        included, and of the persons' levels. With `pilot` they are estimated where not given.
    ratios : sequence of float, or float
        Expected ratio of each occasion to the first, which is 1: ``[1, 0.8, 0.7]``. One number is
        the smallest important ratio, expected at the last occasion alone, where step-down
        adjustment has the least power.
    n : iterable of int, or int, default range(6, 41)
        Numbers of subjects who begin.
    plan : Plan, optional
        Planned tests, comparisons, level and scale; None takes the usual plan.
    target : float, default 0.8
        Power asked for.
    rng : Generator, int or None
        Root of all random streams; None takes the plan's seed, or draws one. It is recorded.
    n_occasions : int, optional
        Number of occasions, where `ratios` is one number and the plan names none.
    distribution : str, default "lognormal"
        ``"lognormal"`` or ``"log-t3"`` (heavy tails on the log scale); on a plan's raw scale also
        ``"normal"``, ``"t3"``, ``"contaminated"`` and ``"skewed"``, where the CVs are SDs and
        changes in units of the mean on the first occasion.
    limit : float, default 0.0
        Share of all values of a study below the limit of detection.
    dropout : float, default 0.0
        Share of the subjects who are lost by the last occasion. Each leaves at any later occasion
        with equal probability, whatever the values, and does not come back.
    pilot : OccasionTable, optional
        Earlier values of the marker, on the raw scale: its variation is used, its effect is not.
    datasets : int, default 2000
        Simulated studies of every number of subjects.
    executor : concurrent.futures.Executor, optional
        Where blocks of studies are simulated. The result does not depend on it.
    resume : path, optional
        Folder for finished blocks, from which an interrupted run goes on.
    progress : callable, optional
        Called with (blocks done, blocks).

    Returns
    -------
    Sizing
        ``.table`` (power), ``.smallest``, ``.attainable``, ``.widths``, ``.sentence``,
        ``.cautions``, ``.seed``.

    Raises
    ------
    ArgumentError
        When a value breaks its rule, such as a CV in percent.
    TooFewError
        When the pilot has too few complete subjects.

    Notes
    -----
    On the log scale a value is level · ratio · error, with SD √ln(1 + CV²) of the logarithm of
    level and error. The planned tests are those of the plan, by the exact law of the signed-rank
    and the sign test; tests by rearrangement take 999 random ones of each study. Beside stand the
    paired t test after Bonferroni and Holm, and the within-subject F with Greenhouse-Geisser's
    epsilon and uncorrected, on the scale of the plan. Overall tests use the complete subjects.

    Exact tests have a power that falls now and then as n grows. The smallest n is therefore one
    that reaches the target together with the next three numbers.

    Errors are independent between occasions, with one spread. Two numbers of subjects have streams
    of their own: what is found for one does not depend on which others are asked.

    References
    ----------
    .. [1] Clopper, C. J. and Pearson, E. S. (1934). The use of confidence or fiducial limits
       illustrated in the case of the binomial. Biometrika 26, 404-413.

    Examples
    --------
    >>> found = sample_size(
    ...     cv_within=0.42, cv_between=0.9, ratios=[1, 0.5], n=range(6, 13), rng=1, datasets=500
    ... )
    >>> found.smallest["signed_rank, Holm: occasion 2 vs occasion 1"]
    9
    >>> found.table.columns[:2].tolist(), len(found.cautions) > 3
    (['n', 'test'], True)
    """
    used = plan or Plan()
    check_level(target, "target")
    check_count("datasets", datasets, least=100)
    sizes = _checked_sizes(n)
    variation = None if pilot is None else pilot_variation(pilot, substitute=used.substitute)
    study = _study_of(
        used,
        pilot,
        variation,
        cv_within,
        cv_between,
        ratios=ratios,
        n_occasions=n_occasions,
        distribution=distribution,
        limit=limit,
        dropout=dropout,
    )
    root = _root(used, rng)
    jobs = [
        SizingJob(study, size, block, min(SETS, datasets - block * SETS), root)
        for size in sizes
        for block in range(math.ceil(datasets / SETS))
    ]
    blocks = run_blocks(simulated, jobs, executor=executor, resume=resume, progress=progress)
    by_size = {size: _joined(jobs, blocks, size) for size in sizes}
    return _sizing(
        study, by_size, target, root, variation, last_alone=isinstance(ratios, (int, float))
    )


def _checked_sizes(n: Iterable[int] | int) -> list[int]:
    """Return the numbers of subjects in ascending order."""
    listed = [n] if isinstance(n, int) else list(n)
    if not listed:
        raise ArgumentError("`n` must hold a number of subjects, got none. Write range(6, 41).")
    return sorted({check_count("n", size, least=LEAST_SUBJECTS) for size in listed})


def _study_of(
    plan: Plan,
    pilot: OccasionTable | None,
    variation: PilotVariation | None,
    cv_within: float | None,
    cv_between: float | None,
    **assumed: Any,
) -> Study:
    """Return the study; what is not given comes from the pilot."""
    if variation is None:
        for name, cv in (("cv_within", cv_within), ("cv_between", cv_between)):
            if cv is None:
                raise ArgumentError(
                    f"`{name}` must be given, got none. Give it as a fraction with its source, or "
                    "a `pilot` to estimate it from."
                )
    elif pilot is not None:
        cv_within = variation.cv_within if cv_within is None else cv_within
        cv_between = variation.cv_between if cv_between is None else cv_between
        one_ratio = isinstance(assumed["ratios"], (int, float))
        if one_ratio and assumed["n_occasions"] is None and not plan.occasions:
            assumed["n_occasions"] = pilot.n_occasions
        expected = assumed["n_occasions"] if one_ratio else len(assumed["ratios"])
        if not plan.occasions and expected == pilot.n_occasions:
            plan = plan.replace(occasions=pilot.occasions)
    return checked_study(plan, cv_within=cv_within, cv_between=cv_between, **assumed)  # type: ignore[arg-type]  # neither is None


def _root(plan: Plan, rng: np.random.Generator | int | None) -> int:
    """Return the root of all streams, in the documented order of precedence."""
    if isinstance(rng, np.random.Generator):
        high, low = rng.integers(2**63, size=2).tolist()
        return int(high) << 64 | int(low)
    if rng is not None:
        return check_count("rng", rng, least=0)
    if plan.seed is not None:
        return plan.seed
    entropy = np.random.SeedSequence().entropy
    return entropy if isinstance(entropy, int) else 0


def _joined(jobs: Sequence[SizingJob], blocks: Sequence[Block], size: int) -> Block:
    """Return the blocks of one number of subjects as one."""
    parts = [block for job, block in zip(jobs, blocks, strict=True) if job.n == size]
    return {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}


# ── the tables ────────────────────────────────────────────────────────────────────────────────


def _sizing(
    study: Study,
    by_size: dict[int, Block],
    target: float,
    seed: int,
    pilot: PilotVariation | None,
    *,
    last_alone: bool,
) -> Sizing:
    tests, sizes = tests_of(study), list(by_size)
    table = _power_table(tests, by_size)
    widths = _width_table(study, by_size)
    attainable = attainable_table(study, sizes)
    powers = {name: rows["power"].tolist() for name, rows in table.groupby("test")}
    smallest = {
        test.name: smallest_of(sizes, powers[test.name], target)
        for test in tests
        if test.expects_change
    }
    datasets = len(by_size[sizes[0]]["omnibus"])
    return Sizing(
        study=study,
        tests=tests,
        table=table,
        smallest=smallest,
        attainable=attainable,
        widths=widths,
        target=target,
        datasets=datasets,
        seed=seed,
        pilot=pilot,
        sentence=sentence(study, tests, table, widths, smallest, target, datasets),
        cautions=cautions(study, attainable, widths, sizes, pilot, last_alone=last_alone),
    )


def _power_table(tests: Sequence[Followed], by_size: dict[int, Block]) -> pd.DataFrame:
    import pandas as pd

    rows = []
    for n, block in by_size.items():
        for test in tests:
            rejects = block[test.outcome]
            if test.places:
                rejects = np.any(rejects[:, list(test.places)], axis=1)
            hits = int(rejects.sum())
            low, high = clopper_pearson(hits, len(rejects), _MONTE_CARLO_LEVEL)
            rows.append(
                {
                    "n": n,
                    "test": test.name,
                    "role": test.role,
                    "comparison": test.comparison,
                    "ratio": math.nan if test.ratio is None else test.ratio,
                    "rejections": hits,
                    "datasets": len(rejects),
                    "power": hits / len(rejects),
                    "low": float(low),
                    "high": float(high),
                }
            )
    return pd.DataFrame(rows)


def _width_table(study: Study, by_size: dict[int, Block]) -> pd.DataFrame:
    import pandas as pd

    together = study.plan.intervals == "simultaneous"
    level = 1 - study.plan.alpha / len(study.pairs) if together else study.plan.level
    rows = []
    for n, block in by_size.items():
        attained = walsh.interval_rank(n, level)
        for place, pair in enumerate(study.pairs):
            width = block["width"][:, place]
            found = width[~np.isnan(width)]
            found = np.exp(found) if study.scale == "log" else found
            marks = np.quantile(found, [0.1, 0.5, 0.9]) if found.size else np.full(3, np.nan)
            rows.append(
                {
                    "n": n,
                    "comparison": study.label_of(pair),
                    "ratio": study.ratio_of(pair),
                    "width": float(marks[1]),
                    "narrow": float(marks[0]),
                    "wide": float(marks[2]),
                    "level": math.nan if attained is None else attained.level,
                    "given": found.size / width.size,
                }
            )
    return pd.DataFrame(rows)


def attainable_table(study: Study, sizes: Sequence[int]) -> pd.DataFrame:
    """Say how small P of the planned tests can become, for each number of subjects.

    Parameters
    ----------
    study : Study
    sizes : sequence of int

    Returns
    -------
    DataFrame
        Unadjusted and after the planned adjustment, and the overall test; without ties and with
        all subjects present. Tests whose P has no smallest value are left out.
    """
    import pandas as pd

    plan, m = study.plan, len(study.pairs)
    rows: list[dict[str, Any]] = []
    for n in sizes:
        rows.extend(_pair_rows(plan, n, m))
        smallest = _overall_smallest(plan.omnibus, n, study.k)
        if smallest is not None:
            rows.append(_attainable_row(n, plan.omnibus, 1, "overall", smallest, smallest, plan))
    columns = list(_attainable_row(0, "", 0, "", 0.0, 0.0, plan))
    return pd.DataFrame(rows, columns=columns)


def _pair_rows(plan: Plan, n: int, m: int) -> list[dict[str, Any]]:
    if plan.adjust == "closed":
        # two orders a subject: the pair alone has the largest of the smallest P of its partitions
        alone = math.ldexp(1.0, 1 - n)
        return [_attainable_row(n, plan.pair, m, "closed", alone, alone, plan)]
    if plan.pair not in _STEPPED:
        return []
    rows = []
    for adjust in dict.fromkeys(("none", plan.adjust)):
        found = attainable_signed_rank(n, m, adjust=adjust, sides=plan.sides, alpha=plan.alpha)
        rows.append(
            _attainable_row(
                n, plan.pair, m, adjust, found.smallest_p, found.smallest_p_adjusted, plan
            )
        )
    return rows


def _overall_smallest(test: str, n: int, k: int) -> float | None:
    """Return the smallest P of a test by rearrangement: all subjects alike, in any one order."""
    if test in PERMUTED:
        return float(math.factorial(k)) ** (1 - n)
    return math.ldexp(1.0, 1 - n) if test == "row_flip" else None


def _attainable_row(
    n: int, test: str, comparisons: int, adjust: str, alone: float, after: float, plan: Plan
) -> dict[str, Any]:
    return {
        "n": n,
        "test": test,
        "comparisons": comparisons,
        "adjust": adjust,
        "smallest_p": alone,
        "smallest_p_adjusted": after,
        "reachable": after <= plan.alpha,
    }
