"""What commands show alike: examples of a help page, JSON, and progress on stderr."""

from __future__ import annotations

import inspect
import json
import sys
import textwrap
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from typing import Any

import click

Progress = Callable[[int, int], None]

json_option = click.option("--json", "as_json", is_flag=True, help="Print JSON instead of text.")


def examples(text: str) -> str:
    """Return the last paragraph of a help page, its lines kept as they are."""
    lines = textwrap.indent(inspect.cleandoc(text), "  ")
    return f"\b\nExample:\n{lines}"


def echo_json(content: Mapping[str, Any]) -> None:
    """Print plain values as JSON."""
    click.echo(json.dumps(content, allow_nan=False, ensure_ascii=False, indent=2))


@contextmanager
def progress_bar(quiet: bool, label: str = "analyzing") -> Iterator[Progress | None]:
    """Give a callable that draws a bar on stderr, where somebody is looking."""
    if quiet or not sys.stderr.isatty():
        yield None
        return
    with click.progressbar(length=1, label=label, file=sys.stderr) as bar:

        def show(done: int, total: int) -> None:
            bar.length = total
            bar.update(done - bar.pos)

        yield show
