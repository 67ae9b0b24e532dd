"""Log hazard and cumulative hazard of each family with their gradients on the working scale.

time-to-event data enter as times, events and entry (left truncation); covariates act as proportional hazards,
H(t | x) = H0(t) exp(x b). Gradients are analytic.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import special

F = npt.NDArray[np.float64]

# (working, t > 0) -> log h, its gradient [k, n], H, its gradient [k, n]
Terms = tuple[F, F, F, F]
_LOG_ROOT_2PI = 0.5 * np.log(2.0 * np.pi)


def _exponential(w: F, t: F) -> Terms:
    h = np.exp(w[0]) * t
    return np.full_like(t, w[0]), np.ones((1, t.size)), h, h[None]


def _weibull(w: F, t: F) -> Terms:
    k, u = np.exp(w[0]), np.log(t) - w[1]
    h = np.exp(k * u)
    log_h = w[0] - w[1] + (k - 1.0) * u
    return log_h, np.stack([1.0 + k * u, np.full_like(t, -k)]), h, np.stack([h * k * u, -k * h])


def _gompertz(w: F, t: F) -> Terms:
    g, rate = w[0], np.exp(w[1])
    x = g * t
    small = np.abs(x) < 1e-3
    safe = np.where(small, 1.0, x)
    whole = np.where(small, 1.0 + x / 2 + x * x / 6 + x**3 / 24, np.expm1(safe) / safe)
    slope = np.where(small, 0.5 + x / 3 + x * x / 8 + x**3 / 30, (np.exp(safe) - np.expm1(safe) / safe) / safe)
    h = rate * t * whole
    return w[1] + x, np.stack([t, np.ones_like(t)]), h, np.stack([rate * t * t * slope, h])


def _lognormal(w: F, t: F) -> Terms:
    sd = np.exp(w[1])
    z = (np.log(t) - w[0]) / sd
    h = -special.log_ndtr(-z)
    mills = np.exp(-0.5 * z * z - _LOG_ROOT_2PI + h)
    log_h = -0.5 * z * z - _LOG_ROOT_2PI - w[1] - np.log(t) + h
    d = mills - z
    return log_h, np.stack([-d / sd, -z * d - 1.0]), h, np.stack([-mills / sd, -z * mills])


def _loglogistic(w: F, t: F) -> Terms:
    k = np.exp(w[0])
    u = k * (np.log(t) - w[1])
    h = np.logaddexp(0.0, u)
    p = special.expit(u)
    log_h = w[0] - np.log(t) + u - h
    return log_h, np.stack([1.0 + (1.0 - p) * u, -(1.0 - p) * k]), h, np.stack([p * u, -p * k])


TERMS: dict[str, Callable[[F, F], Terms]] = {
    "exponential": _exponential,
    "weibull": _weibull,
    "gompertz": _gompertz,
    "lognormal": _lognormal,
    "loglogistic": _loglogistic,
}


@dataclass(frozen=True, slots=True)
class Data:
    """times float64[n] > 0, events float64[n] in {0, 1}, entry float64[n] >= 0 and below times, covariates
    float64[n, p], weights float64[n]."""

    times: F
    events: F
    entry: F
    covariates: F
    weights: F


def negative_loglik(family: str, w: F, data: Data) -> tuple[float, F]:
    """Minus the log-likelihood and its gradient, float64[k + p]. inf where the parameters are out of range."""
    k = w.size - data.covariates.shape[1]
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        log_h, d_log_h, cum, d_cum = TERMS[family](w[:k], data.times)
        late = data.entry > 0
        if late.any():
            _, _, before, d_before = TERMS[family](w[:k], data.entry[late])
            cum, d_cum = cum.copy(), d_cum.copy()
            cum[late] -= before
            d_cum[:, late] -= d_before
        score = data.covariates @ w[k:]
        ratio = np.exp(score)
        value = -np.sum(data.weights * (data.events * (log_h + score) - ratio * cum))
        family_gradient = -(d_log_h @ (data.weights * data.events) - d_cum @ (data.weights * ratio))
        other = -(data.covariates.T @ (data.weights * (data.events - ratio * cum)))
    gradient = np.concatenate([family_gradient, other])
    if not np.isfinite(value) or not np.isfinite(gradient).all():
        return np.inf, np.zeros_like(w)
    return float(value), gradient
