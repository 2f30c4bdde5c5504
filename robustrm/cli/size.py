"""The command that says how many subjects a study needs."""

from __future__ import annotations

from typing import Any

import click

import robustrm
from robustrm.cli.commands import main
from robustrm.cli.elsewhere import elsewhere, running_options
from robustrm.cli.exits import debug_option
from robustrm.cli.options import (
    PLAN_OPTIONS,
    plan_file_option,
    plan_of,
    reading_options,
    table_of,
    together,
)
from robustrm.cli.shown import echo_json, examples, json_option, progress_bar
from robustrm.errors import ArgumentError

# Options that are arguments of sample_size by the same name.
_ASSUMED = (
    "cv_within",
    "cv_between",
    "n",
    "target",
    "distribution",
    "limit",
    "dropout",
    "datasets",
)


def _sizes(text: str) -> list[int]:
    """Return the numbers of ``6-40``, ``12`` or ``8,10,12``."""
    found: list[int] = []
    try:
        for part in text.split(","):
            first, _, last = part.partition("-")
            found.extend(range(int(first), int(last or first) + 1))
    except ValueError:
        message = f"{text!r} does not list numbers of subjects. Write 6-40, or 8,10,12."
        raise click.BadParameter(message) from None
    return found


def _ratios(text: str) -> list[float]:
    try:
        return [float(part) for part in text.split(",")]
    except ValueError:
        message = f"{text!r} does not list ratios. Write one an occasion, 1,0.8,0.7."
        raise click.BadParameter(message) from None


@main.command(
    short_help="Say how many subjects a study needs, before there are data.",
    epilog=examples(
        """
        robustrm size --cv-within 0.42 --cv-between 0.9 --ratios 1,0.6,0.5 \\
            --n 6-16 --seed 1
        """
    ),
)
@click.option("--cv-within", type=float, metavar="CV", help="CV within a person, as 0.42.")
@click.option("--cv-between", type=float, metavar="CV", help="CV between people, as 0.9.")
@click.option(
    "--ratios",
    type=_ratios,
    metavar="1,R,R",
    help="Expected ratio of each occasion to the first.",
)
@click.option(
    "--smallest-ratio",
    type=float,
    metavar="R",
    help="Instead: the smallest important ratio, expected at the last occasion alone.",
)
@click.option(
    "--visits", type=int, metavar="K", help="With --smallest-ratio: the number of occasions."
)
@click.option("--n", type=_sizes, metavar="6-40", help="Numbers of subjects to look at.")
@click.option("--target", type=float, metavar="POWER", help="Power asked for, as 0.8.")
@click.option("--distribution", metavar="NAME", help="Law of the values: lognormal or log-t3.")
@click.option("--limit", type=float, metavar="SHARE", help="Share of values below the limit.")
@click.option(
    "--dropout", type=float, metavar="SHARE", help="Share of subjects lost by the last occasion."
)
@click.option("--datasets", type=int, metavar="N", help="Simulated studies of each size.")
@click.option(
    "--pilot",
    type=click.Path(exists=True, dir_okay=False, allow_dash=True),
    metavar="FILE",
    help="Estimate CVs that are not given from this file, read by the options below.",
)
@reading_options
@together(plan_file_option, *PLAN_OPTIONS.values())
@running_options
@click.option(
    "--out",
    type=click.Path(file_okay=False),
    metavar="FOLDER",
    help="Write tables, figure, text and plan into this new folder.",
)
@json_option
@click.option("--quiet", is_flag=True, help="No progress and no notes on stderr.")
@debug_option
def size(
    pilot: str | None,
    plan_file: str | None,
    workers: int | None,
    scheduler: str | None,
    resume: str | None,
    out: str | None,
    as_json: bool,
    quiet: bool,
    **options: Any,
) -> None:
    """Say how many subjects a study needs, before there are data.

    Simulates studies and analyzes each as planned: power of the planned tests and of the
    parametric ones against the number of subjects, the smallest number that reaches the
    target and stays, the expected width of the intervals, and the smallest P that each
    number can reach. Ends with a sentence for a protocol and with cautions.
    """
    # the occasions of a pilot need not be those of the study
    planned = options if pilot is None else {**options, "occasions": (), "order": ()}
    plan = plan_of(plan_file, planned)
    assumed = {name: options[name] for name in _ASSUMED if options[name] is not None}
    assumed |= _expected(options)
    if pilot is not None:
        assumed["pilot"] = table_of(pilot, options, plan)
    with elsewhere(workers, scheduler) as executor, progress_bar(quiet, "simulating") as progress:
        found = robustrm.sample_size(
            plan=plan, executor=executor, resume=resume, progress=progress, **assumed
        )
    if out is not None:
        from robustrm.report.sizing_folder import write_sizing

        folder = write_sizing(found, out)
        if not quiet:
            click.echo(f"Tables, figure and text: {folder}", err=True)
    if as_json:
        echo_json(found.to_dict())
    else:
        click.echo(str(found))


def _expected(options: dict[str, Any]) -> dict[str, Any]:
    """Return the expected ratios, one an occasion or the smallest important one."""
    ratios, smallest = options["ratios"], options["smallest_ratio"]
    if (ratios is None) == (smallest is None):
        raise ArgumentError(
            "One of `--ratios` and `--smallest-ratio` must be given, got "
            f"{'none' if ratios is None else 'both'}. Write --ratios 1,0.8,0.7, or "
            "--smallest-ratio 0.8 --visits 3."
        )
    return {"ratios": smallest if ratios is None else ratios, "n_occasions": options["visits"]}
