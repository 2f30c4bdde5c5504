"""The commands."""

from __future__ import annotations

import datetime as dt
import inspect
import io
import shlex
import sys
import textwrap
import typing
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

import robustrm
from robustrm._checks import did_you_mean
from robustrm._format import Style
from robustrm.advice import Advice
from robustrm.advice import advise as advise_on
from robustrm.analysis import Analysis
from robustrm.cli.exits import REFUSED, Group, debug_option
from robustrm.cli.options import (
    PLAN_OPTIONS,
    data_argument,
    declared_keys,
    plan_file_option,
    plan_of,
    reading_options,
    table_of,
    together,
)
from robustrm.cli.shown import echo_json, examples, json_option, progress_bar
from robustrm.errors import ArgumentError, DataError
from robustrm.methods.registry import METHODS, Method
from robustrm.plan import Plan
from robustrm.report.structure import problems_text, structure, structure_text
from robustrm.sensitivity_analysis import Sensitivity
from robustrm.table import OccasionTable

if TYPE_CHECKING:
    from robustrm.trials.own_design import OwnDesign

_WORDS = "robustrm.words"


class Recorded(click.Command):
    """A command that keeps its words as typed, so that the next command can repeat them."""

    def parse_args(self, ctx: click.Context, args: list[str]) -> list[str]:
        """Keep the words, and parse them."""
        ctx.meta[_WORDS] = [word for word in args if word not in ("--json", "--debug")]
        return super().parse_args(ctx, args)


style_option = click.option(
    "--style",
    type=click.Choice(typing.get_args(Style)),
    default="medical",
    help="How p values are printed: P = 0.013 (medical) or p = .013 (apa).",
)


@click.group(
    cls=Group,
    context_settings={"help_option_names": ["-h", "--help"]},
    epilog=examples(
        """
        robustrm demo demo
        robustrm check demo/calprotectin.csv --subject patient \\
            --occasions "week 0,week 2,week 6,week 12"
        """
    ),
)
@click.version_option(robustrm.__version__, prog_name="robustrm")
@debug_option
def main() -> None:
    """Say whether a marker changed within the same people, by how much and how surely.

    For one skewed biomarker measured on three or more occasions in the same subjects, with
    values under a detection limit and missed visits. Statistics for research: not a
    diagnosis and not a medical device.

    DATA is a csv, tsv or xlsx file, or - for standard input. Exit codes: 0 done, 2 usage or
    a refused plan, 3 data refused with every problem listed, 130 interrupted, 1 anything
    else.
    """
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="backslashreplace")


@main.command(
    cls=Recorded,
    short_help="Show what is understood of a file, or what is in the way.",
    epilog=examples(
        """
        robustrm check crp.csv --subject id --occasions "week 0,week 6,week 12"
        robustrm check crp.csv --subject id --occasion week --value crp \\
            --order 0,6,12
        """
    ),
)
@data_argument
@reading_options
@together(plan_file_option, PLAN_OPTIONS["scale"], PLAN_OPTIONS["marker_kind"])
@json_option
@debug_option
@click.pass_context
def check(
    ctx: click.Context, /, data: str, plan_file: str | None, as_json: bool, **options: Any
) -> None:
    """Read DATA and show what was understood; nothing is computed.

    Shows who has what on which occasion, what was noticed, what was done to the cells, and
    the command that analyzes the data. If something stands in the way, every problem is
    listed with what to do, and the exit code is 3.
    """
    plan = plan_of(plan_file, options)
    try:
        table = table_of(data, options, plan)
        table.on_scale(plan.used_scale)
    except DataError as error:
        if as_json:
            echo_json({"problems": [problem.to_dict() for problem in error.problems]})
        else:
            click.echo(problems_text(error))
        ctx.exit(REFUSED)
    analyze_line = shlex.join(["robustrm", "analyze", *ctx.meta[_WORDS], "--out", "report"])
    found = structure(table)
    if as_json:
        echo_json({**found, "problems": [], "analyze": analyze_line})
    else:
        click.echo(f"{structure_text(found)}\n\nNothing stands in the way. To analyze:\n")
        click.echo(analyze_line)


@main.command(
    short_help="Analyze one marker as planned and write the report.",
    epilog=examples(
        """
        robustrm analyze crp.csv --subject id --occasions "week 0,week 6,week 12" \\
            --marker CRP --unit mg/L --lower-limit 0.3 --out report
        """
    ),
)
@data_argument
@reading_options
@together(plan_file_option, *PLAN_OPTIONS.values())
@click.option(
    "--out",
    type=click.Path(file_okay=False),
    metavar="FOLDER",
    help="Write the report here: HTML, JSON, tables, figures, methods text and plan.",
)
@style_option
@json_option
@click.option("--quiet", is_flag=True, help="No progress and no notes on stderr.")
@debug_option
def analyze(
    data: str,
    plan_file: str | None,
    out: str | None,
    style: Style,
    as_json: bool,
    quiet: bool,
    **options: Any,
) -> None:
    """Analyze one marker of DATA as planned, with the parametric result beside.

    Without --plan, what no option declares is advised without looking at the occasions, and
    the reasons are part of the report; options change a plan file by amendments.

    Prints estimates with intervals, p values and who is in which analysis; with --out it also
    writes the whole report, the plan that was used included.
    """
    plan = plan_of(plan_file, options)
    table = table_of(data, options, plan)
    # without a plan file the advice fills in what no option declares
    advice = None if plan_file else advise_on(table, plan=plan, keep=declared_keys(options))
    used = plan if advice is None else advice.plan
    with progress_bar(quiet) as progress:
        analysis = robustrm.analyze(table, used, advice=advice, progress=progress)
    if out is not None:
        from robustrm.report.folder import write_report

        folder = write_report(analysis, out, style=style)
        if not quiet:
            click.echo(f"Report: {folder / 'report.html'}", err=True)
    click.echo(_result_text(analysis, style, as_json=as_json), nl=False)


def _result_text(analysis: Analysis, style: Style, *, as_json: bool) -> str:
    from robustrm.report.json_text import json_text
    from robustrm.report.text import text

    document = analysis.to_dict()
    return json_text(document) if as_json else text(document, style=style)


@main.command(
    short_help="Ask whether the conclusion holds under other assumptions.",
    epilog=examples(
        """
        robustrm sensitivity crp.csv --subject id \\
            --occasions "week 0,week 6,week 12" --out report
        """
    ),
)
@data_argument
@reading_options
@together(plan_file_option, *PLAN_OPTIONS.values())
@click.option(
    "--out",
    type=click.Path(file_okay=False),
    metavar="FOLDER",
    help="Write the whole report here, this section included.",
)
@style_option
@json_option
@click.option("--quiet", is_flag=True, help="No progress and no notes on stderr.")
@debug_option
def sensitivity(
    data: str,
    plan_file: str | None,
    out: str | None,
    style: Style,
    as_json: bool,
    quiet: bool,
    **options: Any,
) -> None:
    """Ask whether the conclusion about DATA holds under other reasonable assumptions.

    Beside the parametric result, over all declared specifications with one joint p value,
    without one person, over what values beyond a limit may have been, under other handling of
    missed visits. Says what drives each disagreement. No vote is taken, and nothing replaces
    the planned result.
    """
    plan = plan_of(plan_file, options)
    table = table_of(data, options, plan)
    used = plan if plan_file else advise_on(table, plan=plan, keep=declared_keys(options)).plan
    with progress_bar(quiet) as progress:
        found = robustrm.sensitivity(table, used, progress=progress)
    if out is not None:
        from robustrm.report.folder import write_report

        folder = write_report(found.analysis, out, style=style, sensitivity=found)
        if not quiet:
            click.echo(f"Report: {folder / 'report.html'}", err=True)
    click.echo(_sensitivity_text(found, style, as_json=as_json), nl=False)


def _sensitivity_text(found: Sensitivity, style: Style, *, as_json: bool) -> str:
    from robustrm.report.document import document
    from robustrm.report.json_text import json_text
    from robustrm.report.sensitivity_text import sensitivity_text

    held = document(found.analysis, found)
    return json_text(held) if as_json else sensitivity_text(held, style)


@main.command(
    short_help="Advise a plan, from the design or without looking at the occasions.",
    epilog=examples(
        """
        robustrm advise --subjects 12 --visits 4 --save plan.toml
        robustrm advise crp.csv --subject id --occasions "week 0,week 6,week 12"
        """
    ),
)
@click.argument(
    "data", type=click.Path(exists=True, dir_okay=False, allow_dash=True), required=False
)
@click.option("--subjects", type=int, metavar="N", help="Without data: how many people.")
@click.option("--visits", type=int, metavar="K", help="Without data: how many occasions.")
@reading_options
@together(plan_file_option, *PLAN_OPTIONS.values())
@click.option(
    "--save",
    type=click.Path(dir_okay=False),
    metavar="FILE",
    help="Write the advised plan (TOML), with the date and, where there are data, their digest.",
)
@click.option("--statement", is_flag=True, help="Print the plan as the statistics section.")
@click.option("--simulate", is_flag=True, help="Measure level and power at this design.")
@json_option
@click.option("--quiet", is_flag=True, help="No progress on stderr.")
@debug_option
def advise(
    data: str | None,
    subjects: int | None,
    visits: int | None,
    plan_file: str | None,
    save: str | None,
    statement: bool,
    simulate: bool,
    as_json: bool,
    quiet: bool,
    **options: Any,
) -> None:
    """Advise a plan for a design, or for DATA without looking at the occasions.

    With DATA the advice sees every person's values sorted and which visits are missing, not
    which value belongs to which occasion: an exact permutation test that it chooses keeps its
    level. Options declare what is settled already and are kept.
    """
    plan = plan_of(plan_file, options)
    table = None if data is None else table_of(data, options, plan)
    advice = advise_on(
        table, n_subjects=subjects, n_occasions=visits, plan=plan, keep=declared_keys(options)
    )
    if save is not None:
        _save_plan(advice.plan, save, table)
    told = [_simulated(advice, quiet)] if simulate else []
    if as_json:
        echo_json({**advice.to_dict(), "simulated": told[0].to_dict() if told else None})
        return
    from robustrm.report.plan_text import statement as in_words

    click.echo("\n\n".join([str(advice), *map(str, told)]))
    if statement:
        click.echo(f"\nThe plan in words\n\n{in_words(advice.plan)}", nl=False)


def _simulated(advice: Advice, quiet: bool) -> OwnDesign:
    from robustrm.trials.own_design import simulate_own_design

    with progress_bar(quiet, "simulating") as progress:
        return simulate_own_design(advice.facts, progress=progress)


def _save_plan(plan: Plan, file: str, table: OccasionTable | None) -> None:
    """Write a plan with the date and the digest of what was at hand; never over another file."""
    if Path(file).exists():
        raise ArgumentError(f"`--save` must name a new file, got {file!r}, which exists.")
    digest = None if table is None else table.source.get("sha256")
    dated = plan.replace(created=dt.datetime.now(tz=dt.UTC).date().isoformat(), data_digest=digest)
    dated.save(file)
    click.echo(f"Plan: {file}", err=True)


@main.command(short_help="Write invented data to try it on.", epilog=examples("robustrm demo demo"))
@click.argument("folder", type=click.Path(file_okay=False), default=".")
@debug_option
def demo(folder: str) -> None:
    """Write an invented data set into FOLDER and print the command that analyzes it."""
    from robustrm.demo import DEMO_OPTIONS, write_demo

    target = write_demo(folder)
    click.echo(f"Wrote {target}: invented data, nobody was measured. To analyze them:", err=True)
    report = str(target.parent / "report")
    click.echo(shlex.join(["robustrm", "analyze", str(target), *DEMO_OPTIONS, "--out", report]))


@main.command(
    short_help="List the methods, or explain one.",
    epilog=examples("robustrm methods\nrobustrm methods friedman"),
)
@click.argument("name", required=False)
@debug_option
def methods(name: str | None) -> None:
    """List the methods with the question each answers, or explain the one called NAME."""
    if name is None:
        click.echo("\n\n".join(_kind_text(kind, title) for kind, title in _KINDS.items()))
        return
    entries = {method.name: method for method in METHODS}
    if name not in entries:
        raise ArgumentError(
            f"`NAME` must be one of {', '.join(entries)}, got {name!r}."
            f"{did_you_mean(name, entries)}"
        )
    entry, function = entries[name], entries[name].load()
    click.echo(f"{entry.title}\n{entry.question}\n")
    click.echo(f"{_call(entry, function)}\n\n{inspect.getdoc(function)}")


def _call(entry: Method, function: Callable[..., Any]) -> str:
    if entry.kind == "family":  # called by follow_up, not by the user
        options = "".join(f", {name}=..." for name in entry.options)
        return f'robustrm.follow_up(table, method="{entry.name}", family=...{options})'
    return f"robustrm.{entry.name}{_plain_signature(function)}"


def _plain_signature(function: Callable[..., Any]) -> inspect.Signature:
    """Return the signature without types, which the text below it tells in words."""
    signature = inspect.signature(function)
    bare = [p.replace(annotation=p.empty) for p in signature.parameters.values()]
    return signature.replace(parameters=bare, return_annotation=signature.empty)


_KINDS = {
    "omnibus": "All occasions at once",
    "pair": "Two occasions",
    "family": "All pairs of occasions together, with their own adjustment",
}


def _kind_text(kind: str, title: str) -> str:
    entries = [method for method in METHODS if method.kind == kind]
    width = max(len(method.name) for method in entries)
    return "\n\n".join([title, *(_entry_text(method, width) for method in entries)])


def _entry_text(method: Method, width: int) -> str:
    said = f"{method.question} Null hypothesis: {method.null}."
    lines = textwrap.wrap(said, 74, break_on_hyphens=False)
    return "\n      ".join([f"  {method.name.ljust(width)}  {method.title}", *lines])
