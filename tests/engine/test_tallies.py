"""Occurrence, exposure and integrated hazards against a plain recount of the event log, cell by cell.

The recount knows only the log (who was where from when to when, and what fired), SciPy's cumulative hazards and the
definitions in records/simulation.py.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pytest
from bound_builder import ONE, attribute, clock, hazard, op, state, study

from microsim import rng
from microsim.engine.population import sample
from microsim.engine.run import Wants, simulate
from microsim.hazards.core import Hazard
from microsim.hazards.families import cumulative
from microsim.records.simulation import SimulationRecord
from microsim.study.bound import BoundAttribute, BoundStudy, Law
from microsim.study.expression import Node, const

SEED, N = 21, 120
AGE = BoundAttribute("age", Law("normal", {"mean": 62.0, "sd": 9.0}, (45.0, 80.0)))
SEX = BoundAttribute("sex", Law("choice", {"p0": 0.45, "p1": 0.55}), ("female", "male"))
FRAIL = BoundAttribute("frail", Law("gamma", {"shape": 3.0, "rate": 3.0}))
EDGES = tuple(50.0 + 0.5 * i for i in range(61))  # begins after the youngest, ends before the oldest
RATES = tuple(tuple(c * (i % 7) * np.exp(0.05 * i) for i in range(60)) for c in (0.004, 0.007))
TABLE = Hazard("table", by="sex", edges=EDGES, rates=RATES)
ON_AGE = {
    "exponential": hazard("exponential", rate=0.2),
    "weibull": hazard("weibull", shape=6.0, scale=70.0),
    "gompertz": hazard("gompertz", shape=0.09, rate=5e-4),
    "lognormal": hazard("lognormal", meanlog=4.2, sdlog=0.2),
    "loglogistic": hazard("loglogistic", shape=9.0, scale=70.0),
    "table": TABLE,
}
SHORT = {
    "exponential": hazard("exponential", rate=0.5),
    "weibull": hazard("weibull", shape=0.6, scale=2.0),
    "gompertz": hazard("gompertz", shape=-0.4, rate=0.7),
    "lognormal": hazard("lognormal", meanlog=0.3, sdlog=1.2),
    "loglogistic": hazard("loglogistic", shape=1.4, scale=2.0),
    "table": Hazard("table", edges=(0.0, 0.25, 0.5, 1.0, 3.0), rates=((0.9, 0.0, 2.0, 0.4),)),
}
CASES = [(f, s) for s in ("sojourn", "elapsed", "age") for f in SHORT]


def _study(family: str, scale: str, **options: object) -> BoundStudy:
    """Home, ward, home again; the named clock has patients' own ratios, twice as high in the second arm."""
    tested = (ON_AGE if scale == "age" else SHORT)[family]
    states = (
        state("Home", start=0.75, utility=op("mul", 0.2, attribute("frail")), costs={"care": const(10.0)}),
        state("Ward", start=0.25, utility=const(0.4), entry_costs={"care": op("mul", 7.0, attribute("frail"))},
              entry_qaly=const(-0.01)),
        state("Dead", absorbing=True, entry_costs={"care": const(3.0)}),
    )  # fmt: skip

    def clocks(times: Node | float) -> tuple:
        ratio = op("mul", attribute("frail"), times)
        return (
            clock("in", "Home", "Ward", hazard("weibull", shape=1.3, scale=1.7)),
            clock("out", "Ward", "Home", hazard("lognormal", meanlog=-1.0, sdlog=0.6)),
            clock("tested", ("Home", "Ward"), "Dead", tested, scale=scale, ratio=ratio),
        )

    both = (states, clocks(0.5)), (states, clocks(1.0))
    return study(*both, attributes=(AGE, SEX, FRAIL), **{"horizon": 7.3, "cycle": 0.25, **options})


@dataclass(frozen=True)
class Run:
    study: BoundStudy
    record: SimulationRecord
    rows: list[list[tuple[int, int, int, float, float]]]  # per arm: patient, state, arc, entry, exit
    attributes: np.ndarray


def _with_ends(rows: list[tuple[int, int, int, float, float]], s: BoundStudy, arcs: tuple) -> list:
    """The log without the sojourns it leaves out: those in an absorbing state that is worth nothing, until the horizon."""
    out = []
    for row, after in zip(rows, [*rows[1:], None], strict=True):
        out.append(row)
        if row[2] >= 0 and (after is None or after[0] != row[0]):
            assert s.arms[0].states[arcs[row[2]][2]].absorbing
            out.append((row[0], arcs[row[2]][2], -1, row[4], s.horizon))
    return out


def _run(s: BoundStudy, *, patients: int = N, seed: int = SEED) -> Run:
    logs: list[list[tuple[int, int, int, float, float]]] = [[] for _ in s.arms]

    def keep(first: int, chunk: object) -> None:
        for arm, (index, times) in enumerate(chunk.log):
            rows = zip(index[0] + first, index[1], index[2], *times, strict=True)
            logs[arm] += [(int(p), int(i), int(a), float(t0), float(t1)) for p, i, a, t0, t1 in rows]

    record = simulate(s, patients=patients, seed=seed, threads=2, wants=Wants(log=keep))
    logs = [_with_ends(rows, s, record.layout.arcs) for rows in logs]
    return Run(s, record, logs, sample(s.population, np.arange(patients), seed=seed))


def _count(run: Run, arm: int) -> dict[str, np.ndarray]:
    """The arrays of PathTally, summed over groups, from the log."""
    grid, layout = run.record.grid, run.record.layout
    s, a, t, d = len(layout.states), len(layout.arcs), grid.time, grid.sojourn
    out = {
        "present": np.zeros((s, t.size)),
        "exposure": np.zeros((s, t.size - 1)),
        "entries": np.zeros((s, t.size - 1)),
        "events": np.zeros((a, t.size - 1)),
        "exposure_sojourn": np.zeros((s, d.size - 1)),
        "events_sojourn": np.zeros((a, d.size - 1)),
    }
    for _, i, arc, t0, t1 in run.rows[arm]:
        # an event at the horizon itself is the last thing that happens, and belongs to the last cell
        last = t1 if arc >= 0 else np.inf
        out["present"][i] += (t0 <= t) & (t < last)
        out["exposure"][i] += np.clip(np.minimum(t1, t[1:]) - np.maximum(t0, t[:-1]), 0, None)
        out["exposure_sojourn"][i] += np.clip(np.minimum(t1 - t0, d[1:]) - d[:-1], 0, None)
        if arc >= 0:
            cell = min(int(np.searchsorted(t, t1, side="right")) - 1, t.size - 2)
            out["events"][arc, cell] += 1
            out["entries"][layout.arcs[arc][2], cell] += 1
            out["events_sojourn"][arc, min(int(np.searchsorted(d, t1 - t0, side="right")) - 1, d.size - 2)] += 1
    return out


def _integrals(run: Run, path: int, arm: int) -> tuple[np.ndarray, np.ndarray]:
    """Integrated hazards of ``arm`` along ``path`` on both grids, cell by cell from cumulative hazards."""
    grid, layout = run.record.grid, run.record.layout
    names = [x.name for x in run.study.population.attributes]
    on_time = np.zeros((len(layout.arcs), grid.time.size - 1))
    on_sojourn = np.zeros((len(layout.arcs), grid.sojourn.size - 1))
    for a, (k, source, _) in enumerate(layout.arcs):
        ck = run.study.arms[arm].clocks[k]
        for p, i, _, t0, t1 in run.rows[path]:
            if i != source:
                continue
            own = dict(zip(names, run.attributes[:, p], strict=True))
            ratio = own["frail"] * (0.5 if arm == 0 else 1.0) if ck.name == "tested" else 1.0
            origin = {"sojourn": 0.0, "elapsed": t0, "age": own["age"] + t0}[ck.scale]
            level = np.full(1, int(own["sex"])) if ck.hazard.by else None
            for grid_edges, shift, out in ((grid.time, t0, on_time), (grid.sojourn, 0.0, on_sojourn)):
                inside = (grid_edges > shift) & (grid_edges < shift + t1 - t0) & (grid_edges < grid_edges[-1])
                inner = grid_edges[inside] - shift
                cuts = np.concatenate([[0.0], inner, [t1 - t0]])
                levels = None if level is None else np.repeat(level, cuts.size)
                consumed = np.diff(cumulative(ck.hazard, origin + cuts, level=levels))
                first = int(np.searchsorted(grid_edges, shift, side="right")) - 1
                out[a, first : first + consumed.size] += ratio * consumed
    return on_time, on_sojourn


@pytest.fixture(scope="module", params=CASES, ids=lambda c: f"{c[0]} on {c[1]}")
def run(request: pytest.FixtureRequest) -> Run:
    return _run(_study(*request.param))


def _compare(run: Run, arm: int) -> None:
    path = run.record.paths[arm]
    for name, expected in _count(run, arm).items():
        got = getattr(path, name).sum(axis=0)
        np.testing.assert_allclose(got, expected, rtol=1e-10, atol=1e-9, err_msg=name)


def test_paths_are_what_a_recount_of_the_log_gives(run: Run) -> None:
    for arm in range(2):
        _compare(run, arm)


def test_hazards_along_own_and_other_paths_are_sums_of_cumulative_hazards(run: Run) -> None:
    for pair in ((0, 0), (0, 1), (1, 1)):
        on_time, on_sojourn = _integrals(run, *pair)
        tally = run.record.hazards[pair]
        assert on_time.sum() > 1.0 and on_sojourn.sum() > 1.0
        np.testing.assert_allclose(tally.integrated.sum(axis=0), on_time, rtol=1e-9, atol=1e-10)
        np.testing.assert_allclose(tally.integrated_sojourn.sum(axis=0), on_sojourn, rtol=1e-9, atol=1e-10)


def test_hazards_are_nowhere_negative_and_nothing_where_nobody_is(run: Run) -> None:
    for (path, _), tally in run.record.hazards.items():
        for a, (_, source, _) in enumerate(run.record.layout.arcs):
            hazards, empty = tally.integrated[:, a], run.record.paths[path].exposure[:, source] == 0.0
            rounding = 1e-13 * max(1.0, float(hazards.max()))  # running sums of ratios that have come and gone
            assert hazards.min() > -rounding and np.abs(hazards[empty]).max(initial=0.0) < rounding


def test_a_doubled_ratio_doubles_its_hazard_exactly_and_no_other(run: Run) -> None:
    own, carried = run.record.hazards[0, 0], run.record.hazards[0, 1]
    doubled = np.array([run.record.layout.clocks[k] == "tested" for k, _, _ in run.record.layout.arcs])
    for name in ("integrated", "integrated_sojourn"):
        a, b = getattr(own, name), getattr(carried, name)
        np.testing.assert_array_equal(b[:, doubled], 2.0 * a[:, doubled])
        np.testing.assert_array_equal(b[:, ~doubled], a[:, ~doubled])


def test_rewards_by_cell_are_those_of_the_people_there(run: Run) -> None:
    grid, frail = run.record.grid.time, run.attributes[2]
    reward, lump = (np.zeros((2, 3, grid.size - 1)) for _ in range(2))
    for p, i, arc, t0, t1 in run.rows[0]:
        time = np.clip(np.minimum(t1, grid[1:]) - np.maximum(t0, grid[:-1]), 0, None)
        reward[0, i] += (0.2 * frail[p], 0.4, 0.0)[i] * time
        reward[1, i] += (10.0, 0.0, 0.0)[i] * time
        if arc >= 0:
            target = run.record.layout.arcs[arc][2]
            cell = min(int(np.searchsorted(grid, t1, side="right")) - 1, grid.size - 2)
            lump[0, target, cell] += (0.0, -0.01, 0.0)[target]
            lump[1, target, cell] += (0.0, 7.0 * frail[p], 3.0)[target]
    tally = run.record.hazards[0, 0]
    np.testing.assert_allclose(tally.reward.sum(axis=0), reward, rtol=1e-10, atol=1e-9)
    np.testing.assert_allclose(tally.lump.sum(axis=0), lump, rtol=1e-10, atol=1e-10)


def test_a_recount_with_one_sojourn_missing_is_noticed() -> None:
    run = _run(_study("weibull", "sojourn"))
    with pytest.raises(AssertionError):
        _compare(replace(run, rows=[run.rows[0][1:], run.rows[1]]), 0)


@pytest.mark.parametrize(
    ("horizon", "cycle"),
    [(7.3, 10.0), (0.05, 0.25), (3.0, 1.0), (2.9999999999, 1.0), (1 / 3, 1 / 12), (40.0, 0.01), (7.0, 0.7)],
)
def test_grids_end_at_the_horizon_and_recounts_hold_whatever_the_cycle(horizon: float, cycle: float) -> None:
    run = _run(_study("loglogistic", "elapsed", horizon=horizon, cycle=cycle), patients=120)
    t = run.record.grid.time
    assert t[0] == 0.0 and t[-1] == horizon == run.record.grid.sojourn[-1] and np.all(np.diff(t) > 0)
    whole = np.diff(t)[:-1] / cycle
    np.testing.assert_allclose(whole, np.rint(whole), rtol=1e-6)
    assert t.size <= 162
    for arm in range(2):
        _compare(run, arm)


@pytest.mark.parametrize("patients", [40, 41, 79, 81, 1025 * 40 + 7])
def test_any_number_of_patients_is_counted_once(patients: int) -> None:
    s = _study("exponential", "elapsed")
    seen: list[int] = []

    def keep(first: int, chunk: object) -> None:
        assert first == len(seen)
        seen.extend(range(first, first + chunk.outcomes.shape[2]))

    m = simulate(s, patients=patients, seed=1, threads=2, wants=Wants(outcomes=keep)).moments
    assert len(seen) == m.patients == m.group_patients.sum() == patients
    assert m.group_patients.size == 40 and m.group_patients.min() >= patients // 40
    assert m.group_patients.max() <= -(-patients // 40) + 1


def _stages() -> tuple:
    states = (state("A", start=1.0, utility=ONE), state("B"), state("End", absorbing=True))
    clocks = (
        clock("ab", "A", "B", hazard("exponential", rate=1.0)),
        clock("end", "B", "End", hazard("exponential", rate=1.0)),
    )
    return states, clocks


@pytest.mark.parametrize("patient", [3, 8, 21])
@pytest.mark.parametrize(
    ("cycles", "cycle_of"), [(3, 1.0), (1, 1.0), (1, 0.25)], ids=["inner edge", "one cell", "horizon"]
)
def test_an_event_on_an_edge_of_the_grid_is_counted_once(patient: int, cycles: int, cycle_of: float) -> None:
    """The cycle or the horizon is a patient's own first event time, so that event lies on an edge to the last bit."""
    at = float(rng.thresholds([patient], seed=SEED, clock="ab")[0])
    run = _run(study(_stages(), horizon=at * cycles, cycle=at * cycle_of), patients=40)
    assert at in run.record.grid.time and any(r[4] == at and r[2] == 0 for r in run.rows[0])
    _compare(run, 0)
