"""Draws data sets by a stated design, many at once.

The value of subject i on occasion j = 0, …, k−1 is

    y_ij = between_sd · b_i + slope_sd · u_i · j + within_sd · spread_j · e_ij + shift_j,

b_i and u_i independent standard normal. The errors e_ij have mean 0 and variance 1 (see `ERRORS`),
independent, or with serial correlation: e_i0 = z_i0 and e_ij = ρ e_i,j−1 + √(1−ρ²) z_ij, z standard
by the same law, so that the variance stays 1 and a symmetric law stays symmetric. Where the name
of the errors begins with "log", the marker is exp(y): shifts are log ratios and the SDs are those
of the logarithms. With `stretch`, the value that is recorded is

    stretch_j · (marker_ij − c),

c being the 20% trimmed mean of the law of the marker, the same on every occasion: trimmed means
are equal, spreads are not, and where the law is skewed neither are the means. With `limit`, the
cells of a data set below that quantile of its n·k values are set to the quantile and so tied, as
values below a limit of detection are.

Data sets come in blocks of `BLOCK`, and each block has a stream of its own: what is drawn does not
depend on how many are asked for at once, in which order or by whom.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal, get_args
from zlib import crc32

import numpy as np
from numpy.typing import NDArray
from scipy import special

from robustrm._checks import check_choice, check_count, check_finite
from robustrm.errors import ArgumentError

Floats = NDArray[np.float64]
Errors = Literal["normal", "t3", "contaminated", "skewed", "lognormal", "log-t3"]
Shape = tuple[int, ...]

# Data sets that share a stream.
BLOCK = 100
# Share trimmed at each end, where a law is centred at its trimmed mean.
TRIM = 0.2


def _normal(rng: np.random.Generator, shape: Shape) -> Floats:
    """Draw from the standard normal law."""
    return rng.standard_normal(shape)


def _t3(rng: np.random.Generator, shape: Shape) -> Floats:
    """Draw Student's t on 3 degrees of freedom over its SD √3."""
    return np.asarray(rng.standard_t(3, shape) / math.sqrt(3))


def _contaminated(rng: np.random.Generator, shape: Shape) -> Floats:
    """Draw normal errors, one in ten of SD 3 (Tukey 1960), over √(0.9 + 0.1·9)."""
    widened = np.where(rng.random(shape) < 0.1, 3.0, 1.0)
    return np.asarray(widened * rng.standard_normal(shape) / math.sqrt(1.8))


def _skewed(rng: np.random.Generator, shape: Shape) -> Floats:
    """Draw standard exponential errors less their mean 1: skewness 2."""
    return np.asarray(rng.standard_exponential(shape) - 1)


ERRORS: dict[str, Callable[[np.random.Generator, Shape], Floats]] = {
    "normal": _normal,
    "t3": _t3,
    "contaminated": _contaminated,
    "skewed": _skewed,
    "lognormal": _normal,
    "log-t3": _t3,
}
SYMMETRIC = ("normal", "t3", "contaminated")


@dataclass(frozen=True, slots=True, kw_only=True)
class Design:
    """What the data sets are drawn by; the formula is in the docstring of this file.

    Parameters
    ----------
    n, k : int
        Subjects and occasions.
    errors : str, default "normal"
        One of `ERRORS`: law of the errors, on the log scale for names that begin with "log".
    between_sd, within_sd : float, default 1.0
        SD of the subjects' levels and of the errors.
    rho : float, default 0.0
        Correlation of neighbouring errors of a subject, AR(1).
    slope_sd : float, default 0.0
        SD between subjects of the change from one occasion to the next.
    spread : tuple of float, default ()
        Relative SD of the errors on each occasion; empty for equal.
    shift : tuple of float, default ()
        What is added on each occasion; empty for nothing.
    limit : float, default 0.0
        Share of each data set's cells below the limit, in [0, 1).
    stretch : tuple of float, default ()
        Factor of each occasion's whole values, subjects' levels included, about their common
        trimmed mean; empty for none. Asks for occasions that are alike before, and for errors that
        are symmetric or lognormal.

    Raises
    ------
    ArgumentError
        When a value breaks its rule.
    """

    n: int
    k: int
    errors: Errors = "normal"
    between_sd: float = 1.0
    within_sd: float = 1.0
    rho: float = 0.0
    slope_sd: float = 0.0
    spread: tuple[float, ...] = ()
    shift: tuple[float, ...] = ()
    limit: float = 0.0
    stretch: tuple[float, ...] = ()

    def __post_init__(self) -> None:
        check_count("n", self.n)
        check_count("k", self.k, least=2)
        check_choice("errors", self.errors, get_args(Errors))
        for name in ("between_sd", "within_sd", "slope_sd"):
            if check_finite(name, getattr(self, name)) < 0:
                raise ArgumentError(f"`{name}` must be at least 0, got {getattr(self, name)!r}.")
        if not -1 < self.rho < 1:
            raise ArgumentError(f"`rho` must be in (-1, 1), got {self.rho!r}.")
        if not 0 <= self.limit < 1:
            raise ArgumentError(
                f"`limit` must be a share of the cells in [0, 1), got {self.limit!r}."
            )
        for name in ("spread", "shift", "stretch"):
            self._check_occasions(name, positive=name != "shift")
        if self.stretch:
            self._check_stretch()

    def _check_occasions(self, name: str, *, positive: bool) -> None:
        """Refuse a list that is not one finite number for each occasion."""
        values = getattr(self, name)
        if len(values) not in (0, self.k):
            raise ArgumentError(
                f"`{name}` must have one number for each of the {self.k} occasions, "
                f"got {len(values)}."
            )
        if not all(math.isfinite(value) for value in values):
            raise ArgumentError(f"`{name}` must hold finite numbers, got {values!r}.")
        if positive and any(value <= 0 for value in values):
            raise ArgumentError(f"`{name}` must hold positive numbers, got {values!r}.")

    def _check_stretch(self) -> None:
        """Refuse to stretch where the occasions have no common trimmed mean that is known."""
        if self.shift or self.spread or self.slope_sd:
            raise ArgumentError(
                "`stretch` asks for occasions that are alike before: leave `shift`, `spread` and "
                f"`slope_sd` at their default, got {self.key}."
            )
        if self.errors not in (*SYMMETRIC, "lognormal"):
            raise ArgumentError(
                "`stretch` needs the trimmed mean of the law, which is known for "
                f"{', '.join(SYMMETRIC)} and lognormal errors, got {self.errors!r}."
            )

    @property
    def key(self) -> str:
        """What names the streams: the fields that are not at their default."""
        chosen = [
            f"{field.name}={getattr(self, field.name)!r}"
            for field in dataclasses.fields(self)
            if getattr(self, field.name) != field.default
        ]
        return ", ".join(chosen)

    @property
    def correlation(self) -> str:
        """How a subject's values hang together, in words."""
        parts = []
        if self.rho:
            parts.append(f"AR(1) {self.rho:g}")
        if self.slope_sd:
            parts.append(f"slopes {self.slope_sd:g}")
        return " and ".join(parts) or "exchangeable"

    @property
    def trimmed_centre(self) -> float:
        """The 20% trimmed mean of the law of one cell, about which `stretch` stretches."""
        if self.errors in SYMMETRIC:
            return 0.0
        return lognormal_trimmed_mean(0.0, math.hypot(self.between_sd, self.within_sd))

    @property
    def equal_centres(self) -> bool:
        """Whether no occasion is shifted against another."""
        return len(set(self.shift)) <= 1

    @property
    def exchangeable(self) -> bool:
        """Whether permuting a subject's values over the occasions leaves their law unchanged."""
        unequal = any(len(set(factors)) > 1 for factors in (self.spread, self.stretch))
        return self.equal_centres and not (unequal or self.rho or self.slope_sd)

    @property
    def symmetric(self) -> bool:
        """Whether a subject's contrasts are distributed symmetrically about their centres."""
        return self.errors in SYMMETRIC and not self.limit


def lognormal_trimmed_mean(centre: float, sd: float, *, trim: float = TRIM) -> float:
    """Return the trimmed mean of the law of exp(centre + sd·Z), Z standard normal.

    The mean of exp(centre + sd·Z) over |Z| < q = Φ⁻¹(1 − trim), in closed form: completing the
    square in ∫ exp(sd·z) φ(z) dz gives exp(sd²/2) [Φ(q − sd) − Φ(−q − sd)].
    """
    q = special.ndtri(1 - trim)
    share = special.ndtr(q - sd) - special.ndtr(-q - sd)
    return math.exp(centre + sd**2 / 2) * float(share) / (1 - 2 * trim)


def stream(root: int, name: str, *spawn: int) -> np.random.Generator:
    """Return the generator of a name and of whole numbers that count within it."""
    key = (crc32(name.encode()), *spawn)
    return np.random.default_rng(np.random.SeedSequence(root, spawn_key=key))


def draw_block(design: Design, block: int, *, seed: int) -> Floats:
    """Draw one block of data sets.

    Parameters
    ----------
    design : Design
    block : int
        Which block, from 0.
    seed : int
        Root of all streams.

    Returns
    -------
    ndarray, shape (BLOCK, n, k)
    """
    rng = stream(seed, f"data: {design.key}", block)
    occasion = np.arange(design.k)
    level = design.between_sd * rng.standard_normal((BLOCK, design.n, 1))
    slope = design.slope_sd * rng.standard_normal((BLOCK, design.n, 1))
    within = design.within_sd * np.array(design.spread or (1.0,) * design.k)
    shift = np.array(design.shift or (0.0,) * design.k)
    values = level + slope * occasion + within * _errors(design, rng) + shift
    if design.errors.startswith("log"):
        values = np.exp(values)
    if design.stretch:
        values = np.array(design.stretch) * (values - design.trimmed_centre)
    return _above_limit(values, design.limit) if design.limit else values


def draw(design: Design, datasets: int, *, seed: int, start: int = 0) -> Floats:
    """Draw data sets number `start` to `start` + `datasets` − 1 of a design.

    Parameters
    ----------
    design : Design
    datasets : int
        How many.
    seed : int
        Root of all streams.
    start : int, default 0
        Number of the first.

    Returns
    -------
    ndarray, shape (datasets, n, k)

    Examples
    --------
    >>> design = Design(n=6, k=3, errors="lognormal", within_sd=0.5)
    >>> values = draw(design, 250, seed=1)
    >>> values.shape, bool((draw(design, 50, seed=1, start=180) == values[180:230]).all())
    ((250, 6, 3), True)
    """
    check_count("datasets", datasets)
    first, last = start // BLOCK, (start + datasets - 1) // BLOCK
    blocks = [draw_block(design, block, seed=seed) for block in range(first, last + 1)]
    skipped = start - first * BLOCK
    return np.concatenate(blocks)[skipped : skipped + datasets]


def _errors(design: Design, rng: np.random.Generator) -> Floats:
    """Draw errors of mean 0 and variance 1, (BLOCK, n, k), with serial correlation where asked."""
    errors = ERRORS[design.errors](rng, (BLOCK, design.n, design.k))
    if design.rho:
        rest = math.sqrt(1 - design.rho**2)
        for j in range(1, design.k):
            errors[..., j] = design.rho * errors[..., j - 1] + rest * errors[..., j]
    return errors


def _above_limit(values: Floats, share: float) -> Floats:
    """Set what lies below the quantile of a data set's cells to the quantile."""
    cells = values.reshape(len(values), -1)
    return np.maximum(values, np.quantile(cells, share, axis=1)[:, None, None])
