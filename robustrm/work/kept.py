"""Finished blocks kept in a folder, so that an interrupted run goes on where it stopped.

A block is a file named by the digest of all that decides its content: the function, the key of the
job, and the versions that computed it. It holds arrays without Python objects, so that reading it
runs no code. It is written aside and moved into place, so that it is whole or not there at all.
"""

from __future__ import annotations

import functools
import hashlib
import os
import uuid
import zipfile
from collections.abc import Callable, Mapping
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

Block = dict[str, NDArray[Any]]


def checked_block(value: object) -> Block:
    """Return what a function gave for a job, refused when it could not be kept.

    Raises
    ------
    TypeError
        When it is not a dictionary of arrays without objects: an error of the caller.
    """
    if not isinstance(value, Mapping):
        raise TypeError(f"A block must be a dictionary of arrays, got {type(value).__name__}.")
    found = {str(name): np.asarray(array) for name, array in value.items()}
    held = [name for name, array in found.items() if array.dtype.hasobject]
    if held:
        raise TypeError(f"A block must hold arrays without objects, got objects in {held[0]!r}.")
    return found


class Kept:
    """The folder of finished blocks of one function.

    Parameters
    ----------
    folder : path
        Made when it is not there. Several runs may share it, at the same time too.
    function : callable
        Module-level function that makes a block from a job.
    """

    def __init__(self, folder: str | os.PathLike[str], function: Callable[..., object]) -> None:
        self.folder = Path(folder)
        self.folder.mkdir(parents=True, exist_ok=True)
        self._name = f"{function.__module__}.{function.__qualname__}"

    def path(self, key: str) -> Path:
        """Return the file of a job."""
        told = "\n".join([*_versions(), self._name, key])
        return self.folder / f"{hashlib.sha256(told.encode()).hexdigest()[:40]}.npz"

    def get(self, key: str) -> Block | None:
        """Return a finished block, None when it is not there or cannot be read."""
        try:
            # opened here: a broken archive must not leave the file open
            with self.path(key).open("rb") as file, np.load(file, allow_pickle=False) as arrays:
                return {name: arrays[name] for name in arrays.files}
        except (OSError, ValueError, EOFError, zipfile.BadZipFile):
            return None

    def put(self, key: str, block: Block) -> None:
        """Keep a finished block."""
        target = self.path(key)
        draft = target.with_name(f".{target.stem}-{uuid.uuid4().hex}.part")
        try:
            with draft.open("wb") as file:
                # by a dictionary, because a keyword `file` is an argument of savez
                np.savez(file, **block)  # type: ignore[arg-type]  # arrays by name
            draft.replace(target)
        finally:
            draft.unlink(missing_ok=True)


@functools.cache
def _versions() -> tuple[str, ...]:
    """Name what computed a block: another version's digits may differ."""
    return tuple(f"{name} {version(name)}" for name in ("robustrm", "numpy", "scipy"))
