"""Work sent out in blocks: to this process, to other ones, or to a cluster."""

from __future__ import annotations

import itertools
import os
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import (
    FIRST_COMPLETED,
    BrokenExecutor,
    CancelledError,
    Executor,
    Future,
    wait,
)
from typing import Protocol, TypeVar

from robustrm.errors import ArgumentError, LostWorkError
from robustrm.work.kept import Block, Kept, checked_block

Progress = Callable[[int, int], object]

# Times that a block whose worker was lost goes out again.
RETRIES = 3
# Blocks that are out at once: enough for every worker, and no more than the memory holds.
AHEAD = 256
# Seconds between two looks at a keyboard interrupt, where waiting itself cannot be interrupted.
_LOOK = 1.0


class Job(Protocol):
    """What one block is computed from: picklable, such as a frozen dataclass."""

    @property
    def key(self) -> str:
        """Name everything that decides the result: design, data (their digest), options, seed."""


JobT = TypeVar("JobT", bound=Job)


def run_blocks(
    function: Callable[[JobT], Block],
    jobs: Sequence[JobT],
    *,
    executor: Executor | None = None,
    resume: str | os.PathLike[str] | None = None,
    progress: Progress | None = None,
) -> list[Block]:
    """Run a function on every job and give its blocks in the order of the jobs.

    Parameters
    ----------
    function : callable
        Module-level function that makes a block, a dictionary of arrays without Python objects,
        from a job, and from nothing else: no state, no clock, random numbers by the job's streams.
    jobs : sequence of Job
        Each with a `key` of its own. Large data belong into the job as arrays; only `AHEAD` of
        them are out at a time.
    executor : concurrent.futures.Executor, optional
        Where the blocks are computed; None computes them here, one after the other. It is left
        open. The result does not depend on it.
    resume : path, optional
        Folder for finished blocks. What is found there is not computed again. The key of a job,
        the name of the function and the versions of robustrm, NumPy and SciPy must be the same.
    progress : callable, optional
        Called with (blocks done, blocks), in this thread.

    Returns
    -------
    list of dict
        A block for each job.

    Raises
    ------
    ArgumentError
        When two jobs share a key.
    LostWorkError
        When a block was lost with its worker `RETRIES` + 1 times, or the executor is broken. What
        was finished is kept where `resume` is given.

    Notes
    -----
    An error of the function stops the run, and so does a keyboard interrupt: what is not begun is
    cancelled, what is finished is kept. A block whose worker dies goes out again, here where the
    executor takes more work; a cluster does so itself.

    Examples
    --------
    >>> from dataclasses import dataclass
    >>> import numpy as np
    >>> @dataclass(frozen=True)
    ... class Square:
    ...     side: int
    ...
    ...     @property
    ...     def key(self):
    ...         return f"side {self.side}"
    >>> def area(job):
    ...     return {"area": np.array(job.side**2)}
    >>> [int(block["area"]) for block in run_blocks(area, [Square(2), Square(3)])]
    [4, 9]
    """
    keys = _distinct_keys(jobs)
    kept = None if resume is None else Kept(resume, function)
    found: dict[int, Block] = {}
    for place, key in enumerate(keys):
        block = None if kept is None else kept.get(key)
        if block is not None:
            found[place] = block
    if progress is not None and found:
        progress(len(found), len(keys))
    wanted = [place for place in range(len(keys)) if place not in found]
    for place, block in _computed(function, jobs, wanted, executor):
        found[place] = block
        if kept is not None:
            kept.put(keys[place], block)
        if progress is not None:
            progress(len(found), len(keys))
    return [found[place] for place in range(len(keys))]


def _distinct_keys(jobs: Sequence[Job]) -> list[str]:
    """Return the keys, refused when two jobs share one."""
    keys: dict[str, None] = {}
    for job in jobs:
        if job.key in keys:
            raise ArgumentError(f"`jobs` must each have a key of their own, got {job.key!r} twice.")
        keys[job.key] = None
    return list(keys)


def _computed(
    function: Callable[[JobT], Block],
    jobs: Sequence[JobT],
    wanted: Sequence[int],
    executor: Executor | None,
) -> Iterator[tuple[int, Block]]:
    """Give the blocks of the wanted jobs as they are finished."""
    if executor is None:
        for place in wanted:
            yield place, checked_block(function(jobs[place]))
        return
    waiting = iter(wanted)
    lost = dict.fromkeys(wanted, 0)
    out: dict[Future[Block], int] = {}
    try:
        for place in itertools.islice(waiting, AHEAD):
            out[_sent(executor, function, jobs[place])] = place
        while out:
            done, _ = wait(out, timeout=_LOOK, return_when=FIRST_COMPLETED)
            for future in done:
                place = out.pop(future)
                try:
                    block = future.result()
                except (BrokenExecutor, CancelledError) as error:
                    lost[place] += 1
                    if lost[place] > RETRIES:
                        raise LostWorkError(_lost(jobs[place].key, lost[place])) from error
                    out[_sent(executor, function, jobs[place])] = place
                    continue
                yield place, checked_block(block)
                following = next(waiting, None)
                if following is not None:
                    out[_sent(executor, function, jobs[following])] = following
    finally:
        # reached on an error and a keyboard interrupt too: nothing new is begun
        for future in out:
            future.cancel()


def _sent(executor: Executor, function: Callable[[JobT], Block], job: JobT) -> Future[Block]:
    try:
        return executor.submit(function, job)
    except BrokenExecutor as error:
        raise LostWorkError(
            "The executor lost a worker and takes no more work. Run again with a new one; blocks "
            "that were finished are kept where `resume` names a folder."
        ) from error


def _lost(key: str, times: int) -> str:
    return (
        f"The block {key!r} was lost with its worker {times} times, as when memory runs out. Give "
        "fewer workers or a smaller block; blocks that were finished are kept where `resume` names "
        "a folder."
    )
