"""Estimators that a user brings: what they must do before anything is resampled."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np

from robustrm._checks import check_names
from robustrm.errors import ArgumentError
from robustrm.ties import Floats

Estimator = Callable[[Floats], Floats]

_FORM = "Work on the last two axes: subjects on axis -2, occasions as y[..., j]."


def quiet(argument: str, estimator: Estimator) -> Estimator:
    """Return the estimator with float arrays as answers and without NumPy's warnings.

    A resample may well hold one subject n times, and divide by its spread of zero. That is told
    by a note, not by a warning.
    """
    if not callable(estimator):
        raise ArgumentError(f"`{argument}` must be a function of an array, got {estimator!r}.")

    def called(y: Floats) -> Floats:
        with np.errstate(all="ignore"):
            return np.asarray(estimator(y), dtype=np.float64)

    return called


def checked_estimates(
    argument: str, estimator: Estimator, y: Floats, m: int | None = None
) -> Floats:
    """Return the estimates (m,) of a sample (n, k) by an estimator that takes many at once.

    Parameters
    ----------
    argument : str
        The caller's name for the estimator.
    estimator : callable
        Maps (..., n, k) to (..., m), from :func:`quiet`.
    y : array (n, k)
        The sample.
    m : int, optional
        How many estimates there must be.

    Raises
    ------
    ArgumentError
        When the estimator does not give (m,), does not work on leading axes, or gives another
        answer there.
    """
    single = estimator(y)
    if single.ndim != 1 or not single.size or m not in (None, single.size):
        hint = " Add a last axis: result[..., None]." if single.ndim == 0 else f" {_FORM}"
        raise ArgumentError(
            f"`{argument}` must map samples (..., n, k) to (..., {m or 'm'}): shape {y.shape} must "
            f"give ({m or 'm'},), got {single.shape}.{hint}"
        )
    # as many samples as no other axis has, so that a wrong axis shows in the shape
    batch = np.stack([y] * next(b for b in (2, 3, 4) if b not in y.shape))
    batch[1, 0] = y[-1]
    found = _batched(argument, estimator, batch, single.size)
    for one, expected in ((found[0], single), (found[1], estimator(batch[1]))):
        if not np.allclose(one, expected, rtol=1e-9, atol=1e-12, equal_nan=True):
            raise ArgumentError(
                f"`{argument}` must give a sample the same estimates alone and among others, got "
                f"{expected.tolist()} alone and {one.tolist()} among others. {_FORM}"
            )
    return single


def _batched(argument: str, estimator: Estimator, batch: Floats, m: int) -> Floats:
    wanted = (len(batch), m)
    rule = (
        f"`{argument}` must map samples (..., n, k) to (..., m): shape {batch.shape} must give "
        f"{wanted}"
    )
    try:
        found = estimator(batch)
    except Exception as error:
        raise ArgumentError(f"{rule}, got {type(error).__name__}: {error}. {_FORM}") from error
    if found.shape != wanted:
        raise ArgumentError(f"{rule}, got {found.shape}. {_FORM}")
    return found


def checked_finite(argument: str, estimates: Floats, names: Sequence[str]) -> Floats:
    """Return estimates that are all finite, or say which is not."""
    for name, value in zip(names, estimates.tolist(), strict=True):
        if not np.isfinite(value):
            raise ArgumentError(
                f"`{argument}` must give finite numbers for the observed values, got {value} for "
                f"{name!r}. Choose an estimand that is defined for them."
            )
    return estimates


def estimand_names(names: Sequence[str] | None, m: int) -> tuple[str, ...]:
    """Return one name for each of m estimands."""
    if names is None:
        return ("estimate",) if m == 1 else tuple(f"estimate {j + 1}" for j in range(m))
    found = check_names("names", names)
    if len(found) != m:
        raise ArgumentError(
            f"`names` must hold one name for each of the {m} estimates, got {len(found)}."
        )
    return found
