"""Options that several commands take: how a file is read, and edits of a plan."""

from __future__ import annotations

import csv
import dataclasses
import inspect
import sys
import typing
from collections.abc import Callable, Mapping, Sequence
from types import MappingProxyType
from typing import Any

import click

from robustrm.errors import ArgumentError
from robustrm.methods.registry import ADJUSTMENTS, CLOSED_METHODS
from robustrm.plan import Plan, methods_for
from robustrm.reading import read_table
from robustrm.table import OccasionTable

Decorator = Callable[[Any], Any]


def together(*decorators: Decorator) -> Decorator:
    """Return one decorator that adds options in the order given."""

    def decorate(command: Any) -> Any:
        for decorator in reversed(decorators):
            command = decorator(command)
        return command

    return decorate


# ── texts into values ─────────────────────────────────────────────────────────────────


def _labels(text: str) -> tuple[str, ...]:
    """Return the labels of ``a,b,c``; double quotes hold a label with a comma together."""
    row = next(csv.reader([text], skipinitialspace=True), [])
    return tuple(label.strip() for label in row)


def label_list(given: Sequence[str]) -> list[str] | None:
    """Return the labels of an option given once as a list, or repeatedly with one label each."""
    if not given:
        return None
    return list(_labels(given[0])) if len(given) == 1 else list(given)


def _numbers(text: str) -> float | list[float | None]:
    """Return one number, or one an occasion; an empty place means none."""
    try:
        numbers = [float(part) if part.strip() else None for part in text.split(",")]
    except ValueError:
        message = f"{text!r} is no number. Write 0.3, or one an occasion: 0.3,0.3,0.5."
        raise click.BadParameter(message) from None
    return numbers if len(numbers) > 1 or numbers[0] is None else numbers[0]


def _whole_numbers(text: str) -> tuple[int, ...]:
    try:
        return tuple(int(part) for part in text.split(","))
    except ValueError:
        message = f"{text!r} does not list whole numbers. Write 9999,99999."
        raise click.BadParameter(message) from None


def condition(text: str) -> tuple[str, str]:
    """Return column and value of ``COLUMN=VALUE``."""
    column, sign, wanted = text.partition("=")
    if not sign or not column.strip():
        raise click.BadParameter(f"{text!r} is no condition. Write COLUMN=VALUE, as in arm=diet.")
    return column.strip(), wanted.strip()


# ── reading a file ────────────────────────────────────────────────────────────────────

data_argument = click.argument(
    "data", type=click.Path(exists=True, dir_okay=False, allow_dash=True)
)

reading_options = together(
    click.option("--subject", metavar="COLUMN", help="Column that says whose values they are."),
    click.option(
        "--occasions",
        multiple=True,
        metavar="A,B,C",
        help="Wide data: the columns with the values, in time order. Put a label that holds a "
        "comma in double quotes, or repeat the option with one label each.",
    ),
    click.option("--occasion", metavar="COLUMN", help="Long data: column with the occasion."),
    click.option("--value", metavar="COLUMN", help="Long data: column with the values."),
    click.option(
        "--plate",
        metavar="COLUMN",
        help="Long data: column that says in which run or plate each value was assayed.",
    ),
    click.option(
        "--order",
        multiple=True,
        metavar="A,B,C",
        help="Long data: the occasions in time order, written as for --occasions.",
    ),
    click.option("--marker", metavar="NAME", help="What was measured."),
    click.option("--unit", metavar="UNIT", help="Unit of the values, such as mg/L."),
    click.option(
        "--lower-limit",
        type=_numbers,
        metavar="NUMBER",
        help="Lower limit of detection: one number, or one an occasion (0.3,0.3,0.5).",
    ),
    click.option(
        "--upper-limit",
        type=_numbers,
        metavar="NUMBER",
        help="Upper limit of the measuring range, written as for --lower-limit.",
    ),
    click.option(
        "--resolution",
        type=float,
        metavar="STEP",
        help="Step in which the laboratory reports, if not the finest decimal place written.",
    ),
    click.option(
        "--replicates",
        type=click.Choice(["mean", "geometric"]),
        help="Several values of a subject on one occasion are replicates: average them so.",
    ),
    click.option("--decimal", type=click.Choice([".", ","]), help="Decimal mark of the numbers."),
    click.option("--sheet", metavar="NAME", help="Sheet of a workbook."),
    click.option(
        "--where",
        type=condition,
        multiple=True,
        metavar="COLUMN=VALUE",
        help="Use only the rows with exactly this text. Repeat it to narrow further.",
    ),
)

_READING = tuple(name for name in inspect.signature(read_table).parameters if name != "path")


def table_of(data: str, options: Mapping[str, Any], plan: Plan) -> OccasionTable:
    """Return the table that the reading options make of a file, or of standard input (``-``).

    What the plan says of marker, unit, occasions and limits holds where no option does.
    """
    reading = {name: options[name] for name in _READING}
    # long data have the occasions in a column, and their order apart
    labels = "order" if reading["occasion"] is not None else "occasions"
    for name in ("occasions", "order"):
        reading[name] = label_list(reading[name])
    for name in ("marker", "unit", "lower_limit", "upper_limit"):
        if reading[name] is None:
            reading[name] = _listed(getattr(plan, name))
    if reading[labels] is None:
        reading[labels] = list(plan.occasions) or None
    reading["where"] = dict(reading["where"]) or None
    return read_table(sys.stdin.buffer if data == "-" else data, **reading)


def _listed(value: Any) -> Any:
    return list(value) if isinstance(value, tuple) else value


# ── editing a plan ────────────────────────────────────────────────────────────────────

_PLAN_HELP = MappingProxyType(
    {
        "marker_kind": "A concentration is compared as ratios, a count or a score raw.",
        "scale": "Scale of the analysis, if not the one that the kind of marker implies.",
        "contrasts": "Planned comparisons: each later occasion with the first, all pairs, "
        "successive ones, or a pair EARLIER,LATER (repeat it for more pairs).",
        "pair": "Method for each comparison; robustrm methods lists them.",
        "omnibus": "Method for the overall test; robustrm methods lists them.",
        "companions": "Methods shown beside the planned ones, such as trimmed_anova,rank_pair; "
        "none for the parametric ones alone.",
        "zeros": "What the signed-rank test does with zero differences.",
        "adjust": "Adjustment of the p values over the planned comparisons.",
        "intervals": "Whether intervals hold their level each alone or all together.",
        "level": "Confidence level, such as 0.95.",
        "sides": "Sides of the tests.",
        "direction": "Direction of one-sided tests: later value larger, or smaller.",
        "substitute": "What enters an estimate for a value below the limit.",
        "missing": "Whether a comparison uses all who have both occasions, or complete subjects.",
        "margin": "What counts as no relevant change: a ratio such as 1.25, or a difference.",
        "margin_reason": "Where the margin comes from.",
        "estimand": "Target of estimation, in the words of the protocol.",
        "trim": "Share cut at each end by the trimmed means.",
        "winsorize": "Share pulled in at each end by the Winsorized permutation test.",
        "in_time": "Whether the occasions follow each other in time.",
        "purpose": "In an exploratory study p values are labelled so.",
        "design": "Design of the study; it decides the wording.",
        "selected": "Whether people were selected on a high value of the marker.",
        "own_runs": "Whether each occasion was assayed in a run of its own.",
        "stages": "Monte Carlo draws, raised stage by stage, such as 9999,99999.",
        "bootstrap_draws": "Bootstrap resamples.",
        "seed": "Root of all random draws.",
    }
)
_METAVARS = MappingProxyType(
    {
        "contrasts": "first|all|successive|A,B",
        "pair": "NAME",
        "omnibus": "NAME",
        "companions": "NAME,NAME",
        "stages": "N,N",
        "margin_reason": "TEXT",
        "estimand": "TEXT",
    }
)
# How a no is said; not said, the key stays as it is.
_NO = MappingProxyType(
    {"in_time": "not-in-time", "selected": "not-selected", "own_runs": "shared-runs"}
)
# Told by the options that read a file, or by the plan file alone.
_OF_READING = ("marker", "unit", "occasions", "lower_limit", "upper_limit")
_OF_THE_FILE = ("created", "data_digest", "amendments", "grid")


def _plan_option(field: dataclasses.Field[Any]) -> Decorator:
    """Return the option of one key of the plan; not given, it leaves the plan as it is."""
    flag = f"--{field.name.replace('_', '-')}"
    text = f"{_PLAN_HELP[field.name]}{_usual(field.default)}"
    if field.name in _NO:
        return click.option(f"{flag}/--{_NO[field.name]}", default=None, help=text)
    return click.option(
        flag,
        type=_plan_type(field.name),
        multiple=field.name == "contrasts",
        metavar=_METAVARS.get(field.name),
        help=text,
    )


def _usual(default: Any) -> str:
    if default is None:
        return ""
    shown = ",".join(map(str, default)) if isinstance(default, tuple) else default
    return f"  [plan: {'in time' if default is True else shown}]"


def _plan_type(name: str) -> Any:
    """Return the type of an option, as the plan declares its key."""
    if name == "pair":
        names = (*methods_for(name), *methods_for("family"), *CLOSED_METHODS)
        return click.Choice(tuple(dict.fromkeys(names)))
    if name == "omnibus":
        return click.Choice(methods_for(name))
    if name == "adjust":
        return click.Choice(ADJUSTMENTS)
    if name in ("contrasts", "companions"):
        return _labels
    if name == "stages":
        return _whole_numbers
    declared = typing.get_type_hints(Plan)[name]
    for part in (declared, *typing.get_args(declared)):
        if typing.get_origin(part) is typing.Literal:
            return click.Choice(typing.get_args(part))
    return declared if isinstance(declared, type) else typing.get_args(declared)[0]


PLAN_OPTIONS = MappingProxyType(
    {
        field.name: _plan_option(field)
        for field in dataclasses.fields(Plan)
        if field.name not in (*_OF_READING, *_OF_THE_FILE)
    }
)

plan_file_option = click.option(
    "--plan",
    "plan_file",
    type=click.Path(exists=True, dir_okay=False),
    metavar="FILE",
    help="Plan to start from (TOML); other options change single keys of it.",
)


def declared_keys(options: Mapping[str, Any]) -> dict[str, Any]:
    """Return the keys of the plan that options declare, with their values."""
    keys = {key: options[key] for key in PLAN_OPTIONS if options.get(key) not in (None, ())}
    if "contrasts" in keys:
        keys["contrasts"] = _family(keys["contrasts"])
    if keys.get("companions") == ("none",):
        keys["companions"] = ()
    labels = label_list(options.get("occasions") or options.get("order") or ())
    if labels is not None:
        keys["occasions"] = tuple(labels)
    for name in ("marker", "unit", "lower_limit", "upper_limit"):
        if options.get(name) is not None:
            value = options[name]
            keys[name] = tuple(value) if isinstance(value, list) else value
    return keys


def plan_of(plan_file: str | None, options: Mapping[str, Any]) -> Plan:
    """Return the usual plan with the keys that options declare, or that of a file, amended."""
    keys = declared_keys(options)
    plan = Plan(**keys) if plan_file is None else Plan.load(plan_file).amended(**keys)
    if "direction" in keys and plan.sides == 2:
        raise ArgumentError(
            f"`--direction` is for one-sided tests, got {keys['direction']!r} with two sides. "
            "Add --sides 1, or leave the direction out."
        )
    return plan


def _family(given: Sequence[tuple[str, ...]]) -> str | Sequence[tuple[str, ...]]:
    """Return the name of a family, or the pairs."""
    return given[0][0] if len(given) == 1 and len(given[0]) == 1 else given
