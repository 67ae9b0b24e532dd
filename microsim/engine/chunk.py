"""One chunk of patients through every arm: outcomes, moments and tallies of a fixed range of patients.

A chunk is the unit of work and of reduction: its content depends on the study, the seed and its patient range only,
never on the thread that ran it. Kernel status codes become exceptions here.
"""

from __future__ import annotations

import threading
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from microsim.engine import columns, moments, population, queue, tally
from microsim.engine.workspace import Workspace
from microsim.errors import SimulationError
from microsim.program import FieldTable, Program
from microsim.records.simulation import Grid, Layout
from microsim.study.bound import BoundStudy

F = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Plan:
    """What every chunk of a run shares."""

    study: BoundStudy
    layout: Layout
    grid: Grid
    table: FieldTable
    programs: tuple[Program, ...]
    pairs: tuple[tuple[int, int], ...]  # (path arm, evaluated arm); empty = no tallies
    seed: int
    draw: int
    chunk: int
    keep_log: bool
    keep_outcomes: bool


@dataclass(frozen=True, slots=True)
class ChunkResult:
    """mean float64[x, m]; within float64[m, x, x] and money float64[2x, 2x]: centred sums of products; start float64[s].

    paths, hazards: raw tally arrays; log: per arm (patient, arc, state) int64 and (entry, exit) float64 rows.
    """

    index: int
    layout: Layout
    patients: int
    mean: F
    within: F
    money: F
    start: F
    paths: tuple[tuple[F, ...], ...]
    hazards: dict[tuple[int, int], tuple[F, ...]]
    log: tuple[tuple[npt.NDArray[np.int64], F], ...]
    outcomes: F | None


def path_arrays(plan: Plan) -> tuple[F, ...]:
    """Zeroed sums of one arm's paths, in the order ``tally.tally_paths`` takes them."""
    s, a = len(plan.layout.states), len(plan.layout.arcs)
    t, d = plan.grid.time.size, plan.grid.sojourn.size
    shapes = [(s, t + 1), (s, t), (s, t), (s, t - 1), (a, t - 1), (s, d), (s, d), (a, d - 1)]
    return tuple(np.zeros(shape) for shape in shapes)


def hazard_arrays(plan: Plan) -> tuple[F, ...]:
    """Zeroed sums of one arm's hazards along a path, in the order ``tally.tally_hazards`` takes them."""
    s, a, r = len(plan.layout.states), len(plan.layout.arcs), 1 + len(plan.layout.categories)
    t, d = plan.grid.time.size, plan.grid.sojourn.size
    shapes = [(a, t - 1), (a, t), (a, t), (a, d - 1), (a, d), (a, d), (r, s, t), (r, s, t), (r, s, t - 1)]
    return tuple(np.zeros(shape) for shape in shapes)


class ChunkRunner:
    """Callable(index, first patient, patients) -> ChunkResult; keeps one workspace per thread."""

    def __init__(self, plan: Plan) -> None:
        self.plan = plan
        self.local = threading.local()
        seed = plan.seed
        self.key = np.uint64(seed & 0xFFFFFFFF), np.uint64(seed >> 32), np.uint64(plan.draw)

    def _workspace(self) -> Workspace:
        if not hasattr(self.local, "workspace"):
            plan = self.plan
            rows = 16 * plan.chunk + 4096 if plan.pairs or plan.keep_log else 0
            self.local.workspace = Workspace(
                plan.programs, plan.layout, chunk=plan.chunk, edges=plan.grid.time.size, log_rows=rows
            )
        workspace: Workspace = self.local.workspace
        return workspace

    def _simulate(self, arm: int, first: int, attributes: F, start: npt.NDArray[np.int64], out: F) -> None:
        """Fill out float64[m, n] with the outcomes of the arm's patients; the log stays in the workspace."""
        ws, program, n = self._workspace(), self.plan.programs[arm], start.size
        while True:
            queue.run_chunk(
                program.arrays, *self.key, first, n, attributes, start, ws.memory, ws.remaining, ws.accumulators, ws.rows,
                ws.x, ws.ints, ws.words, ws.waiting, ws.counts, ws.present, ws.log_index, ws.log_value, ws.status,
            )  # fmt: skip
            if ws.status[0] != columns.LOG_FULL:
                break
            ws.resize_log(2 * ws.log_value.shape[1])
        if ws.status[0] != columns.OK:
            self._fail(arm, first, attributes)
        sums = program.outcomes
        queue.collect_outcomes(sums.ptr, sums.row, sums.weight, sums.constant, n, ws.accumulators, out)

    def _fail(self, arm: int, first: int, attributes: F, *, along: int | None = None) -> None:
        """Turn the workspace's status into an exception that names patient, state, formula and memory.

        along: the strategy whose paths the arm's formulas were evaluated on, if not its own run.
        """
        ws, plan = self._workspace(), self.plan
        name = plan.layout.strategies[arm]
        if ws.status[0] == columns.RUNAWAY:
            raise SimulationError(
                f"strategy {name}: more than {columns.MAX_EVENTS:,.0f} events a patient; some clocks fire again and again in "
                "almost no time. Check hazards and their time units."
            )
        i = int(ws.status[1])
        what, state, _ = plan.programs[arm].formulas[int(ws.status[2])]
        values = {a.name: attributes[j, i] for j, a in enumerate(plan.study.population.attributes)}
        if along is None:
            values["time"] = ws.memory[0, i]
        for f, (kind, s) in enumerate(plan.table.fields if along is None else ()):
            values[kind if kind in ("events", "previous") else f"{kind}({plan.layout.states[s]})"] = ws.memory[3 + f, i]
        if along is not None:
            name += f" (its formulas along the patients of {plan.layout.strategies[along]}, for carried rates)"
        known = ", ".join(f"{k} = {v:.6g}" for k, v in values.items())
        raise SimulationError(
            f"strategy {name}, patient {first + i}, state {state}: {what} is not a finite number"
            f"{' at or above zero' if what.startswith('ratio') else ''} where {known}. Bound the formula, for instance "
            "with min(...) or clip(...)."
        )

    def _tally(
        self, path: int, first: int, attributes: F
    ) -> tuple[tuple[F, ...], dict[tuple[int, int], tuple[F, ...]]]:
        ws, plan, blocks = self._workspace(), self.plan, int(self._workspace().status[4])
        paths = path_arrays(plan)
        log = ws.log_index, ws.log_value, blocks, plan.grid.time, plan.grid.sojourn
        tally.tally_paths(plan.programs[path].arrays, *log, *paths)
        hazards = {}
        for pair in (p for p in plan.pairs if p[0] == path):
            hazards[pair] = hazard_arrays(plan)
            arguments: tuple[Any, ...] = (*log, attributes, *ws.tally_scratch(), *hazards[pair], ws.status)
            tally.tally_hazards(plan.programs[pair[1]].arrays, *arguments)
            if ws.status[0] != columns.OK:
                self._fail(pair[1], first, attributes, along=path)
        return paths, hazards

    def _sojourns(self) -> tuple[npt.NDArray[np.int64], F]:
        """Logged sojourns in order of patient and entry time: (patient, state, arc) and (entry, exit)."""
        ws = self._workspace()
        n, blocks = int(ws.status[3]), int(ws.status[4])
        spans = ws.log_index[2, : 3 * blocks].reshape(-1, 3)
        states = np.repeat(spans[:, 0], spans[:, 2])
        order = np.lexsort((ws.log_value[0, :n], ws.log_index[0, :n]))
        return np.stack([ws.log_index[0, :n], states, ws.log_index[1, :n]])[:, order], ws.log_value[:2, :n][:, order]

    def __call__(self, index: int, first: int, patients: int) -> ChunkResult:
        plan = self.plan
        ids = np.arange(first, first + patients, dtype=np.int64)
        attributes = np.ascontiguousarray(population.sample(plan.study.population, ids, seed=plan.seed, draw=plan.draw))
        start = population.sample_start(plan.study.arms[0], ids, seed=plan.seed, draw=plan.draw)
        arms, names = len(plan.programs), plan.layout.outcomes
        values = self._workspace().outcome_rows((arms, len(names), patients))
        paths, hazards, logs = [], {}, []
        for arm in range(arms):
            self._simulate(arm, first, attributes, start, values[arm])
            if plan.pairs:
                path, more = self._tally(arm, first, attributes)
                paths.append(path)
                hazards.update(more)
            if plan.keep_log:
                logs.append(self._sojourns())
        kept = values.copy() if plan.keep_outcomes else None
        mean, money = np.empty((arms, len(names))), np.empty((2 * arms, 2 * arms))
        within = np.empty((len(names), arms, arms))
        money_columns = np.array([names.index(o) for o in ("cost_disc", "qaly_disc")])
        moments.chunk_moments(values, money_columns, mean, within, money)
        return ChunkResult(
            index=index,
            layout=plan.layout,
            patients=patients,
            mean=mean,
            within=within,
            money=money,
            start=np.bincount(start, minlength=len(plan.layout.states)).astype(np.float64),
            paths=tuple(paths),
            hazards=hazards,
            log=tuple(logs),
            outcomes=kept,
        )
