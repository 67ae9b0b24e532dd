"""The compiled engine against a slow scalar one: same events, times and outcomes, patient by patient."""

from __future__ import annotations

import numpy as np
import pytest
from bound_builder import ONE, clock, hazard, memory, op, state, study
from engine.pathways import PATHWAYS, remembering, two_ways
from engine.scalar import run_scalar
from hypothesis import given, settings
from hypothesis import strategies as st

from microsim.engine.run import Wants, simulate
from microsim.program import make_layout
from microsim.study.bound import BoundStudy

PATIENTS, SEED = 60, 11


def _compiled(s: BoundStudy, patients: int, seed: int) -> tuple[list, dict]:
    """Per arm: sojourns as (patient, state, clock, entry, exit), and outcomes float64[outcome, patient]."""
    layout = make_layout(s)
    rows: list[list] = [[] for _ in s.arms]
    outcomes: list[list] = [[] for _ in s.arms]

    def log(first, chunk):
        for arm, (index, value) in enumerate(chunk.log):
            for (i, state_index, a), (t0, t1) in zip(index.T, value.T, strict=True):
                name = layout.clocks[layout.arcs[a][0]] if a >= 0 else ""
                rows[arm].append((first + int(i), layout.states[state_index], name, float(t0), float(t1)))

    def keep(first, chunk):
        for arm in range(len(s.arms)):
            outcomes[arm].append(chunk.outcomes[arm])

    simulate(s, patients=patients, seed=seed, wants=Wants(tallies=False, log=log, outcomes=keep))
    return rows, [dict(zip(layout.outcomes, np.concatenate(o, axis=1), strict=True)) for o in outcomes]


def _assert_same(s: BoundStudy, *, patients: int, seed: int, **mistakes: bool) -> None:
    rows, outcomes = _compiled(s, patients, seed)
    for arm, got, found in zip(s.arms, rows, outcomes, strict=True):
        slow = run_scalar(s, arm, patients=patients, seed=seed, **mistakes)
        worthless = {x.name for x in arm.states if x.absorbing and x.dead}
        got = [r for r in got if r[1] not in worthless]
        assert [r[:3] for r in got] == [r[:3] for r in slow.sojourns]
        times = np.array([r[3:] for r in got])
        np.testing.assert_allclose(times, np.array([r[3:] for r in slow.sojourns]), rtol=1e-9, atol=1e-12)
        for name, values in slow.outcomes.items():
            np.testing.assert_allclose(found[name], values, rtol=1e-9, atol=1e-9, err_msg=name)


@pytest.mark.parametrize("name", PATHWAYS)
def test_both_engines_tell_the_same_histories(name: str) -> None:
    _assert_same(PATHWAYS[name], patients=PATIENTS, seed=SEED)


@pytest.mark.parametrize("mistake", ["redraw", "drop_ratio"])
def test_a_redrawn_threshold_or_a_dropped_ratio_would_be_noticed(mistake: str) -> None:
    with pytest.raises(AssertionError):
        _assert_same(remembering(), patients=PATIENTS, seed=SEED, **{mistake: True})


def _numbers(low: float, high: float) -> st.SearchStrategy[float]:
    return st.floats(low, high, allow_nan=False).map(lambda v: round(v, 4))


_HAZARDS = st.one_of(
    _numbers(0.05, 2.0).map(lambda r: hazard("exponential", rate=r)),
    st.tuples(_numbers(0.4, 3.0), _numbers(0.2, 8.0)).map(lambda p: hazard("weibull", shape=p[0], scale=p[1])),
    st.tuples(_numbers(-0.3, 0.3), _numbers(0.02, 1.0)).map(lambda p: hazard("gompertz", shape=p[0], rate=p[1])),
    st.tuples(_numbers(-1.5, 1.5), _numbers(0.2, 1.5)).map(lambda p: hazard("lognormal", meanlog=p[0], sdlog=p[1])),
    st.tuples(_numbers(0.7, 3.0), _numbers(0.2, 8.0)).map(lambda p: hazard("loglogistic", shape=p[0], scale=p[1])),
)
_RATIOS = st.sampled_from(
    [
        ONE,
        op("exp", op("mul", 0.2, op("min", memory("visits", "S1"), 5.0))),
        op("add", 0.5, op("min", memory("time_in", "S0"), 2.0)),
        op("where", memory("came_from", "S1"), 1.7, 0.6),
        op("div", 1.0, op("add", 1.0, memory("last_stay", "S0"))),
    ]
)


@st.composite
def _pathways(draw) -> BoundStudy:
    n = draw(st.integers(2, 4))
    states = [state(f"S{i}", start=float(i == 0), utility=op("sub", 1.0, 0.1 * i)) for i in range(n)]
    states.append(state("End", absorbing=True))
    clocks = []
    for i in range(n):
        for j in draw(st.lists(st.integers(0, n), min_size=1, max_size=3, unique=True)):
            scale = draw(st.sampled_from(["sojourn", "elapsed"]))
            clocks.append(clock(f"k{i}{j}", f"S{i}", states[j].name, draw(_HAZARDS), scale=scale, ratio=draw(_RATIOS)))
    return study((states, clocks), horizon=draw(_numbers(1.0, 6.0)))


@settings(max_examples=25, deadline=None, derandomize=True)
@given(_pathways(), st.integers(0, 2**32))
def test_both_engines_agree_on_generated_pathways(s: BoundStudy, seed: int) -> None:
    _assert_same(s, patients=40, seed=seed)


def test_thresholds_survive_interruption() -> None:
    """A clock interrupted by a loop out of its state fires when its own consumption reaches the first threshold."""
    from microsim import rng

    s = two_ways(hazard("exponential", rate=0.1), "sojourn")
    rows, _ = _compiled(s, PATIENTS, SEED)
    first = rng.thresholds(np.arange(PATIENTS), seed=SEED, clock="y")
    for patient in {r[0] for r in rows[0] if r[2] == "y"}:
        spent = sum(r[4] - r[3] for r in rows[0] if r[0] == patient)
        assert 0.02 * spent == pytest.approx(first[patient], rel=1e-9)
