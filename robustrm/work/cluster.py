"""A cluster that is already there: blocks go to its workers."""

from __future__ import annotations

from collections.abc import Iterator
from concurrent.futures import Executor
from contextlib import contextmanager

from robustrm.errors import ArgumentError, RobustrmError

# Times that the scheduler sends a block out again whose worker was lost.
_RETRIES = 5
_SECONDS = 30


@contextmanager
def cluster(address: str | None) -> Iterator[Executor | None]:
    """Give the workers of a Dask cluster, or None without an address.

    Parameters
    ----------
    address : str or None
        Address of the scheduler, as ``tcp://10.0.0.5:8786``. Its workers must have the same
        version of this package.

    Yields
    ------
    Executor or None
        A block whose worker is lost goes to another one; the scheduler sees to it.

    Raises
    ------
    RobustrmError
        Without the extra ``robustrm[cluster]``.
    ArgumentError
        When nothing answers at the address.
    """
    if address is None:
        yield None
        return
    try:
        from distributed import Client
    except ImportError:
        raise RobustrmError(
            "A cluster needs dask[distributed], which is not installed. Install "
            "robustrm[cluster], or use worker processes of this machine."
        ) from None
    try:
        client = Client(address, timeout=_SECONDS, set_as_default=False)
    except (OSError, ValueError, TimeoutError) as error:
        raise ArgumentError(
            f"`scheduler` must be the address of a running cluster, got {address!r}, where nothing "
            f"answers ({type(error).__name__}). Write it as tcp://HOST:8786."
        ) from None
    with client:
        yield client.get_executor(retries=_RETRIES, pure=False)
