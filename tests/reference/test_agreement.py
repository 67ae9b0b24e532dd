"""The compiled engine and the reference engine tell the same lives, event by event, and value them the same.

The compiled run has 2,400 patients in 40 chunks; the reference lives the 60 patients of one chunk in the middle, so the
compiled numbers come from full blocks and do not start at patient 0.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
import pytest
from bound_builder import ONE, clock, hazard, memory, op, state, study
from hypothesis import given, settings
from hypothesis import strategies as st
from reference.pathways import PATHWAYS

from microsim.engine.chunk import ChunkResult
from microsim.engine.run import Wants, simulate
from microsim.hazards.core import Hazard
from microsim.program import make_layout
from microsim.reference import hazards
from microsim.reference.ledger import Discount
from microsim.reference.memory import Memory
from microsim.reference.simulate import Patient, ReferenceRun, Sojourn, Threshold, run_reference
from microsim.study.bound import BoundArm, BoundClock, BoundStudy
from microsim.study.expression import MEMORY, Node

F = npt.NDArray[np.float64]

SEED = 20261201
PATIENTS, FIRST, COMPARED = 2400, 1020, 60  # chunk 17 of 40
RELATIVE = 1e-9
THRESHOLD = 1e-12  # consumed hazard, where the hazard is nearly zero


@dataclass(frozen=True)
class CompiledArm:
    """sojourns: (patient, state, clock or "", entry, exit); outcomes: name -> float64[patient]."""

    sojourns: list[tuple[int, str, str, float, float]]
    outcomes: dict[str, F]


def _compiled(study: BoundStudy, *, patients: int, first: int, draw: int = 0) -> dict[str, CompiledArm]:
    """The chunk of the compiled run that starts at patient ``first``, per arm."""
    kept: list[ChunkResult] = []

    def keep(start: int, chunk: ChunkResult) -> None:
        if start == first:
            kept.append(chunk)

    wants = Wants(tallies=False, log=keep, outcomes=keep)
    simulate(study, patients=patients, seed=SEED, draw=draw, wants=wants)
    layout, chunk = make_layout(study), kept[0]
    assert chunk.outcomes is not None
    arms = {}
    for name, (index, times), outcomes in zip(layout.strategies, chunk.log, chunk.outcomes, strict=True):
        clocks = ["" if a < 0 else layout.clocks[layout.arcs[a][0]] for a in index[2]]
        states = [layout.states[s] for s in index[1]]
        ids = [int(p) + first for p in index[0]]
        rows = zip(ids, states, clocks, times[0].tolist(), times[1].tolist(), strict=True)
        arms[name] = CompiledArm(list(rows), dict(zip(layout.outcomes, outcomes, strict=True)))
    return arms


def _worthless(arm: BoundArm) -> set[str]:
    """Dead states that add nothing: the compiled engine does not log the stay in them."""

    def zero(formula: Node) -> bool:
        return formula.is_const and formula.value == 0.0

    return {
        s.name
        for s in arm.states
        if s.absorbing and s.dead
        and all(map(zero, [s.utility, s.entry_qaly, *s.costs.values(), *s.entry_costs.values()]))
    }  # fmt: skip


def _same_time(found: float, expected: float, hazard: float) -> bool:
    """``hazard`` of the clock that fired then; 0 for model start and horizon, which must be met exactly."""
    gap = abs(found - expected)
    return gap == 0.0 if hazard == 0.0 else gap <= RELATIVE * expected or gap * hazard <= THRESHOLD


def _assert_same_lives(found: CompiledArm, run: ReferenceRun, worthless: set[str]) -> None:
    expected: list[Sojourn] = [s for s in run.sojourns if s.state not in worthless]
    logged = [row for row in found.sojourns if row[1] not in worthless]
    assert [row[:3] for row in logged] == [(s.patient, s.state, s.clock) for s in expected]
    entered_by: dict[int, float] = {}  # patient -> hazard of the clock that led into the present state
    for row, s in zip(logged, expected, strict=True):
        assert _same_time(row[3], s.entry, entered_by.get(s.patient, 0.0)), (row, s)
        assert _same_time(row[4], s.exit, s.hazard), (row, s)
        entered_by[s.patient] = s.hazard


def _assert_same_outcomes(found: CompiledArm, run: ReferenceRun) -> None:
    assert list(found.outcomes) == list(run.outcomes)
    for name, expected in run.outcomes.items():
        tiny = 1e-12 * (1.0 + float(np.max(np.abs(expected))))
        np.testing.assert_allclose(found.outcomes[name], expected, rtol=RELATIVE, atol=tiny, err_msg=name)


def _compare(
    study: BoundStudy, *, patients: int = PATIENTS, first: int = FIRST, compared: int = COMPARED, draw: int = 0
) -> dict[str, ReferenceRun]:
    """Both engines on the same patients, every arm that differs from the first. AssertionError where they disagree."""
    compiled = _compiled(study, patients=patients, first=first, draw=draw)
    runs = {}
    for i, arm in enumerate(study.arms):
        if i > 0 and replace(arm, name=study.arms[0].name) == study.arms[0]:
            continue
        run = run_reference(study, patients=range(first, first + compared), seed=SEED, draw=draw, arm=arm.name)
        _assert_same_lives(compiled[arm.name], run, _worthless(arm))
        _assert_same_outcomes(compiled[arm.name], run)
        runs[arm.name] = run
    return runs


@pytest.mark.parametrize("name", PATHWAYS)
def test_both_engines_tell_the_same_lives(name: str) -> None:
    runs = _compare(PATHWAYS[name])
    # a pathway in which nothing happens would agree with anything
    assert all(len(run.sojourns) >= 2 * COMPARED for run in runs.values())


def test_the_pathways_use_every_family_scale_and_memory_function() -> None:
    arms = [arm for s in PATHWAYS.values() for arm in s.arms]
    clocks = [k for arm in arms for k in arm.clocks]
    formulas = [k.ratio for k in clocks]
    for s in (s for arm in arms for s in arm.states):
        formulas += [s.utility, s.entry_qaly, *s.costs.values(), *s.entry_costs.values()]
    read = {n.name for f in formulas for n in f.walk() if n.op == "memory"}
    assert read == set(MEMORY)
    families = {"exponential", "weibull", "gompertz", "lognormal", "loglogistic"}
    assert {(k.hazard.family, k.scale) for k in clocks} >= {
        *((f, scale) for f in families for scale in ("sojourn", "elapsed", "age")), ("table", "age"), ("table", "sojourn")
    }  # fmt: skip
    assert {a.law.kind for s in PATHWAYS.values() for a in s.population.attributes if a.law} == {
        "normal", "lognormal", "gamma", "beta", "uniform", "choice", "constant"
    }  # fmt: skip


def test_every_clock_of_every_pathway_fires_for_somebody() -> None:
    silent = []
    for name, s in PATHWAYS.items():
        run = run_reference(s, patients=range(FIRST, FIRST + COMPARED), seed=SEED, arm="A")
        silent += [f"{name}: {k.name}" for k in s.arms[0].clocks if run.outcomes[f"events:{k.name}"].sum() == 0]
    assert not silent


def test_another_draw_gives_other_lives_in_both_engines() -> None:
    s = PATHWAYS["correlated people"]
    here, there = _compare(s, draw=0)["A"], _compare(s, draw=3)["A"]
    assert not np.any(here.outcomes["cost"] == there.outcomes["cost"])


def test_an_event_exactly_at_the_horizon_counts_in_both_engines() -> None:
    states = (
        state("Alive", start=1.0, utility=ONE),
        state("Hurt", utility=ONE, entry_costs={"bill": op("add", 5.0, 0.0)}),
    )
    clocks = (clock("hurt", "Alive", "Hurt", hazard("exponential", rate=0.25)),)
    long = study((states, clocks), horizon=1000.0)
    compiled_exit = _compiled(long, patients=40, first=7)["A"].sojourns[0][4]
    reference_exit = run_reference(long, patients=[7], seed=SEED, arm="A").sojourns[0].exit
    for moved, count in ((0.0, 1.0), (-1e-9, 0.0)):
        cut = replace(long, horizon=compiled_exit + moved)
        assert _compiled(cut, patients=40, first=7)["A"].outcomes["events:hurt"][0] == count
        cut = replace(long, horizon=reference_exit + moved)
        assert run_reference(cut, patients=[7], seed=SEED, arm="A").outcomes["events:hurt"][0] == count


def _redraw_what_is_left(self: Threshold, amount: float) -> None:
    self.firing += 1
    self.read()


def _forget_what_was_consumed(self: Threshold, amount: float) -> None:
    return None


def _repeat_the_threshold(self: Threshold) -> None:
    self.read()


def _no_ratio(self: Patient, clock: BoundClock) -> float:
    return 1.0


def _consume_without_ratio(self: Patient, clock: BoundClock, *, until: float) -> float:
    return 0.0 if clock.name == "death" else _CONSUMED(self, clock, until=until)


_CONSUMED = Patient.consumed
_ENTER = Memory.enter
_HAZARD_CONSUMED = hazards.consumed


def _start_is_no_visit(self: Memory, state: str, now: float) -> None:
    _ENTER(self, state, now)
    self.visits[state] -= 1 if now == 0.0 else 0


def _slightly_fast(hazard: Hazard, c0: float, c1: float, *, level: int = 0) -> float:
    return _HAZARD_CONSUMED(hazard, c0, c1, level=level) * (1.0 + 1e-8)


def _undiscounted_amounts(self: Discount, t: float) -> float:
    return 1.0


@pytest.mark.parametrize(
    ("owner", "method", "mistake"),
    [
        (Threshold, "consume", _redraw_what_is_left),
        (Threshold, "consume", _forget_what_was_consumed),
        (Threshold, "fire", _repeat_the_threshold),
        (Patient, "ratio", _no_ratio),
        (Patient, "consumed", _consume_without_ratio),
        (Memory, "enter", _start_is_no_visit),
        (hazards, "consumed", _slightly_fast),
        (Discount, "factor", _undiscounted_amounts),
    ],
    ids=lambda value: value.__name__.strip("_") if callable(value) else value,
)
def test_a_broken_reference_is_noticed(
    owner: object, method: str, mistake: Callable[..., object], monkeypatch: pytest.MonkeyPatch
) -> None:
    _compare(PATHWAYS["every memory function"])
    monkeypatch.setattr(owner, method, mistake)
    with pytest.raises(AssertionError):
        _compare(PATHWAYS["every memory function"])


def test_a_time_off_by_more_than_the_tolerance_is_noticed() -> None:
    assert _same_time(1.0 + 0.9e-9, 1.0, 1.0)
    assert not _same_time(1.0 + 1.1e-9, 1.0, 1.0)
    assert _same_time(1.0 + 1e-6, 1.0, 0.9e-6)
    assert not _same_time(1.0 + 1e-6, 1.0, 1.1e-6)
    assert _same_time(40.0, 40.0, 0.0)
    assert not _same_time(float(np.nextafter(40.0, 41.0)), 40.0, 0.0)


def _number(low: float, high: float) -> st.SearchStrategy[float]:
    return st.floats(low, high).map(lambda v: float(f"{v:.4g}"))


_FAMILIES = st.one_of(
    st.builds(lambda rate: hazard("exponential", rate=rate), _number(0.02, 2.0)),
    st.builds(lambda a, b: hazard("weibull", shape=a, scale=b), _number(0.5, 3.0), _number(0.3, 12.0)),
    st.builds(lambda a, b: hazard("gompertz", shape=a, rate=b), _number(-0.4, 0.4), _number(0.02, 0.5)),
    st.builds(lambda a, b: hazard("lognormal", meanlog=a, sdlog=b), _number(-1.0, 2.5), _number(0.3, 1.5)),
    st.builds(lambda a, b: hazard("loglogistic", shape=a, scale=b), _number(0.7, 3.0), _number(0.3, 12.0)),
    st.builds(
        lambda rates: Hazard("table", edges=tuple(float(i) for i in range(len(rates) + 1)), rates=(tuple(rates),)),
        st.lists(_number(0.0, 1.5), min_size=1, max_size=5),
    ),
)


@st.composite
def _ratios(draw: st.DrawFn, names: list[str]) -> Node:
    """exp(a visits), or exp(-a time_in), or zero until the second visit, or plain numbers."""
    of, size = draw(st.sampled_from(names)), draw(_number(0.0, 0.3))
    visits = op("min", memory("visits", of), 6.0)
    kind = draw(st.integers(0, 3))
    if kind == 0:
        return op("exp", op("mul", size, visits))
    if kind == 1:
        return op("exp", op("mul", -size, memory("time_in", of)))
    if kind == 2:
        return op("where", op("ge", visits, 2.0), 1.0 + size, 0.0)
    return op("add", 1.0, size)


@st.composite
def _pathways(draw: st.DrawFn) -> BoundStudy:
    """2 to 4 states, up to 3 clocks between any of them (self transitions too), and death from all."""
    names = ["P", "Q", "R", "S"][: draw(st.integers(2, 4))]
    states = [
        state(n, start=1.0 if n == "P" else 0.0, utility=op("sub", 0.9, op("mul", 0.02, memory("events"))),
              costs={"care": op("mul", 100.0, op("min", memory("visits", n), 4.0))})
        for n in names
    ]  # fmt: skip
    clocks = [
        clock(f"k{i}", sources, draw(st.sampled_from(names)), draw(_FAMILIES), ratio=draw(_ratios(names)),
              scale=draw(st.sampled_from(["sojourn", "elapsed"])))
        for i in range(draw(st.integers(1, 4)))
        for sources in [draw(st.lists(st.sampled_from(names), min_size=1, max_size=3, unique=True))]
    ]  # fmt: skip
    death = clock("death", names, "Dead", hazard("exponential", rate=draw(_number(0.05, 0.3))))
    return study(([*states, state("Dead", absorbing=True)], [*clocks, death]), horizon=12.0)


@settings(max_examples=100, deadline=None, derandomize=True)
@given(_pathways())
def test_both_engines_agree_on_generated_pathways(made: BoundStudy) -> None:
    _compare(made, patients=320, first=136, compared=8)
