"""Where long work is computed, and how it goes on after an interrupt: options of some commands."""

from __future__ import annotations

from collections.abc import Iterator
from concurrent.futures import Executor
from contextlib import contextmanager

import click

from robustrm.cli.options import together
from robustrm.errors import ArgumentError

running_options = together(
    click.option(
        "--workers", type=int, metavar="N", help="Processes of this machine that compute."
    ),
    click.option(
        "--scheduler",
        metavar="ADDRESS",
        help="Workers of a running Dask cluster instead, as tcp://HOST:8786.",
    ),
    click.option(
        "--resume",
        type=click.Path(file_okay=False),
        metavar="FOLDER",
        help="Keep finished blocks here; an interrupted run goes on from them.",
    ),
)


@contextmanager
def elsewhere(workers: int | None, scheduler: str | None) -> Iterator[Executor | None]:
    """Give what computes: worker processes, a cluster, or None for this process."""
    from robustrm.work import cluster
    from robustrm.work import workers as local_workers

    if workers is not None and scheduler is not None:
        raise ArgumentError(
            "One of `--workers` and `--scheduler` must be given, got both. A cluster has workers "
            "of its own."
        )
    with local_workers(workers) as here, cluster(scheduler) as there:
        yield there if scheduler is not None else here
