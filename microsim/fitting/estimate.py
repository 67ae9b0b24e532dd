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
# Variance, on scales where one unit is large (log shape, log sd, log hazard ratio per SD), above which the likelihood is
# flat and the estimate has run to a boundary.
FLAT = 100.0


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
    corners = [(0.0, -log_rate), (0.7, middle), (-0.5, middle), (0.0, middle), (-0.5, -log_rate), (0.7, -log_rate)]
    return [np.array(corner) for corner in corners]


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


def _best_start(family: str, data: Data) -> F:
    """The best optimum reached from several starts; two starts that agree end the search."""
    found: list[tuple[float, F]] = []
    for start in _starts(family, data):
        result = optimize.minimize(
            lambda w: negative_loglik(family, w, data),
            np.concatenate([start, np.zeros(data.covariates.shape[1])]),
            jac=True,
            method="L-BFGS-B",
            options={"maxiter": 500, "ftol": 1e-14},
        )
        if not np.isfinite(result.fun):
            continue
        found.append((float(result.fun), np.asarray(result.x)))
        low = sorted(value for value, _ in found)[:2]
        if len(low) == 2 and low[1] - low[0] < 1e-6:
            break
    if not found:
        raise FitError(
            f"{family}: no starting point gives a finite likelihood; check the durations for extreme values."
        )
    return min(found, key=lambda pair: pair[0])[1]


def _flat(family: str, information: F) -> bool:
    """Whether a shape or a coefficient is hardly determined: the likelihood keeps rising towards a boundary."""
    variance = np.diag(np.linalg.inv(information))
    bounded = [name in ("log_shape", "log_sdlog") for name, _ in WORKING[family]]
    watched = np.array(bounded + [True] * (variance.size - len(bounded)))
    return bool((variance[watched] > FLAT).any())


def _optimise(family: str, data: Data) -> tuple[F, F, str]:
    """(estimate, information, what is wrong with them or "")."""
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        w, information, decrement = _polish(family, _best_start(family, data), data)
        if not np.isfinite(decrement) or _flat(family, information):
            return w, information, "no interior maximum of the likelihood was found"
    return w, information, "" if decrement < DECREMENT else "the optimiser stopped before the maximum"


def _arrays(
    times: npt.ArrayLike,
    events: npt.ArrayLike,
    *,
    entry: npt.ArrayLike | None,
    covariates: npt.ArrayLike | None,
    weights: npt.ArrayLike | None,
    family: str,
) -> Data:
    """As float64 of agreeing shapes. Nothing is broadcast or reshaped: a column too short would be stretched unseen."""
    t = np.asarray(times, dtype=np.float64)
    x = np.zeros((t.size, 0)) if covariates is None else np.asarray(covariates, dtype=np.float64)
    data = Data(
        t,
        np.asarray(events, dtype=np.float64),
        np.zeros_like(t) if entry is None else np.asarray(entry, dtype=np.float64),
        x[:, None] if x.ndim == 1 else x,
        np.ones_like(t) if weights is None else np.asarray(weights, dtype=np.float64),
    )
    for name in ("times", "events", "entry", "weights"):
        if getattr(data, name).shape != (t.size,):
            raise FitError(f"{family}: {name} must be one column with a row per duration ({t.size}).")
    if data.covariates.ndim != 2 or len(data.covariates) != t.size:
        raise FitError(f"{family}: covariates must have a row per duration ({t.size}) and a column per coefficient.")
    return data


def _check_data(family: str, data: Data) -> None:
    for name in ("times", "events", "entry", "covariates", "weights"):
        if not np.isfinite(getattr(data, name)).all():
            raise FitError(f"{family}: {name} hold a value that is not finite.")
    if not np.isin(data.events, (0.0, 1.0)).all():
        raise FitError(f"{family}: events must be 1 (event) or 0 (censored); recode other values such as 1 and 2.")
    if (data.times <= 0).any() or (data.entry < 0).any() or (data.entry >= data.times).any():
        raise FitError(f"{family}: every duration must be above zero and end after its entry.")
    if (data.weights <= 0).any():
        raise FitError(f"{family}: every weight must be above zero.")
    total, needed = int(data.events.sum()), len(WORKING[family]) + data.covariates.shape[1]
    if total == 0:
        raise FitError(f"{family}: all {data.times.size} durations are censored; nothing can be estimated.")
    if total < needed:
        raise FitError(f"{family}: {total} events cannot support {needed} parameters.")


def _check_names(family: str, names: Sequence[str], *, columns: int) -> None:
    """One name per column, and none that stands for something else in the results."""
    if len(names) != columns:
        raise FitError(f"{family}: {len(names)} covariate names for {columns} columns.")
    taken = [name for pair in WORKING[family] for name in pair]
    for i, name in enumerate(names):
        if name in names[:i]:
            raise FitError(f"{family}: two covariates are called {name}; rename one.")
        if name in taken:
            raise FitError(f"{family}: a covariate cannot be called {name}, a parameter of this family; rename it.")


def _check_covariates(family: str, covariates: F, names: Sequence[str]) -> None:
    """Each must vary, and none may be a linear combination of those before it and a constant."""
    for i, name in enumerate(names):
        if np.ptp(covariates[:, i]) == 0:
            raise FitError(f"{family}: covariate {name} has the same value for everybody.")
        centred = covariates[:, : i + 1] - covariates[:, : i + 1].mean(axis=0)
        if np.linalg.matrix_rank(centred / centred.std(axis=0), tol=1e-7 * np.sqrt(len(covariates))) <= i:
            raise FitError(f"{family}: covariate {name} is a linear combination of {', '.join(names[:i])}.")


def _unscaled(family: str, w: F, v: F, *, scale: float, spread: F) -> tuple[F, F]:
    """Estimates and covariance from scaled time (t / scale) and covariates (x / spread) back to the data's units."""
    w, stretch = w.copy(), np.ones(w.size)
    for i, (name, _) in enumerate(WORKING[family]):
        if name in ("log_scale", "meanlog"):
            w[i] += np.log(scale)
        elif name == "log_rate":
            w[i] -= np.log(scale)
        elif family == "gompertz" and name == "shape":
            stretch[i] = 1.0 / scale
    stretch[len(WORKING[family]) :] = 1.0 / spread
    return w * stretch, v * np.outer(stretch, stretch)


def _warnings(family: str, params: dict[str, float], data: Data, names: Sequence[str]) -> list[str]:
    notes = []
    total, needed = int(data.events.sum()), len(WORKING[family]) + data.covariates.shape[1]
    if family == "gompertz" and params["shape"] < 0:
        plateau = float(np.exp(params["rate"] / params["shape"]))
        notes.append(f"negative Gompertz shape: a share of {plateau:.3g} never has the event, so the mean is infinite.")
    if total < 10 * needed:
        notes.append(f"only {total} events for {needed} parameter{'s' if needed > 1 else ''}.")
    if family in ("lognormal", "loglogistic"):
        # the other families absorb a shift of a covariate in their scale or rate; these two do not
        far = np.abs(data.covariates.mean(axis=0)) > 4 * data.covariates.std(axis=0)
        notes += [
            f"covariate {name} lies far from zero, where the {family} curve is defined: subtract a typical value."
            for name, is_far in zip(names, far, strict=True)
            if is_far
        ]
    return notes


def _remedy(family: str, data: Data) -> str:
    if np.ptp(data.times[data.events > 0]) == 0 and family != "exponential":
        return "All events share one time; use the exponential family or times with more digits."
    return "Use a simpler family, or fewer covariates centred near zero."


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
    covariates: float[n, p] or float[n], proportional hazards; weights: float[n]. The log-likelihood is that of T itself. Raises
    FitError for unusable data, and for an optimum not found unless ``strict`` is false (then ``converged`` is False).
    """
    if family not in WORKING:
        raise FitError(f"unknown family {family!r}; known are {', '.join(WORKING)}.")
    raw = _arrays(times, events, entry=entry, covariates=covariates, weights=weights, family=family)
    t, x = raw.times, raw.covariates
    names = tuple(covariate_names) or tuple(f"x{i + 1}" for i in range(x.shape[1]))
    _check_names(family, names, columns=x.shape[1])
    _check_data(family, raw)
    _check_covariates(family, x, names)
    scale, spread = float(np.median(t)), x.std(axis=0)
    data = Data(t / scale, raw.events, raw.entry / scale, x / spread, raw.weights)
    w, information, wrong = _optimise(family, data)
    if strict and wrong:
        raise FitError(f"{family}: {wrong} ({int(raw.events.sum())} events). {_remedy(family, raw)}")
    v = np.full_like(information, np.nan) if wrong else np.asarray(np.linalg.inv(information))
    loglik = -negative_loglik(family, w, data)[0] - float(np.sum(raw.weights * raw.events)) * np.log(scale)
    w, v = _unscaled(family, w, v, scale=scale, spread=spread)
    params = {name: float(value) for name, value in natural(family, w).items()}
    first = len(WORKING[family])
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
        converged=not wrong,
        warnings=(*_warnings(family, params, raw, names), *((f"{wrong}.",) if wrong else ())),
    )
