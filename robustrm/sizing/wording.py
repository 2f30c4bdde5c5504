"""The sentence for a protocol, and what the numbers do not say."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import TYPE_CHECKING

from robustrm._format import counted, declared, fixed, level_text, listing, number, percent
from robustrm.methods.adjusting import TITLES
from robustrm.methods.registry import method as registered
from robustrm.plan import Plan
from robustrm.results import Note
from robustrm.sizing.pilot import PilotVariation
from robustrm.sizing.result import AT_LEAST_ONE, FURTHER, Followed, cv_text
from robustrm.sizing.study import Study
from robustrm.trials.p_values import DRAWS, needs_draws

if TYPE_CHECKING:
    import pandas as pd

_MOSTLY_WITHOUT = 0.9


# ── the sentence ──────────────────────────────────────────────────────────────────────────────


def sentence(
    study: Study,
    tests: Sequence[Followed],
    table: pd.DataFrame,
    widths: pd.DataFrame,
    smallest: Mapping[str, int | None],
    target: float,
    datasets: int,
) -> str:
    """Return the sentences for a protocol."""
    planned = [test for test in tests if test.role == "primary" and test.expects_change]
    sizes = sorted(set(table["n"].tolist()))
    reached = {test.name: smallest[test.name] for test in planned}
    each = [test for test in planned if test.comparison != AT_LEAST_ONE]
    enough = [n for test in each if (n := reached[test.name]) is not None]
    parts = [_assumption(study)]
    if not planned:
        parts.append("No planned comparison has an expected change: there is no power to give.")
        return parts[0] + " " + parts[1]
    parts.append(f"Planned is the {_test_words(study.plan)}.")
    found = [(test, n) for test in planned if (n := reached[test.name]) is not None]
    parts += [_reached(test, n, table, datasets) for test, n in found]
    beyond = [test for test in planned if reached[test.name] is None]
    if beyond:
        parts.append(_not_reached(beyond, table, sizes[-1], target))
    if each and len(enough) == len(each):
        parts.append(_precision(study, widths, max(enough)))
    return " ".join(part for part in parts if part)


def _assumption(study: Study) -> str:
    law = "lognormal" if study.distribution == "lognormal" else f"{study.distribution} (simulated)"
    later = zip(study.labels[1:], study.ratios[1:], strict=True)
    expected = listing([f"{declared(ratio)} at {label}" for label, ratio in later])
    lost = ""
    if study.dropout:
        lost = f", {percent(study.dropout)} of the subjects lost by {study.labels[-1]}"
    below = f", {percent(study.limit)} of the values below the limit" if study.limit else ""
    return (
        f"The number of subjects was found by simulation under these assumptions: {law} values "
        f"with a coefficient of variation of {cv_text(study.cv_within)} within and "
        f"{cv_text(study.cv_between)} between people, and expected ratios to {study.labels[0]} of "
        f"{expected}{lost}{below}."
    )


def _change_words(test: Followed) -> str:
    if test.comparison == AT_LEAST_ONE:
        return "at least one of the expected changes"
    return f"the change {test.comparison}"


def _reached(test: Followed, n: int, table: pd.DataFrame, datasets: int) -> str:
    row = table[(table["test"] == test.name) & (table["n"] == n)].iloc[0]
    limits = f"{fixed(float(row['low']), 2)} to {fixed(float(row['high']), 2)}"
    return (
        f"With {counted(n, 'subject')} the power to find {_change_words(test)} is "
        f"{fixed(float(row['power']), 2)} (95% Monte Carlo interval {limits}, {datasets:,} "
        "simulated studies)."
    )


def _not_reached(tests: Sequence[Followed], table: pd.DataFrame, last: int, target: float) -> str:
    rows = table[table["n"] == last].set_index("test")["power"].to_dict()
    told = [f"{_change_words(test)} ({fixed(float(rows[test.name]), 2)})" for test in tests]
    return (
        f"No number up to {last} was found at which, and at the next {FURTHER}, the power is at "
        f"least {declared(target)} for these, with what it is with {counted(last, 'subject')}: "
        f"{listing(told, len(told))}."
    )


def _test_words(plan: Plan) -> str:
    title = registered(plan.pair).title
    sides = "two-sided" if plan.sides == 2 else f"one-sided ({plan.direction})"
    adjust = "without adjustment" if plan.adjust == "none" else f"after {TITLES[plan.adjust]}"
    return f"{title}, {sides} at level {declared(plan.alpha)}, {adjust}"


def _precision(study: Study, widths: pd.DataFrame, n: int) -> str:
    rows = widths[(widths["n"] == n) & widths["width"].notna()]
    if rows.empty:
        return ""
    kind = "factor" if study.scale == "log" else "range"
    told = [
        f"{fixed(float(row['width']), 2)} for {row['comparison']}" for _, row in rows.iterrows()
    ]
    level = level_text(float(rows["level"].iloc[0]))
    return (
        f"With {n} the {level} intervals are expected to span a {kind} of {listing(told)} "
        "(median over the simulated studies)."
    )


# ── cautions ──────────────────────────────────────────────────────────────────────────────────


def cautions(
    study: Study,
    attainable: pd.DataFrame,
    widths: pd.DataFrame,
    sizes: Sequence[int],
    pilot: PilotVariation | None,
    *,
    last_alone: bool,
) -> tuple[Note, ...]:
    """Return what the numbers do not say."""
    return (
        *_about_the_change(study, pilot, last_alone=last_alone),
        *_about_the_sizes(study, attainable, sizes),
        *_about_the_simulation(study, widths, sizes),
        Note(
            "before the study",
            "These numbers are for planning research.",
            "Local rules, the ethics committee and a qualified statistician come first.",
        ),
    )


def _about_the_change(
    study: Study, pilot: PilotVariation | None, *, last_alone: bool
) -> Iterator[Note]:
    yield Note(
        "not the pilot's effect",
        "The expected ratios are an assumption, and the power is no better than they are.",
        "A pilot's own effect is not a target: it is imprecise, and pilots with a large one are "
        "those that are followed up.",
        "Size the study by the smallest change that matters, and write down why it does.",
    )
    if last_alone:
        yield Note(
            "last occasion alone",
            f"The smallest important ratio is expected at {study.labels[-1]} alone.",
            "Step-down adjustment finds less there than where several occasions change; an overall "
            "test may find more.",
            "Give a ratio for each occasion where the course is known.",
        )
    plan = study.plan
    wrong = 1 if plan.direction == "less" else -1
    if plan.sides == 1 and any(
        wrong * (study.ratio_of(pair) - 1) > 0 and study.changes(pair) for pair in study.pairs
    ):
        yield Note(
            "other side",
            f"The planned tests are one-sided ({plan.direction}), and a change is expected to the "
            "other side.",
            "They cannot find it.",
        )
    if pilot is not None:
        yield Note(
            "pilot variation",
            f"{pilot}.",
            "The true CVs can lie anywhere in these intervals.",
            f"Look at the number of subjects for a CV within people of {number(pilot.within[1])} "
            "too.",
        )
    yield Note(
        "no cause",
        "Power is the probability to find a change between occasions.",
        "Without a comparison group the change does not tell what brought it about."
        + (
            " People selected on a high value fall without any change."
            if study.plan.selected
            else ""
        ),
    )


def _about_the_sizes(
    study: Study, attainable: pd.DataFrame, sizes: Sequence[int]
) -> Iterator[Note]:
    yield Note(
        "no two-arm rule",
        "Rules of thumb such as 12 or 30 a group are made for two groups of different people.",
        "Here everybody is compared with themselves, so they do not apply.",
    )
    planned = attainable[attainable["adjust"] == study.plan.adjust]
    lost = planned.loc[~planned["reachable"].astype(bool), "n"].tolist()
    if lost:
        yield Note(
            "attainable",
            f"With {max(lost)} subjects or fewer the smallest adjusted P is above "
            f"{declared(study.plan.alpha)}.",
            "Whatever the data say, no comparison can reach the level.",
        )
    if len(planned):
        yield Note(
            "steps",
            "P of an exact test moves in steps, so power can fall when a subject is added.",
            f"The smallest n is one that reaches the target together with the next {FURTHER}.",
        )
    if list(sizes) != list(range(sizes[0], sizes[-1] + 1)) or len(sizes) <= FURTHER:
        yield Note(
            "numbers left out",
            "Not all numbers of subjects between the first and the last, and 3 beyond, were asked "
            "for.",
            "A smallest n is given only where the next 3 numbers were simulated too.",
        )


def _about_the_simulation(
    study: Study, widths: pd.DataFrame, sizes: Sequence[int]
) -> Iterator[Note]:
    yield Note(
        "same spread, no memory",
        "In the simulation a person's values hang together by the person's level alone and vary "
        "alike on every occasion.",
        "Serial correlation, personal trends or spread that grows change the power.",
    )
    if study.distribution == "log-t3":
        yield Note(
            "heavy tails",
            "The CV is turned into the SD of the logarithms as for lognormal values.",
            "Values with such tails have no CV of their own.",
        )
    if study.dropout:
        yield Note(
            "lost subjects",
            f"{percent(study.dropout)} are lost by {study.labels[-1]}, at any later occasion with "
            "equal probability and whatever their values are.",
            "Where leaving hangs together with the values the comparison is biased, whatever the "
            "number of subjects.",
        )
    if study.limit:
        yield Note(
            "limit",
            f"In every simulated study {percent(study.limit)} of all values lie below the limit.",
            "More do where values fall.",
        )
    drawn = [
        name for name in (study.plan.pair, study.plan.omnibus) if _is_drawn(study, name, sizes)
    ]
    if drawn:
        yield Note(
            "rearrangements",
            f"P of {listing(list(dict.fromkeys(drawn)))} comes from {DRAWS} random rearrangements "
            "of each simulated study.",
            "Its power is a little below that of the exact P.",
        )
    if len(widths) and float(widths["given"].min()) < _MOSTLY_WITHOUT:
        yield Note(
            "intervals missing",
            "Some simulated studies have no interval: too few subjects, or more than half of an "
            "occasion below the limit.",
            "Widths are those of the others.",
        )


def _is_drawn(study: Study, name: str, sizes: Sequence[int]) -> bool:
    if name == study.plan.pair:
        return name == "sign_flip" or study.plan.adjust == "closed"
    return needs_draws(name, study.design(sizes[-1]))
