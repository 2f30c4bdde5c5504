"""What adjusting, the summaries and the bootstrap find for their published cases."""

from __future__ import annotations

import functools
from collections.abc import Callable, Iterator

import numpy as np

import robustrm as rm
from robustrm.kernels import bootstrap, location
from robustrm.methods.adjusting import adjusted
from robustrm.methods.summary import OccasionSummary, summarize
from tests.reference.cases import Check, case
from tests.reference.resamples import distinct_resamples, spread_evenly

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
    sample = np.array(case("trimmed_dana20").data["x"], dtype=float)
    return float(location.winsorized(sample, 0.2).mean())


# ── the bootstrap ─────────────────────────────────────────────────────────────────────────

MOUSE, SPATIAL = "bootstrap_t_mouse", "bca_spatial_variance"


def mean(y: np.ndarray) -> np.ndarray:
    """Mean of each column of samples (..., n, k)."""
    return y.mean(axis=-2)


def plug_in_error(y: np.ndarray) -> np.ndarray:
    """Standard error of the mean with divisor n."""
    return y.std(axis=-2) / np.sqrt(y.shape[-2])


def plug_in_variance(y: np.ndarray) -> np.ndarray:
    """Variance with divisor n."""
    return y.var(axis=-2)


def column(name: str) -> np.ndarray:
    """The one sample (n, 1) of a case."""
    (sample,) = case(name).data.values()
    return np.array(sample, dtype=float)[:, None]


def found_estimate(name: str, estimator: bootstrap.Estimator) -> float:
    """The estimate of a case, by the method as a user calls it."""
    y = column(name)
    table = rm.OccasionTable.from_array(np.hstack([y, y]), occasions=["first", "second"])
    return rm.bootstrap_interval(table, estimator, draws=99, rng=1)[0].value


@functools.cache
def every_mouse_resample() -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Means, standard errors and t (24,310, 1) of every distinct resample, and their weights."""
    y = column(MOUSE)
    rows, weights = distinct_resamples(len(y))
    means, errors = mean(y[rows]), plug_in_error(y[rows])
    return means, errors, bootstrap.studentized(mean(y), means, errors), weights


def _ideal(values: np.ndarray) -> np.ndarray:
    return spread_evenly(values[:, 0], every_mouse_resample()[3], 99_999)


def _t_quantiles() -> tuple[float, float]:
    t = every_mouse_resample()[2]
    tail = np.array([0.05])
    ascending = bootstrap.ordered(t[_ideal(t)])
    low, high, _ = bootstrap.order_statistics(ascending, bootstrap.Tails(tail, tail))
    return float(low[0]), float(high[0])


def _mouse_t() -> list[float]:
    means, errors, t, _ = every_mouse_resample()
    y, kept = column(MOUSE), _ideal(t)
    found = bootstrap.bootstrap_t(mean(y), plug_in_error(y), means[kept], errors[kept], 0.9)
    return [float(found.low[0]), float(found.high[0])]


def _mouse_percentile() -> list[float]:
    means = every_mouse_resample()[0]
    found = bootstrap.percentile(means[_ideal(means)], 0.9)
    return [float(found.low[0]), float(found.high[0])]


def _mouse_bca() -> list[float]:
    # The case counts ties with the estimate as above it; the package counts them half.
    means = every_mouse_resample()[0]
    z0 = np.array([case(MOUSE).at("recomputed.z0_strict_less")])
    correction = bootstrap.Correction(z0, _accelerations(MOUSE, mean))
    ascending = bootstrap.ordered(means[_ideal(means)])
    found = bootstrap.order_statistics(ascending, bootstrap.bca_tails(correction, 0.9))
    return [float(found.low[0]), float(found.high[0])]


def _accelerations(name: str, estimator: bootstrap.Estimator) -> np.ndarray:
    return bootstrap.acceleration(bootstrap.jackknife(column(name), estimator))


def _bootstraps() -> Iterator[Check]:
    y = column(MOUSE)
    fields: dict[tuple[str, str], Callable[[], object]] = {
        (MOUSE, "published.mean"): lambda: found_estimate(MOUSE, mean),
        (MOUSE, "recomputed.mean"): lambda: found_estimate(MOUSE, mean),
        # the jackknife has the divisor n − 1
        (MOUSE, "recomputed.se_plugin"): lambda: float(
            bootstrap.jackknife_se(bootstrap.jackknife(y, mean))[0] * np.sqrt(1 - 1 / len(y))
        ),
        (MOUSE, "recomputed.t05"): lambda: _t_quantiles()[0],
        (MOUSE, "recomputed.t95"): lambda: _t_quantiles()[1],
        (MOUSE, "recomputed.ci90"): _mouse_t,
        (MOUSE, "recomputed.percentile90"): _mouse_percentile,
        (MOUSE, "recomputed.bca90"): _mouse_bca,
        (MOUSE, "recomputed.a"): lambda: float(_accelerations(MOUSE, mean)[0]),
        (MOUSE, "recomputed.degenerate_weight"): lambda: float(
            every_mouse_resample()[3] @ np.isnan(every_mouse_resample()[2][:, 0])
        ),
        (SPATIAL, "published.theta"): lambda: found_estimate(SPATIAL, plug_in_variance),
        (SPATIAL, "recomputed.theta"): lambda: found_estimate(SPATIAL, plug_in_variance),
    }
    for section in ("published", "recomputed"):
        fields[SPATIAL, f"{section}.a"] = lambda: float(
            _accelerations(SPATIAL, plug_in_variance)[0]
        )
    for (name, field), find in fields.items():
        yield Check(name, field, find)


CHECKS = (*_adjustments(), *_summaries(), *_bootstraps())
