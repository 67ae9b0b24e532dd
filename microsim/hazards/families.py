"""Hazard families by SciPy: cumulative hazard, hazard, inverse and survivor function of ``core.Hazard`` over arrays.

The readable definition the compiled kernels are tested against. Knows nothing of studies or data.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import numpy.typing as npt
from scipy import special

from microsim.hazards.core import Hazard

F = npt.NDArray[np.float64]
Levels = npt.NDArray[np.int64] | None


def _log(t: F) -> F:
    with np.errstate(divide="ignore"):
        return np.log(t)


def _cum_gompertz(p: dict[str, float], t: F) -> F:
    with np.errstate(over="ignore"):
        return p["rate"] * t if p["shape"] == 0 else p["rate"] / p["shape"] * np.expm1(p["shape"] * t)


def _rate_gompertz(p: dict[str, float], t: F) -> F:
    with np.errstate(over="ignore"):
        return np.asarray(p["rate"] * np.exp(p["shape"] * t))


def _inv_gompertz(p: dict[str, float], h: F) -> F:
    if p["shape"] == 0:
        return h / p["rate"]
    x = p["shape"] * (h / p["rate"])
    return np.where(x > -1.0, np.log1p(np.maximum(x, -1.0 + 1e-300)) / p["shape"], np.inf)


def _rate_weibull(p: dict[str, float], t: F) -> F:
    with np.errstate(divide="ignore"):
        return np.asarray(p["shape"] / p["scale"] * (t / p["scale"]) ** (p["shape"] - 1.0))


def _rate_lognormal(p: dict[str, float], t: F) -> F:
    log_t = np.log(np.where(t > 0, t, 1.0))
    z = (log_t - p["meanlog"]) / p["sdlog"]
    log_f = -0.5 * z * z - 0.5 * np.log(2 * np.pi) - np.log(p["sdlog"]) - log_t
    return np.where(t > 0, np.exp(log_f - special.log_ndtr(-z)), 0.0)


def _rate_loglogistic(p: dict[str, float], t: F) -> F:
    log_t = np.log(np.where(t > 0, t, 1.0))
    u = p["shape"] * (log_t - np.log(p["scale"]))
    # at zero the limit is that of the Weibull hazard with the same shape and scale
    return np.where(t > 0, np.exp(np.log(p["shape"]) - log_t + u - np.logaddexp(0.0, u)), _rate_weibull(p, 0.0 * t))


def _inv_loglogistic(p: dict[str, float], h: F) -> F:
    return np.asarray(p["scale"] * np.exp((h + _log(-np.expm1(-h))) / p["shape"]))


_CUMULATIVE: dict[str, Callable[[dict[str, float], F], F]] = {
    "exponential": lambda p, t: p["rate"] * t,
    "weibull": lambda p, t: (t / p["scale"]) ** p["shape"],
    "gompertz": _cum_gompertz,
    "lognormal": lambda p, t: -special.log_ndtr(-(_log(t) - p["meanlog"]) / p["sdlog"]),
    "loglogistic": lambda p, t: np.logaddexp(0.0, p["shape"] * (_log(t) - np.log(p["scale"]))),
}
_RATE: dict[str, Callable[[dict[str, float], F], F]] = {
    "exponential": lambda p, t: np.full_like(t, p["rate"]),
    "weibull": _rate_weibull,
    "gompertz": _rate_gompertz,
    "lognormal": _rate_lognormal,
    "loglogistic": _rate_loglogistic,
}
_INVERSE: dict[str, Callable[[dict[str, float], F], F]] = {
    "exponential": lambda p, h: h / p["rate"],
    "weibull": lambda p, h: p["scale"] * h ** (1.0 / p["shape"]),
    "gompertz": _inv_gompertz,
    "lognormal": lambda p, h: np.exp(p["meanlog"] - p["sdlog"] * special.ndtri_exp(-h)),
    "loglogistic": _inv_loglogistic,
}


def _table(hazard: Hazard, level: Levels, size: int) -> tuple[F, F, F, npt.NDArray[np.int64]]:
    """Edges float64[n+1], rates and cumulative hazards at left edges float64[levels, n], row int64[size]."""
    edges, rates = np.asarray(hazard.edges), np.asarray(hazard.rates)
    cum = np.concatenate([np.zeros((rates.shape[0], 1)), np.cumsum(rates * np.diff(edges), axis=1)[:, :-1]], axis=1)
    rows = np.zeros(size, dtype=np.int64) if level is None else np.asarray(level)
    return edges, rates, cum, rows


def _table_cells(edges: F, t: F) -> npt.NDArray[np.int64]:
    return np.clip(np.searchsorted(edges, t, side="right") - 1, 0, edges.size - 2)


def cumulative(hazard: Hazard, t: npt.ArrayLike, *, level: Levels = None) -> F:
    """H(t), float64[n], t >= 0 and finite. Tables: no hazard before the first edge, the last rate holds beyond the
    last; ``level`` int64[n] selects the row of a table."""
    time = np.atleast_1d(np.asarray(t, dtype=np.float64))
    if hazard.family != "table":
        return np.asarray(_CUMULATIVE[hazard.family](dict(hazard.params), time))
    edges, rates, cum, rows = _table(hazard, level, time.size)
    j = _table_cells(edges, time)
    return np.asarray(cum[rows, j] + np.maximum(time - edges[j], 0.0) * rates[rows, j])


def rate(hazard: Hazard, t: npt.ArrayLike, *, level: Levels = None) -> F:
    """h(t), float64[n]; inf at zero where the family starts there."""
    time = np.atleast_1d(np.asarray(t, dtype=np.float64))
    if hazard.family != "table":
        return np.asarray(_RATE[hazard.family](dict(hazard.params), time))
    edges, rates, _, rows = _table(hazard, level, time.size)
    return np.where(time < edges[0], 0.0, rates[rows, _table_cells(edges, time)])


def inverse(hazard: Hazard, h: npt.ArrayLike, *, level: Levels = None) -> F:
    """Smallest t >= 0 with H(t) >= h, float64[n]; inf where the hazard never adds up to h."""
    need = np.atleast_1d(np.asarray(h, dtype=np.float64))
    with np.errstate(divide="ignore", over="ignore", invalid="ignore"):
        if hazard.family != "table":
            found = _INVERSE[hazard.family]({k: np.float64(v) for k, v in hazard.params.items()}, need)
        else:
            edges, rates, cum, rows = _table(hazard, level, need.size)
            j = np.zeros(need.size, dtype=np.int64)
            for row in np.unique(rows):
                mine = rows == row
                j[mine] = np.maximum(np.searchsorted(cum[row], need[mine], side="left") - 1, 0)
            found = edges[j] + (need - cum[rows, j]) / rates[rows, j]
    return np.where(need > 0, found, 0.0)


def survival(hazard: Hazard, t: npt.ArrayLike, *, level: Levels = None) -> F:
    """S(t) = exp(-H(t)), float64[n]."""
    return np.exp(-cumulative(hazard, t, level=level))


def rescale(hazard: Hazard, factor: float) -> Hazard:
    """The same hazard with time in another unit: t_new = factor * t_old."""
    p = dict(hazard.params)
    if "rate" in p:
        p["rate"] = p["rate"] / factor
    if "scale" in p:
        p["scale"] = p["scale"] * factor
    if hazard.family == "gompertz":
        p["shape"] = p["shape"] / factor
    if hazard.family == "lognormal":
        p["meanlog"] = p["meanlog"] + float(np.log(factor))
    return replace(
        hazard,
        params=p,
        edges=tuple(e * factor for e in hazard.edges),
        rates=tuple(tuple(r / factor for r in row) for row in hazard.rates),
    )
