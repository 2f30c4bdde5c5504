"""How a command ends: what is said, and with which exit code."""

from __future__ import annotations

import os
import sys
import traceback
from collections.abc import Callable, Mapping
from typing import Any, TypeVar

import click

from robustrm.errors import ArgumentError, DataError, PlanError, RobustrmError, TooFewError
from robustrm.report.structure import problems_text

FAILED, USAGE, REFUSED, INTERRUPTED = 1, 2, 3, 130
EXIT_CODES: Mapping[type[Exception], int] = {
    ArgumentError: USAGE,
    PlanError: USAGE,
    DataError: REFUSED,
    TooFewError: REFUSED,
}
_DEBUG = "robustrm.debug"

Command = TypeVar("Command", bound=Callable[..., Any])


class Group(click.Group):
    """Commands whose every end is an exit code and one plain message."""

    def invoke(self, ctx: click.Context) -> Any:
        """Run a command; say why it stopped, if it did."""
        try:
            return super().invoke(ctx)
        except (click.ClickException, click.exceptions.Exit, click.Abort):
            raise
        except KeyboardInterrupt:
            click.echo("Interrupted.", err=True)
            ctx.exit(INTERRUPTED)
        except BrokenPipeError:
            # Whoever read the pipe has gone. What is still buffered must not fail a second time.
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
            ctx.exit(FAILED)
        except Exception as error:
            if ctx.meta.get(_DEBUG):
                traceback.print_exc()
            click.echo(_reason(error), err=True)
            ctx.exit(exit_code(error))


def exit_code(error: Exception) -> int:
    """Return the exit code of an error."""
    return next((code for kind, code in EXIT_CODES.items() if isinstance(error, kind)), FAILED)


def _reason(error: Exception) -> str:
    if isinstance(error, DataError):
        return problems_text(error)
    if isinstance(error, RobustrmError):
        return f"Error: {error}"
    return f"Error: {type(error).__name__}: {error}. Run again with --debug for the traceback."


def _remember(ctx: click.Context, _parameter: click.Parameter, value: bool) -> None:
    if value:
        ctx.meta[_DEBUG] = True


def debug_option(command: Command) -> Command:
    """Add ``--debug`` to a command."""
    return click.option(
        "--debug",
        is_flag=True,
        expose_value=False,
        is_eager=True,
        callback=_remember,
        help="Show the traceback of an error.",
    )(command)
