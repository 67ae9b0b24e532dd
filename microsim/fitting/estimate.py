"""Maximum likelihood for right-censored, left-truncated durations, with convergence diagnosed and never assumed."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt
from scipy import optimize

from microsim.errors import FitError
from microsim.fitting.fit import WORKING, Fit, natural
from microsim.fitting.likelihood import Data, negative_loglik

F = npt.NDArray[np.float64]

DECREMENT = 1e-8  # Newton decrement g' V g / 2 below which an optimum counts as found
STEP = 1e-5


def _starts(family: str, data: Data) -> list[F]:
    """Starting points on the working scale, in scaled time."""
    rate = float(np.sum(data.weights * data.events) / np.sum(data.weights * (data.times - data.entry)))
    log_rate = np.log(rate)
    if family == "exponential":
        return [np.array([log_rate])]
    if family == "gompertz":
        return [np.array([g, log_rate]) for g in (0.0, 0.5, -0.5)]
    logs = np.log(data.times[data.events > 0])
    middle, spread = float(np.mean(logs)), max(float(np.std(logs)), 0.1)
    if family == "lognormal":
        return [np.array([middle, np.log(spread)]), np.array([-log_rate, 0.0]), np.array([-log_rate + 1.0, 0.7])]
    return [np.array([a, b]) for a in (0.0, -0.5, 0.7) for b in (-log_rate, middle)]


def _hessian(family: str, w: F, data: Data) -> F:
    """Observed information by central differences of the analytic gradient."""
    size = w.size
    out = np.empty((size, size))
    for i in range(size):
        step = STEP * max(1.0, abs(w[i]))
        up, down = w.copy(), w.copy()
        up[i] += step
        down[i] -= step
        out[i] = (negative_loglik(family, up, data)[1] - negative_loglik(family, down, data)[1]) / (2 * step)
    return 0.5 * (out + out.T)


def _polish(family: str, w: F, data: Data) -> tuple[F, F, float]:
    """Newton steps from a good point: (estimate, information, decrement); decrement inf if information is not positive."""
    value = negative_loglik(family, w, data)[0]
    for _ in range(30):
        gradient = negative_loglik(family, w, data)[1]
        information = _hessian(family, w, data)
        if not np.isfinite(information).all() or np.linalg.eigvalsh(information)[0] <= 0:
            return w, information, np.inf
        step = np.linalg.solve(information, gradient)
        decrement = 0.5 * float(gradient @ step)
        if decrement < 1e-18:
            break
        size = 1.0
        while size > 1e-6 and negative_loglik(family, w - size * step, data)[0] > value:
            size /= 2
        if size <= 1e-6:
            break
        w = w - size * step
        value = negative_loglik(family, w, data)[0]
    return w, information, decrement


def _optimise(family: str, data: Data) -> tuple[F, F, float]:
    best: tuple[float, F] | None = None
    for start in _starts(family, data):
        x0 = np.concatenate([start, np.zeros(data.covariates.shape[1])])
        found = optimize.minimize(
            lambda w: negative_loglik(family, w, data),
            x0,
            jac=True,
            method="L-BFGS-B",
            options={"maxiter": 500, "ftol": 1e-14},
        )
        if np.isfinite(found.fun) and (best is None or found.fun < best[0]):
            best = float(found.fun), found.x
    if best is None:
        raise FitError(
            f"{family}: no starting point gives a finite likelihood; check the durations for extreme values."
        )
    return _polish(family, best[1], data)


def _checked(times: F, events: F, entry: F, covariates: F, weights: F, family: str) -> Data:
    if family not in WORKING:
        raise FitError(f"unknown family {family!r}; known are {', '.join(WORKING)}.")
    for name, array in (("times", times), ("entry", entry), ("covariates", covariates), ("weights", weights)):
        if not np.isfinite(array).all():
            raise FitError(f"{family}: {name} hold a value that is not finite.")
    if (times <= 0).any() or (entry < 0).any() or (entry >= times).any():
        raise FitError(f"{family}: every duration must be above zero and end after its entry.")
    total, needed = int(events.sum()), len(WORKING[family]) + covariates.shape[1]
    if total == 0:
        raise FitError(f"{family}: all {times.size} durations are censored; nothing can be estimated.")
    if total < needed:
        raise FitError(f"{family}: {total} events cannot support {needed} parameters.")
    constant = np.ptp(covariates, axis=0) == 0 if covariates.size else np.zeros(0, dtype=bool)
    if constant.any():
        raise FitError(f"{family}: covariate {int(np.argmax(constant)) + 1} has the same value for everybody.")
    return Data(times, events, entry, covariates, weights)


def _unscaled(family: str, w: F, v: F, scale: float) -> tuple[F, F]:
    """Estimates and covariance from scaled time (t / scale) back to the data's time unit."""
    w, stretch = w.copy(), np.ones(w.size)
    for i, (name, _) in enumerate(WORKING[family]):
        if name in ("log_scale", "meanlog"):
            w[i] += np.log(scale)
        elif name == "log_rate":
            w[i] -= np.log(scale)
        elif family == "gompertz" and name == "shape":
            w[i] /= scale
            stretch[i] = 1.0 / scale
    return w, v * np.outer(stretch, stretch)


def _warnings(family: str, params: dict[str, float], data: Data, total: int) -> list[str]:
    notes = []
    if family == "gompertz" and params["shape"] < 0:
        plateau = float(np.exp(params["rate"] / params["shape"]))
        notes.append(f"negative Gompertz shape: a share of {plateau:.3g} never has the event, so the mean is infinite.")
    if total < 10 * (len(WORKING[family]) + data.covariates.shape[1]):
        notes.append(f"only {total} events for {len(WORKING[family]) + data.covariates.shape[1]} parameters.")
    return notes


def fit_family(
    times: npt.ArrayLike,
    events: npt.ArrayLike,
    *,
    family: str,
    entry: npt.ArrayLike | None = None,
    covariates: npt.ArrayLike | None = None,
    covariate_names: Sequence[str] = (),
    weights: npt.ArrayLike | None = None,
    strict: bool = True,
) -> Fit:
    """Fit a family of ``hazards.core.PARAMETERS`` by maximum likelihood.

    times: float[n] > 0; events: bool[n], False = censored; entry: float[n], start of observation (left truncation);
    covariates: float[n, p], proportional hazards; weights: float[n]. The log-likelihood is that of T itself. Raises
    FitError for unusable data, and for an optimum not found unless ``strict`` is false (then ``converged`` is False).
    """
    t = np.asarray(times, dtype=np.float64)
    x = np.zeros((t.size, 0)) if covariates is None else np.asarray(covariates, dtype=np.float64).reshape(t.size, -1)
    names = tuple(covariate_names) or tuple(f"x{i + 1}" for i in range(x.shape[1]))
    raw = _checked(
        t,
        np.asarray(events, dtype=np.float64),
        np.zeros_like(t) if entry is None else np.asarray(entry, dtype=np.float64),
        x,
        np.ones_like(t) if weights is None else np.asarray(weights, dtype=np.float64),
        family,
    )
    scale = float(np.median(t))
    data = Data(t / scale, raw.events, raw.entry / scale, x, raw.weights)
    w, information, decrement = _optimise(family, data)
    converged = decrement < DECREMENT
    if strict and not converged:
        raise FitError(
            f"{family}: no interior maximum of the likelihood was found ({int(raw.events.sum())} events). "
            "Use a simpler family, or fewer covariates."
        )
    v = np.asarray(np.linalg.inv(information) if np.isfinite(decrement) else np.full_like(information, np.nan))
    loglik = -negative_loglik(family, w, data)[0] - float(np.sum(raw.weights * raw.events)) * np.log(scale)
    w, v = _unscaled(family, w, v, scale)
    params = {name: float(value) for name, value in natural(family, w).items()}
    first = len(WORKING[family])
    notes = _warnings(family, params, raw, int(raw.events.sum()))
    return Fit(
        family=family,
        params=params,
        coefficients={name: float(value) for name, value in zip(names, w[first:], strict=True)},
        loglik=float(loglik),
        working=tuple(float(value) for value in w),
        working_names=(*(name for name, _ in WORKING[family]), *names),
        covariance=tuple(tuple(float(c) for c in row) for row in v),
        n=t.size,
        n_events=int(raw.events.sum()),
        person_time=float(np.sum(t - raw.entry)),
        converged=bool(converged),
        warnings=(*notes, *(() if converged else ("no interior maximum of the likelihood was found.",))),
    )
