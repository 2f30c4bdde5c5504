"""What adjusting and the summaries find for their published cases."""

from __future__ import annotations

import functools
from collections.abc import Callable, Iterator

import robustrm as rm
from robustrm.kernels import location
from robustrm.methods.adjusting import adjusted
from robustrm.methods.summary import OccasionSummary, summarize
from tests.reference.cases import Check, case

NAMES = {
    "holm": "holm",
    "hochberg": "hochberg",
    "bh": "bh",
    "hommel_closed_simes": "hommel",
    "bonferroni_sorted": "bonferroni",
    "holm_sorted": "holm",
    "hochberg_sorted": "hochberg",
    "hommel_closed_sorted": "hommel",
    "hommel_statsmodels_sorted": "hommel",
}


def _ascending(name: str, adjustment: str, count: int) -> list[float]:
    """Adjusted p values of a case, ascending; some sources print only the first few."""
    return sorted(adjusted(case(name).data["p"], adjustment))[:count]


def _adjustments() -> Iterator[Check]:
    for name in ("adjust_statsmodels10", "adjust_hommel_closed"):
        for section in ("published", "recomputed"):
            for field, values in case(name).at(section).items():
                find = functools.partial(_ascending, name, NAMES[field], len(values))
                yield Check(name, f"{section}.{field}", find)


@functools.cache
def summary_of(name: str) -> OccasionSummary:
    """Summary of one sample, given on both occasions of a table."""
    sample = case(name).data["x"]
    table = rm.OccasionTable.from_array([[x, x] for x in sample], occasions=["first", "second"])
    return summarize(table)[0]


def _summaries() -> Iterator[Check]:
    dana, chem = "trimmed_dana20", "mad_qn_chem"
    fields: dict[tuple[str, str], Callable[[OccasionSummary], float | None]] = {
        (dana, "published.mean"): lambda s: s.mean,
        (dana, "published.median"): lambda s: s.median,
        (dana, "published.tmean20"): lambda s: s.trimmed_mean,
        (dana, "published.sw2"): lambda s: (s.winsorized_sd or 0) ** 2,
        (dana, "recomputed.n"): lambda s: s.n,
        (dana, "recomputed.mean"): lambda s: s.mean,
        (dana, "recomputed.median"): lambda s: s.median,
        (dana, "recomputed.tmean"): lambda s: s.trimmed_mean,
        (dana, "recomputed.sw2"): lambda s: (s.winsorized_sd or 0) ** 2,
        (chem, "published.mean"): lambda s: s.mean,
        (chem, "published.median"): lambda s: s.median,
        (chem, "published.mad"): lambda s: s.madn,
        (chem, "recomputed.mean"): lambda s: s.mean,
        (chem, "recomputed.median"): lambda s: s.median,
        (chem, "recomputed.mad"): lambda s: s.madn,
    }
    for (name, field), read in fields.items():
        yield Check(name, field, functools.partial(lambda r, n: r(summary_of(n)), read, name))
    yield Check(dana, "recomputed.g", lambda: location.cut(19, 0.2))
    yield Check(dana, "recomputed.h", lambda: 19 - 2 * location.cut(19, 0.2))
    yield Check(dana, "recomputed.wmean", _winsorized_mean)


def _winsorized_mean() -> float:
    import numpy as np

    sample = np.array(case("trimmed_dana20").data["x"], dtype=float)
    return float(location.winsorized(sample, 0.2).mean())


CHECKS = (*_adjustments(), *_summaries())
