"""BoundStudy -> SimulationRecord: cuts patients into chunks, runs them on threads, and adds up in fixed order.

The number of chunks depends on the number of patients only, and results are added in the order of chunks, so numbers are
identical for any number of threads. Each chunk belongs to one of 40 groups, the blocks of the jackknife.
"""

from __future__ import annotations

import threading
from collections import deque
from collections.abc import Callable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import numpy.typing as npt

from microsim.engine import tally
from microsim.engine.chunk import ChunkResult, ChunkRunner, Plan, hazard_arrays, path_arrays
from microsim.errors import SimulationError
from microsim.program import compile_arm, field_table, make_layout
from microsim.records.simulation import Grid, HazardTally, Moments, PathTally, SimulationRecord
from microsim.study.bound import BoundStudy

F = npt.NDArray[np.float64]

GROUPS = 40
CHUNK = 2048
TIME_CELLS = 160
SOJOURN_CELLS = 32
Progress = Callable[[int, int], None]
Sink = Callable[[int, ChunkResult], None]


@dataclass(frozen=True, slots=True)
class Wants:
    """What a run keeps beyond moments: tallies for cohort models; sinks get each chunk, in order, with the first
    patient's number, its sojourn log or its per-patient outcomes."""

    tallies: bool = True
    log: Sink | None = None
    outcomes: Sink | None = None


def make_grid(study: BoundStudy) -> Grid:
    """Cells of elapsed time are whole cohort cycles, about 160 over the horizon; sojourn cells widen geometrically."""
    cycle, horizon = study.cohort.cycle, study.horizon
    cell = cycle * max(1, int(np.ceil(horizon / cycle / TIME_CELLS)))
    inner = np.arange(1, int(np.ceil(horizon / cell * (1 - 1e-12)))) * cell
    first = min(cycle / 16, horizon / 64)
    return Grid(
        time=np.concatenate([[0.0], inner, [horizon]]),
        sojourn=np.concatenate([[0.0], np.geomspace(first, horizon, SOJOURN_CELLS)]),
    )


def _cuts(patients: int) -> list[tuple[int, int]]:
    """(first patient, patients) of every chunk; the number of chunks is a multiple of the number of groups."""
    chunks = GROUPS * max(1, -(-patients // (GROUPS * CHUNK)))
    edges = [patients * i // chunks for i in range(chunks + 1)]
    return [(a, b - a) for a, b in pairwise(edges) if b > a]


class _Totals:
    """Running sums over chunks, per group where the jackknife needs them."""

    def __init__(self, plan: Plan) -> None:
        x, m, s = len(plan.programs), len(plan.layout.outcomes), len(plan.layout.states)
        self.plan = plan
        self.patients = 0
        self.mean = np.zeros((x, m))
        self.within = np.zeros((m, x, x))
        self.money = np.zeros((2 * x, 2 * x))
        self.money_columns = [plan.layout.outcomes.index(o) for o in ("cost_disc", "qaly_disc")]
        self.group_patients = np.zeros(GROUPS, dtype=np.int64)
        self.group_sum = np.zeros((GROUPS, x, m))
        self.start = np.zeros(s)
        tallied = bool(plan.pairs)
        self.paths = [[np.zeros((GROUPS, *a.shape)) for a in path_arrays(plan)] for _ in range(x if tallied else 0)]
        self.hazards = {pair: [np.zeros((GROUPS, *a.shape)) for a in hazard_arrays(plan)] for pair in plan.pairs}

    def add(self, chunk: ChunkResult) -> None:
        """Pairwise update of means and centred products (Chan, Golub and LeVeque 1983), and plain sums."""
        n, k, g = self.patients, chunk.patients, chunk.index % GROUPS
        delta = chunk.mean - self.mean
        weight = n * k / (n + k)
        self.within += chunk.within + weight * np.einsum("xm,ym->mxy", delta, delta)
        d = delta[:, self.money_columns].reshape(-1)
        self.money += chunk.money + weight * np.outer(d, d)
        self.mean += delta * (k / (n + k))
        self.patients += k
        self.group_patients[g] += k
        self.group_sum[g] += chunk.mean * k
        self.start += chunk.start
        for totals, arrays in zip(self.paths, chunk.paths, strict=True):
            for total, array in zip(totals, arrays, strict=True):
                total[g] += array
        for pair, arrays in chunk.hazards.items():
            for total, array in zip(self.hazards[pair], arrays, strict=True):
                total[g] += array

    def _path(self, arrays: list[F]) -> PathTally:
        present, full, part, entries, events, full_d, part_d, events_d = arrays
        time, sojourn = self.plan.grid.time, self.plan.grid.sojourn
        return PathTally(
            present=np.cumsum(present[..., :-1], axis=-1),
            exposure=tally.exposure_of(full, part, time),
            entries=entries,
            events=events,
            exposure_sojourn=tally.exposure_of(full_d, part_d, sojourn),
            events_sojourn=events_d,
        )

    def _hazard(self, arrays: list[F]) -> HazardTally:
        integrated, full, part, integrated_d, full_d, part_d, reward_full, reward_part, lump = arrays
        time, sojourn = self.plan.grid.time, self.plan.grid.sojourn
        return HazardTally(
            integrated=integrated + tally.exposure_of(full, part, time),
            integrated_sojourn=integrated_d + tally.exposure_of(full_d, part_d, sojourn),
            reward=tally.exposure_of(reward_full, reward_part, time),
            lump=lump,
        )

    def record(self) -> SimulationRecord:
        used = self.group_patients > 0
        n = self.patients
        moments = Moments(
            patients=n,
            mean=self.mean,
            covariance=self.within / (n - 1),
            money=self.money / (n - 1),
            group_patients=self.group_patients[used],
            group_mean=self.group_sum[used] / self.group_patients[used, None, None],
        )
        return SimulationRecord(
            layout=self.plan.layout,
            grid=self.plan.grid,
            moments=moments,
            paths=tuple(self._path([a[used] for a in arrays]) for arrays in self.paths),
            hazards={pair: self._hazard([a[used] for a in arrays]) for pair, arrays in self.hazards.items()},
            start=self.start / n,
        )


def make_plan(study: BoundStudy, *, patients: int, seed: int, draw: int = 0, wants: Wants = Wants()) -> Plan:
    """Compile every arm and fix grids and chunk size. Raises SimulationError for sizes out of range."""
    if not 40 <= patients < 2**32:
        raise SimulationError(f"patients must be at least 40 and below 2**32 (found {patients})")
    if not 0 <= seed < 2**64:
        raise SimulationError(f"seed must be from 0 to 2**64 - 1 (found {seed})")
    layout, table, grid = make_layout(study), field_table(study), make_grid(study)
    cell = float(grid.time[1])
    programs = tuple(compile_arm(study, arm, layout=layout, table=table, cell=cell) for arm in study.arms)
    base = layout.strategies.index(study.decision.comparator)
    pairs = sorted({(i, i) for i in range(len(programs))} | {(base, j) for j in range(len(programs))})
    return Plan(
        study=study,
        layout=layout,
        grid=grid,
        table=table,
        programs=programs,
        pairs=tuple(pairs) if wants.tallies else (),
        seed=seed,
        draw=draw,
        chunk=max(n for _, n in _cuts(patients)),
        keep_log=wants.log is not None,
        keep_outcomes=wants.outcomes is not None,
    )


def _in_order(runner: ChunkRunner, cuts: list[tuple[int, int]], threads: int) -> Iterator[ChunkResult]:
    """Chunk results in order; at most a few are in flight. On any exception the pool stops after the chunks it is in."""
    stop = threading.Event()

    def work(index: int, first: int, patients: int) -> ChunkResult | None:
        return None if stop.is_set() else runner(index, first, patients)

    waiting: deque[Future[ChunkResult | None]] = deque()
    with ThreadPoolExecutor(threads) as pool:
        try:
            jobs = iter(enumerate(cuts))
            for i, (first, n) in jobs:
                waiting.append(pool.submit(work, i, first, n))
                if len(waiting) < 2 * threads:
                    continue
                result = waiting.popleft().result()
                assert result is not None
                yield result
            while waiting:
                result = waiting.popleft().result()
                assert result is not None
                yield result
        finally:
            stop.set()


def simulate(
    study: BoundStudy,
    *,
    patients: int,
    seed: int,
    draw: int = 0,
    threads: int = 1,
    wants: Wants = Wants(),
    progress: Progress | None = None,
) -> SimulationRecord:
    """Run every arm on the same patients.

    patients: at least 40; seed: 0 to 2**64 - 1; progress(done, total) is called from the calling thread after each
    chunk. Raises SimulationError naming patient, state and formula where a value is not usable.
    """
    plan = make_plan(study, patients=patients, seed=seed, draw=draw, wants=wants)
    totals, cuts = _Totals(plan), _cuts(patients)
    for chunk in _in_order(ChunkRunner(plan), cuts, threads):
        totals.add(chunk)
        for sink in (wants.log, wants.outcomes):
            if sink is not None:
                sink(cuts[chunk.index][0], chunk)
        if progress is not None:
            progress(totals.patients, patients)
    return totals.record()
