"""A fitted transition: the fit, the curve it is judged by, and the hazard in study time units."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from microsim.fitting.fit import Fit
from microsim.fitting.nonparametric import at_risk, kaplan_meier
from microsim.fitting.store import Task, fit_or_read
from microsim.hazards.core import Hazard
from microsim.hazards.families import cumulative, rescale

F = npt.NDArray[np.float64]

POINTS = 100  # on each of the two halves of the grid


@dataclass(frozen=True, slots=True)
class Curve:
    """In the fit's time unit. km_*: Kaplan-Meier with 95 % limits; fitted_survival: mean over the data's patients of the
    fitted survivor function, so that it can be laid over the former; at_risk: people under observation at risk_times.
    Where nobody was observed from zero, both curves are conditional on being event-free at the first entry."""

    km_time: F
    km_survival: F
    km_lower: F
    km_upper: F
    fitted_time: F
    fitted_survival: F
    risk_times: F
    at_risk: npt.NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class StudyHazard:
    """A fit as the study binds it: hazard in study time units, coefficients by name."""

    hazard: Hazard
    coefficients: Mapping[str, float]


@dataclass(frozen=True, slots=True)
class FittedTransition:
    name: str
    fit: Fit
    curve: Curve
    source: str
    target: str
    unit: str
    label: str
    in_study_units: StudyHazard


def _grid(longest: float) -> F:
    """From very short to longest: geometric for the start, even for the rest."""
    return np.unique(
        np.concatenate([[0.0], np.geomspace(longest * 1e-4, longest, POINTS), np.linspace(0, longest, POINTS)])
    )


def _round_times(longest: float) -> F:
    """Five to seven round times from zero to the longest."""
    raw = longest / 5.5
    magnitude = 10.0 ** np.floor(np.log10(raw))
    step = float(min((m * magnitude for m in (1, 1.5, 2, 2.5, 3, 4, 5, 6, 8, 10)), key=lambda s: abs(raw / s - 1)))
    return np.asarray(np.minimum(np.arange(0.0, longest * (1 + 1e-9), step), longest), dtype=np.float64)


def make_curve(task: Task, fit: Fit) -> Curve:
    observed = kaplan_meier(task.times, task.events, entry=task.entry)
    longest = float(task.times.max())
    time = _grid(longest)
    score = task.covariates @ np.array([fit.coefficients[c] for c in task.coefficient_names])
    ratios, counts = np.unique(np.exp(score), return_counts=True)
    first = float(task.entry.min())
    base = np.maximum(cumulative(fit.hazard, time) - cumulative(fit.hazard, first), 0.0)
    fitted = (np.exp(-np.outer(ratios, base)) * counts[:, None]).sum(axis=0) / counts.sum()
    when = _round_times(longest)
    entry = np.where(task.entry <= 0, -np.inf, task.entry)
    return Curve(
        km_time=np.concatenate([[0.0], observed.time]),
        km_survival=np.concatenate([[1.0], observed.value]),
        km_lower=np.concatenate([[1.0], observed.lower]),
        km_upper=np.concatenate([[1.0], observed.upper]),
        fitted_time=time,
        fitted_survival=fitted,
        risk_times=when,
        at_risk=at_risk(task.times, entry, when),
    )


def fit_transition(task: Task, folder: Path | None) -> FittedTransition:
    """Fit (or read) a task and lay out its curve. Raises FitError naming the transition."""
    fit = fit_or_read(task, folder)
    return FittedTransition(
        name=task.name,
        fit=fit,
        curve=make_curve(task, fit),
        source=task.source,
        target=task.target,
        unit=task.unit,
        label=task.name,
        in_study_units=StudyHazard(rescale(fit.hazard, task.to_study_unit), dict(fit.coefficients)),
    )
