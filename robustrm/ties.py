"""What counts as equal: order of values, sizes of differences and ratios, without float noise.

Measured values come in whole multiples of a reporting step (0.01 mg/L, say). Comparing
those multiples, as integers, makes 0.525 − 0.5 equal to 0.825 − 0.8 and every exact
doubling the same ratio. Only data derived by arithmetic (averages of replicates, say)
fall back to merging values closer than 1e-10 of the largest.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

MERGE = 1e-10
_LARGEST_INTEGER = 2**53
_MOST_UNITS = 10**12


def decimal_step(values: Floats) -> Fraction | None:
    """Return the finest decimal place among `values` (by their shortest text), or None.

    None means that the values have more than 12 digits, as computed numbers have.

    Examples
    --------
    >>> decimal_step(np.array([0.25, 3.0, 12.5]))
    Fraction(1, 100)
    """
    finite = values[np.isfinite(values)]
    if not finite.size:
        return None
    places = max(_places(value) for value in finite.tolist())
    step = Fraction(1, 10**places) if places > 0 else Fraction(1)
    # more digits than any instrument reports are the noise of a computation
    digits = Fraction(float(np.max(np.abs(finite)))) / step
    return step if digits < _MOST_UNITS else None


def _places(value: float) -> int:
    exponent = Decimal(repr(value)).normalize().as_tuple().exponent
    return -exponent if isinstance(exponent, int) else 0


def _fits(values: Floats, step: Fraction) -> bool:
    largest = Fraction(float(np.max(np.abs(values)))) / step
    return largest < _LARGEST_INTEGER


def step_units(values: Floats, step: Fraction) -> Ints | None:
    """Return `values` as whole multiples of `step` (missing cells 0), or None if too large."""
    present = np.isfinite(values)
    if present.any() and not _fits(values[present], step):
        return None
    units = np.zeros(values.shape, dtype=np.int64)
    units[present] = [round(Fraction(Decimal(repr(v))) / step) for v in values[present].tolist()]
    return units


def rounded_to(values: Floats, measured: Bools, step: Fraction) -> Floats:
    """Return the measured values as the nearest multiples of `step`, others as they are."""
    result = values.copy()
    result[measured] = [
        float(round(Fraction(Decimal(repr(value))) / step) * step)
        for value in values[measured].tolist()
    ]
    return result


def finer_step(step: Fraction, limits: Floats) -> Fraction:
    """Return the largest step of which `step` and every limit are whole multiples."""
    for limit in np.unique(limits[np.isfinite(limits)]).tolist():
        exact = Fraction(Decimal(repr(limit)))
        over = math.lcm(step.denominator, exact.denominator)
        step = Fraction(math.gcd(int(step * over), int(exact * over)), over)
    return step


def merged(values: Floats, tolerance: float) -> Floats:
    """Return `values` with every run closer than `tolerance` set to its smallest member.

    A run is measured from its first member, so a chain of small gaps does not merge
    values that lie far apart. NaN stays NaN.
    """
    flat = values.ravel()
    order = np.argsort(flat, kind="stable")
    result = flat.copy()
    anchor = -math.inf
    for index in order.tolist():
        if math.isnan(flat[index]):
            break
        if flat[index] - anchor > tolerance:
            anchor = flat[index]
        result[index] = anchor
    return result.reshape(values.shape)


def order_codes(values: Floats, units: Ints | None, below: Bools, above: Bools) -> Floats:
    """Return ascending whole codes of the cells, equal where the cells are tied.

    Cells below the (common) lower limit are tied under everything measured, cells above
    the upper limit over everything measured. Missing cells are NaN.
    """
    present = ~np.isnan(values)
    measured = present & ~below & ~above
    codes = np.full(values.shape, np.nan)
    keys = values if units is None else units.astype(np.float64)
    if units is None and measured.any():
        keys = merged(values, MERGE * float(np.max(np.abs(values[measured]))))
    distinct, inverse = np.unique(keys[measured], return_inverse=True)
    codes[measured] = inverse + 1
    codes[below] = 0
    codes[above] = distinct.size + 1
    return codes


def power_of_two(values: Floats) -> float:
    """Return the power of two at the largest magnitude, 1 where all are zero.

    Dividing by it is exact, and keeps the squares of huge and of tiny values within a float.
    """
    largest = float(np.max(np.abs(values), initial=0.0))
    return math.ldexp(1.0, math.frexp(largest)[1] - 1) if largest else 1.0


def centred(values: Floats, units: Ints | None) -> Floats:
    """Return rows (n, k) less their means, times k and in whole units where there are units.

    Without units the rows are in a power of two of their own unit.
    """
    k = values.shape[1]
    if units is not None and int(np.abs(units).max(initial=0)) * 2 * k < _LARGEST_INTEGER:
        return np.asarray(k * units - units.sum(axis=1, keepdims=True), dtype=np.float64)
    unit = values / power_of_two(values)
    scores = np.asarray(unit - unit.mean(axis=1, keepdims=True))
    largest = float(np.max(np.abs(scores), initial=0.0))
    noise = 4 * float(np.finfo(float).eps * np.max(np.abs(unit), initial=0.0))
    scores[np.abs(scores) <= noise] = 0.0
    return merged(scores, max(MERGE * largest, noise))


@dataclass(frozen=True, slots=True)
class Differences:
    """Paired differences (or log ratios), with their sizes compared exactly.

    Parameters
    ----------
    values : array (m,)
        second − first on the table's scale.
    sizes : array (m,) of int
        Codes of the absolute differences: 0 for no difference, equal where tied.
    signs : array (m,) of int
        −1, 0 or 1.
    unknown : array (m,) of bool
        Both members lie beyond the same limit: the difference is unknown, not zero.
    scores : array (m,)
        Numbers proportional to `values`: whole multiples of the step where there are such.
    """

    values: Floats
    sizes: Ints
    signs: Ints
    unknown: Bools
    scores: Floats

    def __post_init__(self) -> None:
        for array in (self.values, self.sizes, self.signs, self.unknown, self.scores):
            array.flags.writeable = False


def differences_of_units(first: Ints, second: Ints, step: Fraction, unknown: Bools) -> Differences:
    """Return differences of whole multiples of `step`: exact, rounded once to float."""
    gaps = [b - a for a, b in zip(first.tolist(), second.tolist(), strict=True)]
    values = np.array([float(gap * step) for gap in gaps])
    sizes = [abs(gap) for gap in gaps]
    return _coded(values, sizes, np.sign(gaps), unknown, scores=np.array(gaps, dtype=np.float64))


def log_ratios_of_units(first: Ints, second: Ints, unknown: Bools) -> Differences:
    """Return log ratios of positive whole multiples, compared as exact fractions.

    The larger over the smaller is reduced to lowest terms before the logarithm is taken,
    so equal ratios give equal floats and swapping the occasions changes the sign alone.
    """
    pairs = list(zip(first.tolist(), second.tolist(), strict=True))
    sizes = [Fraction(max(a, b), min(a, b)) for a, b in pairs]
    signs = np.sign(second - first)
    values = signs * np.array([_log(size) for size in sizes])
    return _coded(values, [size - 1 for size in sizes], signs, unknown)


def _log(ratio: Fraction) -> float:
    return (
        math.log(ratio.numerator) - math.log(ratio.denominator)
        if ratio > 2
        else math.log1p(float(ratio - 1))
    )


def differences_of_floats(first: Floats, second: Floats, unknown: Bools) -> Differences:
    """Return differences of derived values; sizes closer than 1e-10 of the largest are tied."""
    gaps = second - first
    if not gaps.size:
        return _coded(gaps, [], np.zeros(0), unknown)
    noise = 4 * np.finfo(float).eps * max(np.max(np.abs(first)), np.max(np.abs(second)))
    tolerance = max(MERGE * float(np.max(np.abs(gaps))), float(noise))
    gaps = np.where(np.abs(gaps) <= tolerance, 0.0, gaps)
    sizes = merged(np.abs(gaps), tolerance)
    scores = gaps / power_of_two(gaps)
    return _coded(gaps, sizes.tolist(), np.sign(gaps), unknown, scores=scores)


def _coded(
    values: Floats,
    sizes: list[int] | list[Fraction] | list[float],
    signs: NDArray[np.floating] | Ints,
    unknown: Bools,
    *,
    scores: Floats | None = None,
) -> Differences:
    code = {size: index + 1 for index, size in enumerate(sorted({s for s in sizes if s != 0}))}
    values = np.asarray(values, dtype=np.float64)
    return Differences(
        values=values,
        sizes=np.array([code.get(size, 0) for size in sizes], dtype=np.int64),
        signs=np.asarray(signs, dtype=np.int64),
        unknown=np.asarray(unknown, dtype=np.bool_).copy(),
        scores=values if scores is None else scores,
    )
