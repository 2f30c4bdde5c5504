"""Shape of samples by averages of their outer and inner parts, and spread against level."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import special

Floats = NDArray[np.float64]

OUTER = 0.05
"""Share of a sample in each outer part."""


def upper_average(ordered: Floats, share: float) -> Floats:
    """Return U(share), the average of the largest n · share values of sorted samples (..., n).

    Where n · share is not whole, the next value counts by the fraction. Hogg, Fisher & Randles
    (1975) J Am Stat Assoc 70:656-661.
    """
    n = ordered.shape[-1]
    # weight of each value, largest last: 1 inside, the fraction at the border, 0 beyond
    weights = np.clip(n * share - np.arange(n)[::-1], 0.0, 1.0)
    return np.asarray((ordered * weights).sum(axis=-1) / (n * share))


def tail_weight(y: Floats) -> Floats:
    """Return Hogg's Q = (U(.05) − L(.05)) / (U(.5) − L(.5)) of samples (..., n).

    2.58 for a normal law, 1.9 for a uniform one, 3.3 for a double exponential one. NaN where the
    halves do not differ. Hogg (1974) J Am Stat Assoc 69:909-923.
    """
    ordered = np.sort(y, axis=-1)
    mirrored = -ordered[..., ::-1]
    outer = upper_average(ordered, OUTER) + upper_average(mirrored, OUTER)
    inner = upper_average(ordered, 0.5) + upper_average(mirrored, 0.5)
    return _ratio(outer, inner)


def tail_balance(y: Floats) -> Floats:
    """Return Hogg's Q₃ = (U(.05) − M(.5)) / (M(.5) − L(.05)) of samples (..., n).

    M(.5) is the average of the middle half. 1 for a symmetric sample, above 1 for a long upper
    tail. Hogg, Fisher & Randles (1975) J Am Stat Assoc 70:656-661.
    """
    ordered = np.sort(y, axis=-1)
    upper = upper_average(ordered, OUTER)
    lower = -upper_average(-ordered[..., ::-1], OUTER)
    quarter = upper_average(ordered, 0.75) * 0.75 - upper_average(ordered, 0.25) * 0.25
    middle = quarter / 0.5
    return _ratio(upper - middle, middle - lower)


def medcouple(y: Floats) -> float:
    """Return the medcouple of a sample (n,): the median of h(xᵢ, xⱼ) over xᵢ ≥ median ≥ xⱼ.

    h = ((xᵢ − median) − (median − xⱼ)) / (xᵢ − xⱼ), from −1 to 1, 0 when symmetric. Where both
    are the median, of which there are m, h is the sign of i + j − 1 − m for the i-th and j-th of
    them. Brys, Hubert & Struyf (2004) J Comput Graph Stat 13:996-1017.
    """
    centred = np.sort(y) - np.median(y)
    upper, lower = centred[centred >= 0], centred[centred <= 0]
    m = int((centred == 0).sum())
    above, below = upper[:, None], lower[None, :]
    with np.errstate(invalid="ignore"):
        h = (above + below) / (above - below)
    # the medians stand first among the upper values and last among the lower ones
    place = np.arange(1, m + 1)
    h[:m, lower.size - m :] = np.sign(place[:, None] + place[None, :] - 1 - m)
    return float(np.median(h))


def spread_level_slope(level: Floats, spread: Floats) -> float:
    """Return the median slope of log spread on log level over all pairs of subjects, (n,).

    Subjects without spread or with a level that is not positive are left out; NaN below three.
    Slope b suggests the power 1 − b: 0 for values as they are, 1 for logarithms. Tukey (1977),
    Exploratory Data Analysis; median of slopes: Theil (1950), Sen (1968).
    """
    used = (level > 0) & (spread > 0)
    x, y = np.log(level[used]), np.log(spread[used])
    first, second = np.triu_indices(x.size, 1)
    run = x[second] - x[first]
    apart = run != 0
    if x.size < 3 or not apart.any():
        return float("nan")
    return float(np.median((y[second] - y[first])[apart] / run[apart]))


def spread_level_intercept(level: Floats, spread: Floats, slope: float) -> float:
    """Return the median of log spread − slope · log level of the subjects that the slope used."""
    used = (level > 0) & (spread > 0)
    return float(np.median(np.log(spread[used]) - slope * np.log(level[used])))


def normal_positions(n: int) -> Floats:
    """Return the standard normal quantiles at (i − 3/8) / (n + 1/4), i = 1, ..., n.

    Close to the expected order statistics of a normal sample. Blom (1958), Statistical Estimates
    and Transformed Beta-Variables.
    """
    return np.asarray(special.ndtri((np.arange(1, n + 1) - 0.375) / (n + 0.25)))


def quartile_line(y: Floats) -> tuple[float, float]:
    """Return intercept and slope of the line through the quartiles of a sample and the normal law.

    A normal sample lies about it; values far out in the tails do not move it.
    """
    low, high = np.quantile(y, [0.25, 0.75])
    return float((low + high) / 2), float((high - low) / (2 * special.ndtri(0.75)))


def mirrored_distances(ordered: Floats) -> tuple[Floats, Floats]:
    """Return med − x₍ᵢ₎ and x₍ₙ₊₁₋ᵢ₎ − med of a sorted sample (n,), i = 1, ..., ⌊n/2⌋.

    Equal in every pair where the sample is symmetric. Chambers, Cleveland, Kleiner & Tukey (1983),
    Graphical Methods for Data Analysis.
    """
    pairs = ordered.size // 2
    centre = np.median(ordered) if ordered.size else 0.0
    return centre - ordered[:pairs], ordered[::-1][:pairs] - centre


def _ratio(above: Floats, below: Floats) -> Floats:
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(np.where(below > 0, above / below, np.nan))
