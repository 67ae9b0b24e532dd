"""Curves without a family: Kaplan-Meier, Nelson-Aalen and the mean cumulative function of recurrent events."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from microsim.errors import FitError

F = npt.NDArray[np.float64]
Z95 = 1.959963984540054


@dataclass(frozen=True, slots=True)
class StepCurve:
    """A right-continuous step function: value float64[k] from each time on, with standard error and 95 % limits."""

    time: F
    value: F
    standard_error: F
    lower: F
    upper: F

    def at(self, t: npt.ArrayLike, *, before: float) -> F:
        """Values at times t; ``before`` holds ahead of the first step."""
        j = np.searchsorted(self.time, np.asarray(t, dtype=np.float64), side="right")
        return np.concatenate([[before], self.value])[j]


def at_risk(times: F, entry: F, when: F) -> npt.NDArray[np.int64]:
    """How many are under observation just before each time: entered before it and not yet out."""
    out = np.searchsorted(np.sort(entry), when, side="left") - np.searchsorted(np.sort(times), when, side="left")
    return np.asarray(out, dtype=np.int64)


def _flags(events: npt.ArrayLike, *, rows: int) -> npt.NDArray[np.bool_]:
    """bool[n]. Codes other than 0 and 1 are refused: every one of them would count as an event."""
    e = np.asarray(events)
    if e.shape != (rows,) or not np.isin(e, (0, 1)).all():
        raise FitError(f"events must be one column of {rows} rows, 1 for an event and 0 for none.")
    return e.astype(bool)


def _check_spans(start: F, stop: F, *, start_name: str) -> None:
    """Each row must end, at a finite time, after it begins: who is never at risk can have no event."""
    if stop.ndim != 1 or start.shape != stop.shape or not np.isfinite(stop).all() or not (start < stop).all():
        raise FitError(f"times must be one column of finite numbers, each after its {start_name}.")


def _counts(times: npt.ArrayLike, events: npt.ArrayLike, entry: npt.ArrayLike | None) -> tuple[F, F, F]:
    """Distinct event times, events and numbers at risk there."""
    t = np.asarray(times, dtype=np.float64)
    start = np.full_like(t, -np.inf) if entry is None else np.asarray(entry, dtype=np.float64)
    _check_spans(start, t, start_name="entry")
    start = np.where(start <= 0, -np.inf, start)
    when, deaths = np.unique(t[_flags(events, rows=t.size)], return_counts=True)
    return when, deaths.astype(np.float64), at_risk(t, start, when).astype(np.float64)


def kaplan_meier(times: npt.ArrayLike, events: npt.ArrayLike, *, entry: npt.ArrayLike | None = None) -> StepCurve:
    """Survivor function with Greenwood standard errors and log(-log) limits. times float[n], events bool[n], entry
    float[n] for left truncation, where the curve is conditional on the first entry, and stays at zero once everybody
    then at risk has had the event. Raises FitError for rows that do not end after their entry."""
    when, deaths, risk = _counts(times, events, entry)
    survival = np.cumprod(1.0 - deaths / risk)
    with np.errstate(divide="ignore", invalid="ignore"):
        greenwood = np.cumsum(deaths / (risk * (risk - deaths)))
        log_s = np.log(survival)
        width = Z95 * np.sqrt(greenwood) / np.abs(log_s)
        lower, upper = survival ** np.exp(width), survival ** np.exp(-width)
    inside = (survival > 0) & (survival < 1)
    error = np.asarray(survival * np.sqrt(np.where(np.isfinite(greenwood), greenwood, 0.0)), dtype=np.float64)
    limits = (np.asarray(np.where(inside, limit, survival), dtype=np.float64) for limit in (lower, upper))
    return StepCurve(when, np.asarray(survival), error, *limits)


def nelson_aalen(times: npt.ArrayLike, events: npt.ArrayLike, *, entry: npt.ArrayLike | None = None) -> StepCurve:
    """Cumulative hazard with variance sum d / n^2 (Aalen 1978) and normal limits."""
    when, deaths, risk = _counts(times, events, entry)
    value, error = np.cumsum(deaths / risk), np.sqrt(np.cumsum(deaths / risk**2))
    return StepCurve(when, value, error, np.maximum(value - Z95 * error, 0.0), value + Z95 * error)


def _mean_cumulative(start: F, stop: F, event: npt.NDArray[np.bool_], weight: F, when: F) -> F:
    """Mean number of events by each time in ``when``, each row of data counted ``weight`` times."""
    order_stop, order_start = np.argsort(stop), np.argsort(start)
    out_by = np.concatenate([[0.0], np.cumsum(weight[order_stop])])
    in_by = np.concatenate([[0.0], np.cumsum(weight[order_start])])
    risk = in_by[np.searchsorted(start[order_start], when, side="left")]
    risk = risk - out_by[np.searchsorted(stop[order_stop], when, side="left")]
    happened = np.zeros(when.size)
    np.add.at(happened, np.searchsorted(when, stop[event]), weight[event])
    return np.cumsum(np.divide(happened, risk, out=np.zeros_like(happened), where=risk > 0))


def mean_cumulative_function(
    patient: npt.ArrayLike,
    start: npt.ArrayLike,
    stop: npt.ArrayLike,
    event: npt.ArrayLike,
    *,
    samples: int = 500,
    seed: int = 1,
) -> StepCurve:
    """Expected number of recurrent events by time, from (start, stop] rows of patients (Nelson 1988).

    Standard errors and 95 % limits by resampling patients ``samples`` times with the given seed. Raises FitError for rows
    that do not end after their start, for columns of unequal length and for fewer than two samples.
    """
    a, b = np.asarray(start, dtype=np.float64), np.asarray(stop, dtype=np.float64)
    _check_spans(a, b, start_name="start")
    e = _flags(event, rows=b.size)
    who, index = np.unique(np.asarray(patient), return_inverse=True)
    if index.shape != b.shape or samples < 2:
        raise FitError("the mean cumulative function needs a patient for every row and at least two samples.")
    when = np.unique(b[e])
    value = _mean_cumulative(a, b, e, np.ones(a.size), when)
    rng = np.random.default_rng(seed)
    resampled = np.empty((samples, when.size))
    for i in range(samples):
        drawn = np.bincount(rng.integers(0, who.size, who.size), minlength=who.size)
        resampled[i] = _mean_cumulative(a, b, e, drawn[index].astype(np.float64), when)
    lower, upper = np.quantile(resampled, [0.025, 0.975], axis=0)
    return StepCurve(when, value, resampled.std(axis=0, ddof=1), lower, upper)
