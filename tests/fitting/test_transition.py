"""A fitted transition: units handed to the study, and the curve laid over the data."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from microsim.fitting.transition import fit_transition
from microsim.hazards.families import cumulative, survival
from microsim.study.fit_task import FitTask, sealed


def _task(*, effect: float = 0.0, n: int = 2000, **changes: object) -> FitTask:
    """Weibull stays in days (shape 0.8, scale 30), a hazard ratio exp(effect) for half of the patients."""
    rng = np.random.default_rng(1)
    x = np.repeat([0.0, 1.0], n // 2)
    t = 30.0 * (rng.exponential(size=n) / np.exp(effect * x)) ** (1 / 0.8)
    task = FitTask(
        name="stay", family="weibull", source="Home", target="Hospital", unit="day", time="sojourn",
        times=np.minimum(t, 40.0), events=t <= 40.0, entry=np.zeros(n), covariates=x[:, None],
        coefficient_names=("b",), n_dropped_note="", to_study_unit=1 / 365.25,
    )  # fmt: skip
    return sealed(replace(task, **changes))  # type: ignore[arg-type]


def test_the_study_gets_its_own_time_unit_and_the_coefficients_by_name() -> None:
    fitted = fit_transition(_task(effect=1.5), None)
    years = fitted.in_study_units
    np.testing.assert_allclose(cumulative(years.hazard, 10 / 365.25), cumulative(fitted.fit.hazard, 10.0), rtol=1e-12)
    assert dict(years.coefficients) == dict(fitted.fit.coefficients)
    assert (fitted.name, fitted.source, fitted.target, fitted.unit) == ("stay", "Home", "Hospital", "day")


def test_the_fitted_curve_is_the_mean_over_patients_and_lies_on_the_data() -> None:
    fitted = fit_transition(_task(effect=1.5), None)
    curve, b = fitted.curve, fitted.fit.coefficients["b"]
    base = cumulative(fitted.fit.hazard, curve.fitted_time)
    np.testing.assert_allclose(curve.fitted_survival, (np.exp(-base) + np.exp(-base * np.exp(b))) / 2, rtol=1e-12)
    at = np.interp(curve.km_time, curve.fitted_time, curve.fitted_survival)
    # Kaplan-Meier errs by at most sqrt(1 / 4n) = 0.011 a point; 4.5 of these
    assert np.abs(at - curve.km_survival).max() < 0.05
    # negative control: the curve of a patient with covariate zero does not lie on the data
    of_zero = survival(fitted.fit.hazard, curve.km_time)
    assert np.abs(of_zero - curve.km_survival).max() > 0.1


def test_the_wrong_family_is_seen_to_leave_the_data() -> None:
    curve = fit_transition(_task(family="gompertz"), None).curve
    right = fit_transition(_task(), None).curve
    early = np.array([0.5, 1.0, 2.0])

    def miss(c: object) -> float:
        observed = np.interp(early, right.km_time, right.km_survival)
        return float(np.abs(np.interp(early, c.fitted_time, c.fitted_survival) - observed).max())  # type: ignore[attr-defined]

    assert miss(right) < 0.02 < miss(curve)


def test_the_grid_reaches_from_very_short_times_to_the_longest() -> None:
    curve = fit_transition(_task(), None).curve
    positive = curve.fitted_time[1:]
    assert curve.fitted_time[0] == 0.0 and positive[0] <= 40.0 * 1e-3 and positive[-1] == 40.0
    assert 150 <= curve.fitted_time.size <= 250 and np.all(np.diff(curve.fitted_time) > 0)
    assert np.all(np.diff(curve.fitted_survival) < 0)


@pytest.mark.parametrize("longest", [0.013, 0.9, 7.0, 40.0, 365.25, 1e5])
def test_numbers_at_risk_stand_at_a_few_round_times(longest: float) -> None:
    times = np.linspace(longest / 50, longest, 50)
    curve = fit_transition(
        _task(
            times=times,
            events=np.ones(50, bool),
            entry=np.zeros(50),
            covariates=np.zeros((50, 0)),
            coefficient_names=(),
        ),
        None,
    ).curve
    assert 5 <= curve.risk_times.size <= 7 and curve.risk_times[0] == 0.0 and curve.risk_times[-1] <= longest
    assert list(curve.at_risk) == [int(np.sum(times >= t)) for t in curve.risk_times]


def test_with_late_entry_both_curves_are_conditional_on_the_first_entry() -> None:
    rng = np.random.default_rng(3)
    lifetime = 80.0 * rng.weibull(3.0, 6000)
    entry = rng.uniform(50.0, 75.0, 6000)
    seen = lifetime > entry
    none = {"covariates": np.zeros((int(seen.sum()), 0)), "coefficient_names": ()}
    task = _task(times=lifetime[seen], events=np.ones(int(seen.sum()), bool), entry=entry[seen], **none)
    fitted = fit_transition(task, None)
    curve = fitted.curve
    assert np.all(curve.fitted_survival[curve.fitted_time <= entry.min()] == 1.0)
    i = int(np.searchsorted(curve.km_time, 70.0, side="right") - 1)
    observed, error = curve.km_survival[i], (curve.km_upper[i] - curve.km_lower[i]) / (2 * 1.96)
    assert abs(np.interp(70.0, curve.fitted_time, curve.fitted_survival) - observed) < 4.5 * error
    # negative control: the fitted curve from time zero misses what was observed from the first entry on
    assert abs(survival(fitted.fit.hazard, 70.0)[0] - observed) > 4.5 * error
