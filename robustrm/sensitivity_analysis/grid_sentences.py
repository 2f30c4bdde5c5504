"""What a specification grid says, in words that its numbers bear."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING

from robustrm._format import counted, listing, number, p_phrase, p_range, percent
from robustrm.results import Note
from robustrm.sensitivity_analysis.branches import differing
from robustrm.sensitivity_analysis.specifications import Specified

if TYPE_CHECKING:
    import pandas as pd

_NAMES = {
    "replicates": "the replicate rule",
    "scale": "the scale",
    "test": "the test",
    "trim": "the share",
    "substitute": "the substitute",
    "missing": "the missing rule",
    "outliers": "pulling in outliers",
}

_NULL = (
    "The null hypothesis is that every order of a subject's values over the occasions is equally "
    "likely. A small P does not say which specification is right."
)


def sentences(
    frame: pd.DataFrame,
    *,
    grid_p: float,
    interval: tuple[float, float],
    median: float,
    alpha: float,
    draws: int,
) -> tuple[str, ...]:
    """Return what the grid says; no sentence reads one specification against another."""
    low, high = interval
    whole = "The one specification of the grid"
    if len(frame) > 1:
        whole = f"All {len(frame)} specifications tested together by one permutation test"
    together = (
        f"{whole}: "
        f"{p_phrase(grid_p)} ({draws:,} rearranged tables; 99% Monte Carlo interval "
        f"{number(low)} to {number(high)})"
    )
    if len(frame) == 1:
        return (f"{together}.", *_estimates(frame), _NULL)
    together += f", for a median {p_phrase(median)} over the specifications, each counted once."
    below = int((frame["p"] <= alpha).sum())
    spread = (
        f"Taken one by one they range over {_range(frame)}; {below} of {len(frame)} "
        f"({percent(below / len(frame))}) lie at or below {alpha:g}. This share has no P of "
        "its own and decides nothing."
    )
    return (together, spread, *_estimates(frame), _NULL)


def _range(frame: pd.DataFrame) -> str:
    return p_range(float(frame["p"].min()), float(frame["p"].max()))


def _estimates(frame: pd.DataFrame) -> Iterator[str]:
    """Yield the range of the estimates on each scale; ratios and differences stay apart."""
    for scale, name, neutral in (("log", "ratio", 1.0), ("raw", "difference", 0.0)):
        known = frame.loc[frame["estimate_scale"] == scale, "estimate"].dropna()
        if not len(known):
            continue
        sides = {(value > neutral) - (value < neutral) for value in known.tolist()}
        side = (
            "all on the same side of no change"
            if len(sides) == 1
            else "on both sides of, or at, no change"
        )
        yield (
            f"The {name} between the occasions of the last planned comparison is "
            f"{number(float(known.min()))} to {number(float(known.max()))} over "
            f"{counted(len(known), 'specification')} that estimate it on this scale, {side}."
        )


def collapse_note(found: Sequence[Specified], declared: int) -> tuple[Note, ...]:
    """Say which declared branches coincide for these data, and in what they differ."""
    computed = sum(len(each.branches) for each in found)
    if computed == len(found):
        return ()
    idle = [
        f"{_NAMES[name]} ({_share(found, name)})"
        for name in _NAMES
        if any(name in differing(each.branches) for each in found)
    ]
    fact = (
        f"{computed} of {declared} declared branches give {len(found)} different specifications "
        "for these data. Branches coincide that differ only in "
        f"{listing(idle, 9)}; in brackets, in how many specifications."
    )
    return (
        Note(
            "branches coincide",
            fact,
            "Each different specification counts once in the median.",
        ),
    )


def _share(found: Sequence[Specified], name: str) -> str:
    count = sum(name in differing(each.branches) for each in found)
    return f"{count} of {len(found)}"
