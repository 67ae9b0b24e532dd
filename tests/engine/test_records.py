"""What leaves the engine is consistent with itself, whatever the threads, and paired between strategies."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from bound_builder import ONE, clock, hazard, op, state, study
from engine.pathways import odd, remembering, ward

from microsim.engine.run import Wants, simulate
from microsim.records.simulation import SimulationRecord
from microsim.study.bound import BoundStudy
from microsim.study.expression import const

N = 8000


@pytest.fixture(scope="module", params=["ward", "remembering", "odd"])
def run(request: pytest.FixtureRequest) -> tuple[BoundStudy, SimulationRecord]:
    s = {"ward": ward, "remembering": remembering, "odd": odd}[request.param]()
    return s, simulate(s, patients=N, seed=3, threads=2)


def _outcome(record: SimulationRecord, name: str, arm: int = 0) -> float:
    return float(record.moments.mean[arm, record.layout.outcomes.index(name)])


def test_person_time_adds_up_on_both_grids_and_with_the_moments(run) -> None:
    s, r = run
    for arm, path in enumerate(r.paths):
        time = path.exposure.sum(axis=(0, 2)) / N
        np.testing.assert_allclose(time.sum(), s.horizon, rtol=1e-9)
        np.testing.assert_allclose(path.exposure_sojourn.sum(axis=(0, 2)) / N, time, rtol=1e-9)
        np.testing.assert_allclose(time, [_outcome(r, f"time:{n}", arm) for n in r.layout.states], rtol=1e-9)
        assert path.exposure.min() > -1e-9


def test_events_add_up_on_both_grids_and_with_the_moments(run) -> None:
    _, r = run
    for arm, path in enumerate(r.paths):
        np.testing.assert_array_equal(path.events.sum(axis=2), path.events_sojourn.sum(axis=2))
        by_clock = np.zeros(len(r.layout.clocks))
        np.add.at(by_clock, [k for k, _, _ in r.layout.arcs], path.events.sum(axis=(0, 2)))
        np.testing.assert_allclose(by_clock / N, [_outcome(r, f"events:{k}", arm) for k in r.layout.clocks], rtol=1e-12)
        entries = path.entries.sum(axis=(0, 2)) / N
        np.testing.assert_allclose(entries, [_outcome(r, f"entries:{n}", arm) for n in r.layout.states], rtol=1e-12)


def test_people_present_change_by_arrivals_and_departures(run) -> None:
    _, r = run
    for path in r.paths:
        present = path.present.sum(axis=0)
        np.testing.assert_array_equal(present.sum(axis=0), N)
        np.testing.assert_allclose(present[:, 0], r.start * N)
        left = np.zeros_like(path.entries[0])
        for a, (_, source, _) in enumerate(r.layout.arcs):
            left[source] += path.events[:, a].sum(axis=0)
        change = path.entries.sum(axis=0) - left
        np.testing.assert_allclose(np.diff(present, axis=1), change, atol=1e-9)


def test_integrated_hazards_equal_events_up_to_their_martingale(run) -> None:
    _, r = run
    for arm, path in enumerate(r.paths):
        tally = r.hazards[arm, arm]
        expected, seen = tally.integrated.sum(axis=(0, 2)), path.events.sum(axis=(0, 2))
        # events minus integrated hazard is a martingale whose variance is the integrated hazard
        assert np.all(np.abs(seen - expected) < 4.5 * np.sqrt(expected) + 1e-9)
        np.testing.assert_allclose(tally.integrated_sojourn.sum(axis=(0, 2)), expected, rtol=1e-9)


def test_rewards_along_the_own_path_are_the_undiscounted_outcomes(run) -> None:
    s, r = run
    for arm in range(len(s.arms)):
        tally = r.hazards[arm, arm]
        total = (tally.reward + tally.lump).sum(axis=(0, 2, 3)) / N
        np.testing.assert_allclose(total[0], _outcome(r, "qaly", arm), rtol=1e-9)
        for i, category in enumerate(s.categories, start=1):
            once = s.arms[arm].once.get(category, 0.0)
            np.testing.assert_allclose(total[i] + once, _outcome(r, f"cost:{category}", arm), rtol=1e-9)


def test_another_arms_hazards_along_a_path_carry_its_effect() -> None:
    r = simulate(ward(), patients=N, seed=3, threads=2)
    inward = next(a for a, (k, _, _) in enumerate(r.layout.arcs) if r.layout.clocks[k] == "in")
    own, carried = r.hazards[0, 0], r.hazards[0, 1]
    np.testing.assert_allclose(carried.integrated[:, inward], 0.7 * own.integrated[:, inward], rtol=1e-9, atol=1e-12)
    others = [a for a in range(len(r.layout.arcs)) if a != inward]
    np.testing.assert_array_equal(carried.integrated[:, others], own.integrated[:, others])
    assert set(r.hazards) == {(0, 0), (1, 1), (0, 1)}


def test_groups_recombine_and_covariances_are_those_of_the_patients() -> None:
    kept = []
    r = simulate(ward(), patients=N, seed=3, threads=2, wants=Wants(outcomes=lambda first, c: kept.append(c)))
    values = np.concatenate([c.outcomes for c in kept], axis=2)
    m = r.moments
    assert m.group_patients.sum() == N == values.shape[2]
    np.testing.assert_allclose((m.group_mean * m.group_patients[:, None, None]).sum(axis=0) / N, m.mean, rtol=1e-12)
    np.testing.assert_allclose(m.mean, values.mean(axis=2), rtol=1e-12)
    for i in range(len(r.layout.outcomes)):
        np.testing.assert_allclose(m.covariance[i], np.cov(values[:, i]), rtol=1e-9, atol=1e-9)
    at = [r.layout.outcomes.index(o) for o in ("cost_disc", "qaly_disc")]
    np.testing.assert_allclose(m.money, np.cov(values[:, at].reshape(-1, N)), rtol=1e-9, atol=1e-9)


def _arrays(r: SimulationRecord) -> list[np.ndarray]:
    m = r.moments
    out = [m.mean, m.covariance, m.money, m.group_mean]
    for path in r.paths:
        out += [path.present, path.exposure, path.entries, path.events, path.exposure_sojourn, path.events_sojourn]
    for tally in r.hazards.values():
        out += [tally.integrated, tally.integrated_sojourn, tally.reward, tally.lump]
    return out


def test_any_number_of_threads_gives_the_same_bits() -> None:
    runs = [simulate(remembering(), patients=5000, seed=9, threads=k) for k in (1, 2, 3)]
    for other in runs[1:]:
        assert all(np.array_equal(a, b) for a, b in zip(_arrays(runs[0]), _arrays(other), strict=True))
    another = simulate(remembering(), patients=5000, seed=10)
    assert not np.array_equal(runs[0].moments.mean, another.moments.mean)


def _per_patient(s: BoundStudy) -> dict[str, np.ndarray]:
    kept = []
    simulate(s, patients=500, seed=4, wants=Wants(tallies=False, outcomes=lambda first, c: kept.append(c)))
    return dict(zip(kept[0].layout.outcomes, np.concatenate([c.outcomes[0] for c in kept], axis=1), strict=True))


def test_reordering_or_adding_clocks_that_never_fire_changes_no_patient() -> None:
    s = remembering()
    base = _per_patient(s)
    states, clocks = s.arms[0].states, s.arms[0].clocks
    inert = clock("inert", "Home", "Ward", hazard("exponential", rate=3.0), ratio=const(0.0))
    for variant in (tuple(reversed(clocks)), (inert, *clocks)):
        arms = tuple(replace(a, clocks=variant) for a in s.arms)
        found = _per_patient(replace(s, arms=arms))
        for name, values in base.items():
            np.testing.assert_allclose(found[name], values, rtol=1e-12, atol=1e-12, err_msg=name)
    moved = tuple(replace(a, states=(states[1], states[0], states[2])) for a in s.arms)
    for name, values in _per_patient(replace(s, arms=moved)).items():
        np.testing.assert_allclose(base[name], values, rtol=1e-12, atol=1e-12, err_msg=name)


def test_identical_strategies_have_no_difference_at_all_and_costs_alone_move_no_event() -> None:
    s = ward()
    same = replace(s, arms=(s.arms[0], replace(s.arms[0], name="B")))
    m = simulate(same, patients=2000, seed=1).moments
    np.testing.assert_array_equal(m.mean[0], m.mean[1])
    np.testing.assert_array_equal(m.covariance[:, 0, 0], m.covariance[:, 0, 1])
    home = replace(s.arms[0].states[0], costs={"care": const(9999.0)})
    dearer = replace(s.arms[0], name="B", states=(home, *s.arms[0].states[1:]))
    r = simulate(replace(s, arms=(s.arms[0], dearer)), patients=2000, seed=1)
    for i, outcome in enumerate(r.layout.outcomes):
        equal = r.moments.mean[0, i] == r.moments.mean[1, i]
        assert equal != outcome.startswith("cost") or outcome in ("cost:bed", "cost_disc:bed")


def test_pairing_makes_increments_far_less_noisy_than_independent_patients() -> None:
    r = simulate(ward(), patients=N, seed=3, wants=Wants(tallies=False))
    c = r.moments.covariance[r.layout.outcomes.index("ly")]
    assert c[0, 0] + c[1, 1] - 2 * c[0, 1] < 0.6 * (c[0, 0] + c[1, 1])


def test_presence_is_the_same_with_and_without_tallies() -> None:
    """The plain run counts people at grid edges itself; a state with no clock and no worth is counted too."""
    states = (state("A", start=1.0, utility=ONE), state("B", utility=op("mul", 0.5, ONE)), state("D", absorbing=True))
    clocks = (
        clock("ab", "A", "B", hazard("weibull", shape=2.0, scale=3.0)),
        clock("bd", "B", "D", hazard("exponential", rate=0.3)),
    )
    s = study((states, clocks), horizon=10.3)
    r = simulate(s, patients=3000, seed=2)
    assert r.paths[0].present.shape[2] == r.grid.time.size
    assert r.grid.time[-1] == 10.3
