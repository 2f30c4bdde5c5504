"""Effect sizes of two occasions and of all: what stands beside a p value, by kind of estimand.

direction, ranks, location, standardized (robust and parametric), all_occasions; `assembly` calls
them for an analysis.
"""

from robustrm.methods.effects.all_occasions import kendall_w, relative_effects
from robustrm.methods.effects.assembly import effect_sizes
from robustrm.methods.effects.direction import Directions, directions, probability_of_fall
from robustrm.methods.effects.effect import NOT_GIVEN, Effect
from robustrm.methods.effects.location import (
    geometric_mean_ratio,
    median_difference,
    percent_change,
)
from robustrm.methods.effects.ranks import rank_biserial
from robustrm.methods.effects.standardized import (
    robust_standardized_difference,
    standardized_mean_difference,
)

__all__ = [
    "NOT_GIVEN",
    "Directions",
    "Effect",
    "directions",
    "effect_sizes",
    "geometric_mean_ratio",
    "kendall_w",
    "median_difference",
    "percent_change",
    "probability_of_fall",
    "rank_biserial",
    "relative_effects",
    "robust_standardized_difference",
    "standardized_mean_difference",
]
