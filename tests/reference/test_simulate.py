"""The reference engine on lives that can be written down from the thresholds by hand."""

from __future__ import annotations

import numpy as np
import pytest
from bound_builder import ONE, attribute, clock, hazard, memory, op, state, study

from microsim import rng
from microsim.errors import SimulationError
from microsim.reference.simulate import run_reference
from microsim.study.bound import BoundAttribute, BoundStudy, Law
from microsim.study.expression import const


def _threshold(patient: int, name: str, firing: int) -> float:
    return float(rng.thresholds(patient, seed=9, clock=name, firing=firing))


def _loop(rate: float = 0.5, *, horizon: float = 1000.0) -> BoundStudy:
    """Well and ill in turn, with a death that is twice as likely when ill."""
    states = (state("Well", start=1.0, utility=ONE), state("Ill", utility=ONE), state("Dead", absorbing=True))
    clocks = (
        clock("down", "Well", "Ill", hazard("exponential", rate=rate)),
        clock("up", "Ill", "Well", hazard("exponential", rate=4.0)),
        clock("death", ("Well", "Ill"), "Dead", hazard("exponential", rate=0.2),
              ratio=op("where", op("eq", memory("came_from", "Well"), 1.0), 2.0, 1.0)),
    )  # fmt: skip
    return study((states, clocks), horizon=horizon)


@pytest.mark.parametrize("patient", [0, 1, 17, 2**32 - 1])
def test_a_life_follows_from_its_thresholds(patient: int) -> None:
    """Death consumes .2 a year when well and .4 when ill, of one threshold all along."""
    now, left, expected = 0.0, _threshold(patient, "death", 0), []
    for firing in range(1000):
        for place, name, rate, deadly in (("Well", "down", 0.5, 0.2), ("Ill", "up", 4.0, 0.4)):
            stay = _threshold(patient, name, firing) / rate
            dies = left / deadly < stay
            stay = min(stay, left / deadly)
            expected.append((place, "death" if dies else name, now, now + stay))
            now, left = now + stay, left - deadly * stay
            if dies:
                break
        if dies:
            break
    run = run_reference(_loop(), patients=[patient], seed=9, arm="A")
    *lived, dead = run.sojourns
    assert [(s.state, s.clock) for s in lived] == [e[:2] for e in expected]
    np.testing.assert_allclose([(s.entry, s.exit) for s in lived], [e[2:] for e in expected], rtol=1e-12)
    assert (dead.state, dead.clock, dead.exit) == ("Dead", "", 1000.0)


def test_the_horizon_cuts_the_path_and_changes_nothing_before_it() -> None:
    long = run_reference(_loop(), patients=range(30), seed=9, arm="A").sojourns
    short = run_reference(_loop(horizon=5.0), patients=range(30), seed=9, arm="A").sojourns
    assert [s for s in short if s.clock] == [s for s in long if s.clock and s.exit <= 5.0]
    ends = [s for s in short if not s.clock]
    assert len(ends) == 30
    assert all(s.exit == 5.0 for s in ends)


def test_patients_do_not_depend_on_who_else_is_simulated() -> None:
    everybody = run_reference(_loop(), patients=range(12), seed=9, arm="A")
    some = run_reference(_loop(), patients=[11, 4], seed=9, arm="A")
    assert some.patients == (11, 4)
    assert some.sojourns == tuple(s for p in (11, 4) for s in everybody.sojourns if s.patient == p)
    assert np.array_equal(some.outcomes["qaly"], everybody.outcomes["qaly"][[11, 4]])
    assert run_reference(_loop(), patients=[], seed=9, arm="A").sojourns == ()


def test_ties_go_by_clock_order(monkeypatch: pytest.MonkeyPatch) -> None:
    """With the same threshold everywhere, two clocks of one hazard are due at the very same time."""
    monkeypatch.setattr(rng, "thresholds", lambda *_, **__: 1.3)
    states = (state("A", start=1.0, utility=ONE), state("X", absorbing=True), state("Y", absorbing=True))
    for order in ("XY", "YX"):
        clocks = [clock(f"to_{target}", "A", target, hazard("weibull", shape=1.7, scale=3.0)) for target in order]
        first = run_reference(study((states, clocks)), patients=[3], seed=9, arm="A").sojourns[0]
        assert first.clock == f"to_{order[0]}"


def test_a_clock_with_ratio_zero_never_fires_and_consumes_nothing() -> None:
    off = op("where", op("eq", memory("visits", "Well"), 1.0), 0.0, 1.0)
    base = _loop()
    arm = base.arms[0]
    clocks = (arm.clocks[0], arm.clocks[1], clock("death", "Well", "Dead", hazard("exponential", rate=0.2), ratio=off))
    run = run_reference(study((arm.states, clocks), horizon=1000.0), patients=[2], seed=9, arm="A")
    well = [s for s in run.sojourns if s.state == "Well"]
    assert sum(s.exit - s.entry for s in well[1:]) == pytest.approx(_threshold(2, "death", 0) / 0.2, rel=1e-12)


def test_faults_name_the_patient_the_state_and_the_formula() -> None:
    with pytest.raises(SimulationError, match="no strategy named 'Z'; there are A, B"):
        run_reference(_loop(), patients=[0], seed=9, arm="Z")
    states = (state("Well", start=1.0, utility=ONE), state("Dead", absorbing=True))
    age = BoundAttribute("age", Law("constant", {"value": 50.0}))
    for ratio, message in (
        (op("sub", attribute("age"), 60.0), "patient 6, state Well: ratio of clock death is negative"),
        (op("div", attribute("age"), 0.0), "patient 6, state Well: ratio of clock death is not a finite number"),
    ):
        clocks = (clock("death", "Well", "Dead", hazard("exponential", rate=0.1), ratio=ratio),)
        with pytest.raises(SimulationError, match=message):
            run_reference(study((states, clocks), attributes=(age,)), patients=[6], seed=9, arm="A")


def test_entry_amounts_count_at_arrivals_only() -> None:
    states = (
        state("Well", start=1.0, utility=ONE, entry_costs={"fee": const(10.0)}),
        state("Ill", utility=ONE, entry_costs={"fee": op("mul", 7.0, memory("visits", "Ill"))}),
        state("Dead", absorbing=True),
    )
    run = run_reference(study((states, _loop().arms[0].clocks)), patients=range(40), seed=9, arm="A")
    well, ill = run.outcomes["entries:Well"], run.outcomes["entries:Ill"]
    np.testing.assert_allclose(run.outcomes["cost"], 10.0 * well + 7.0 * ill * (ill + 1) / 2, rtol=1e-12)
    assert ill.sum() > 0
