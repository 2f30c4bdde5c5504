"""Worker processes of this machine."""

from __future__ import annotations

import multiprocessing
import signal
from collections.abc import Callable, Iterator
from concurrent.futures import BrokenExecutor, Executor, Future, ProcessPoolExecutor
from contextlib import contextmanager
from typing import Any

from robustrm._checks import check_count


class Workers(Executor):
    """Processes of this machine, which are started anew when one of them is lost.

    A process pool of the standard library takes no more work once a worker has died, so that a
    block could not go out again.

    Parameters
    ----------
    count : int
        Worker processes. Each is a fresh interpreter: the main module must not start work when
        it is imported (``if __name__ == "__main__":``).
    """

    def __init__(self, count: int) -> None:
        self._count = check_count("workers", count)
        self._pool = self._started()

    def _started(self) -> ProcessPoolExecutor:
        # spawned: a fork copies locks that other threads hold
        return ProcessPoolExecutor(
            self._count,
            mp_context=multiprocessing.get_context("spawn"),
            initializer=_leave_interrupts,
        )

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        """Send work out; to new processes when the old ones are broken."""
        try:
            return self._pool.submit(fn, *args, **kwargs)
        except BrokenExecutor:
            self._pool.shutdown(wait=False, cancel_futures=True)
            self._pool = self._started()
            return self._pool.submit(fn, *args, **kwargs)

    def shutdown(self, wait: bool = True, *, cancel_futures: bool = False) -> None:
        """End the processes, after the work that they have begun."""
        self._pool.shutdown(wait=wait, cancel_futures=cancel_futures)


def _leave_interrupts() -> None:
    """Leave the keyboard to the process that was started by hand; it ends the others."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)


@contextmanager
def workers(count: int | None) -> Iterator[Executor | None]:
    """Give so many worker processes, or None for none or one: this process does the work.

    Parameters
    ----------
    count : int or None

    Yields
    ------
    Executor or None
    """
    if count is None or check_count("workers", count) == 1:
        yield None
        return
    with Workers(count) as executor:
        try:
            yield executor
        except BaseException:
            executor.shutdown(cancel_futures=True)
            raise
