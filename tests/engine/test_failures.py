"""What the engine must not go on with: it stops, and says who, where and why."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from bound_builder import ONE, attribute, clock, hazard, memory, op, state, study

from microsim.engine.run import Wants, simulate
from microsim.errors import SimulationError
from microsim.study.bound import BoundAttribute, BoundStudy, Law
from microsim.study.expression import Node, const

X = BoundAttribute("x", Law("uniform", {"low": -1.0, "high": 1.0}))


def _loop(*, ratio: Node = ONE, utility: Node = ONE, rate: float = 1.0) -> BoundStudy:
    states = (state("Home", start=1.0, utility=utility), state("Ward"), state("Dead", absorbing=True))
    clocks = (
        clock("in", "Home", "Ward", hazard("exponential", rate=rate), ratio=ratio),
        clock("out", "Ward", "Home", hazard("exponential", rate=rate)),
        clock("die", "Ward", "Dead", hazard("exponential", rate=1e-9)),
    )
    return study((states, clocks), horizon=10.0, attributes=(X,))


@pytest.mark.parametrize(
    ("ratio", "why"),
    [
        (op("log", attribute("x")), "not a finite number at or above zero"),
        (attribute("x"), "not a finite number at or above zero"),
        (op("exp", op("mul", 1000.0, op("max", attribute("x"), 0.9))), "not a finite number at or above zero"),
    ],
)
def test_a_ratio_that_is_nan_negative_or_infinite_stops_the_run(ratio: Node, why: str) -> None:
    with pytest.raises(SimulationError, match=why) as caught:
        simulate(_loop(ratio=ratio), patients=200, seed=1)
    text = str(caught.value)
    assert "strategy A" in text and "state Home" in text and "clock in" in text and "x = " in text and "patient" in text


def test_a_reward_that_is_not_a_number_names_the_memory_it_saw() -> None:
    utility = op("sqrt", op("sub", 1.5, memory("visits", "Ward")))
    with pytest.raises(SimulationError, match=r"utility is not a finite number") as caught:
        simulate(_loop(utility=utility), patients=200, seed=1)
    assert "visits(Ward) = 2" in str(caught.value)


def test_events_without_end_are_stopped() -> None:
    with pytest.raises(SimulationError, match="again and again"):
        simulate(_loop(rate=1e9), patients=40, seed=1, wants=Wants(tallies=False))


def test_a_chunk_with_very_many_sojourns_grows_its_log() -> None:
    counted = []
    simulate(
        _loop(rate=300.0), patients=400, seed=1, wants=Wants(log=lambda first, c: counted.append(c.log[0][0].shape[1]))
    )
    # about 3,000 sojourns a patient: Poisson, so within 4.5 standard deviations
    assert abs(sum(counted) - 400 * 3001) < 4.5 * np.sqrt(400 * 3000)


@pytest.mark.parametrize(("patients", "seed"), [(10, 1), (2**32, 1), (100, -1), (100, 2**64)])
def test_numbers_out_of_range_are_refused(patients: int, seed: int) -> None:
    with pytest.raises(SimulationError, match=r"must be"):
        simulate(_loop(), patients=patients, seed=seed)


def test_zero_is_a_legitimate_ratio() -> None:
    r = simulate(_loop(ratio=op("where", op("gt", attribute("x"), 0.0), 1.0, const(0.0))), patients=2000, seed=1)
    share = r.paths[0].present.sum(axis=0)[0, -1] / 2000
    assert share > 0.5


@pytest.mark.parametrize("value", [op("log", op("sub", attribute("x"), 2.0)), const(-1.0)], ids=["nan", "negative"])
def test_a_formula_that_fails_only_along_the_comparators_patients_is_not_carried(value: Node) -> None:
    """Strategy B never enters the ward, so its own run is fine; along A's patients its ratio is not usable."""
    a = _loop().arms[0]
    ratio = op("where", op("gt", memory("visits", "Ward"), 0.0), value, 1e-12)
    b = replace(a, name="B", clocks=(replace(a.clocks[0], ratio=ratio), *a.clocks[1:]))
    with pytest.raises(SimulationError, match="along the patients of A"):
        simulate(replace(_loop(), arms=(a, b)), patients=200, seed=1)
