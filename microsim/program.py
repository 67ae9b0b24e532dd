"""BoundStudy -> Program: the only place where names become indices and formulas become a register tape.

A Program is plain arrays for one arm, in the shapes the compiled kernels expect; every kernel input about a study is
built here and nowhere else, so each kernel sees one signature. Knows nothing of files, fits or results.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from microsim.errors import SimulationError
from microsim.hazards import core
from microsim.records.simulation import Layout
from microsim.rng import stream_id
from microsim.study.bound import BoundArm, BoundClock, BoundState, BoundStudy
from microsim.study.expression import ARITY, MEMORY, Node, const

F = npt.NDArray[np.float64]
I = npt.NDArray[np.int64]  # noqa: E741

MAX_STATES, MAX_CLOCKS, MAX_ROWS, MAX_TABLE_CELLS = 64, 256, 512, 100_000

# Opcodes, scales, families and memory kinds as the kernels number them; a test holds them to the kernels' own tables.
OPCODES = {
    name: code
    for code, name in enumerate(
        ("add", "sub", "mul", "div", "min", "max", "neg", "abs", "exp", "log", "sqrt", "pow",
         "lt", "le", "gt", "ge", "eq", "ne", "and", "or", "not", "where")
    )
}  # fmt: skip
FAMILIES = {name: code for code, name in enumerate((*core.PARAMETERS, "table"))}
SCALES = {"sojourn": 0, "elapsed": 1, "age": 2}
FIELD_KINDS = {
    name: code
    for code, name in enumerate(("events", "visits", "time_in", "last_entry", "last_exit", "last_stay", "previous"))
}
# How a register row is filled at entry to a state.
FROM_ATTRIBUTE, FROM_FIELD, FROM_TIME_SINCE, FROM_PREVIOUS, FROM_ELAPSED, FROM_AGE = range(6)
FIXED_FIELDS = 3  # entry time, discount integrals for costs and effects

_FIELD_OF = {
    "visits": "visits", "time_in": "time_in", "since_entry": "last_entry", "since_exit": "last_exit",
    "last_stay": "last_stay", "events": "events", "came_from": "previous",
}  # fmt: skip
assert set(_FIELD_OF) | {"at_entry"} == set(MEMORY)


class Arrays(NamedTuple):
    """Kernel input about one arm.

    sizes int64[7]: states, clocks, arcs, fields, constants, rewards, row of the attribute age (-1 = none).
    arcs int64[a, 9]: clock, target, scale, family, ratio row (-1 = 1), then for tables start, stride and attribute of
    the level, and whether the clock may be armed again after firing. Ordered by state, tables last within a state.
    arc_par float64[a, 4]: family parameters, or for a table first edge, cell width, 1 / width, cells.
    states int64[s, 15]: 1 = absorbing and worth nothing; from and to of its arcs, tape, gather, flow, lump and checks;
    accumulators of discounted arrivals (costs, effects; -1 = none).
    tape int64[n, 5]: opcode, destination, three operands. gather int64[n, 4]: how, source, state, row.
    fields int64[f, 2]: kind, state. flow and lump int64[n, 4]: row, undiscounted and discounted accumulator, 1 = effect.
    checks int64[n, 3]: row, formula number, 1 = a ratio. reward_row int64[s, r]; lump_row int64[s, r] (-1 = none).
    numbers float64[6]: horizon, force of discount for costs, for effects, 1 = annual steps, years per unit, cell width.
    outcome_*: outcomes as weighted sums of accumulators (row pointers, accumulator, weight) plus a constant.
    """

    sizes: I
    arcs: I
    arc_par: F
    states: I
    tape: I
    gather: I
    fields: I
    flow: I
    lump: I
    checks: I
    reward_row: I
    lump_row: I
    consts: F
    table_cum: F
    table_rate: F
    stream: npt.NDArray[np.uint64]
    numbers: F


@dataclass(frozen=True, slots=True)
class OutcomeSums:
    """outcome m = constant[m] + sum over ptr[m]:ptr[m+1] of weight * accumulator[row]."""

    ptr: I
    row: I
    weight: F
    constant: F


@dataclass(frozen=True, slots=True)
class Program:
    """arrays and outcome sums of one arm; formulas: number -> (what it is, state, tree) for messages."""

    arrays: Arrays
    outcomes: OutcomeSums
    formulas: tuple[tuple[str, str, Node], ...]
    rows: int
    accumulators: int


@dataclass(frozen=True, slots=True)
class FieldTable:
    """Memory fields any formula of any arm reads: (kind, state index); ``index`` gives the row in patient memory."""

    fields: tuple[tuple[str, int], ...]

    def index(self, kind: str, state: int) -> int:
        return FIXED_FIELDS + self.fields.index((kind, state))


def make_layout(study: BoundStudy) -> Layout:
    """Names and order of everything an engine returns."""
    states = tuple(s.name for s in study.arms[0].states)
    clocks = study.arms[0].clocks
    arcs = tuple(
        (k, states.index(source), states.index(clock.target))
        for s in states
        for is_table in (False, True)
        for k, clock in enumerate(clocks)
        for source in clock.sources
        if source == s and (clock.hazard.family == "table") == is_table
    )
    outcomes = ["ly", "ly_disc", "qaly", "qaly_disc", "cost", "cost_disc"]
    for c in study.categories:
        outcomes += [f"cost:{c}", f"cost_disc:{c}"]
    outcomes += [f"time:{s}" for s in states] + [f"entries:{s}" for s in states] + [f"events:{k.name}" for k in clocks]
    return Layout(
        strategies=tuple(a.name for a in study.arms),
        states=states,
        clocks=tuple(k.name for k in clocks),
        arcs=arcs,
        categories=study.categories,
        outcomes=tuple(outcomes),
    )


def _cheaper(node: Node) -> Node:
    """The same formula with powers of a positive constant as exponentials, and squares and roots as what they are."""
    if node.op not in ARITY:
        return node
    args = tuple(_cheaper(a) for a in node.args)
    if node.op == "pow" and args[0].is_const and args[0].value > 0.0:
        return Node("exp", (Node("mul", (args[1], const(math.log(args[0].value)))),))
    if node.op == "pow" and args[1].is_const and args[1].value in (0.5, 2.0):
        return Node("sqrt", args[:1]) if args[1].value == 0.5 else Node("mul", (args[0], args[0]))
    return Node(node.op, args)


def _formulas(arm: BoundArm) -> list[Node]:
    out = [k.ratio for k in arm.clocks]
    for s in arm.states:
        out += [s.utility, s.entry_qaly, *s.costs.values(), *s.entry_costs.values()]
    return out


def field_table(study: BoundStudy) -> FieldTable:
    """Union of the memory fields of all arms, so that one arm's formulas can be evaluated on another arm's paths."""
    names = [s.name for s in study.arms[0].states]
    found: set[tuple[str, int]] = set()
    for node in (n for arm in study.arms for f in _formulas(arm) for n in f.walk()):
        if node.op == "memory" and node.name in _FIELD_OF:
            kind = _FIELD_OF[node.name]
            found.add((kind, 0 if kind in ("events", "previous") else names.index(node.of)))
    return FieldTable(tuple(sorted(found, key=lambda f: (FIELD_KINDS[f[0]], f[1]))))


class _Lowering:
    """Lowers the formulas of one arm; constants are shared, registers start afresh in every state."""

    def __init__(self, study: BoundStudy, table: FieldTable, formulas: Iterable[Node]) -> None:
        self.attributes = [a.name for a in study.population.attributes]
        self.states = [s.name for s in study.arms[0].states]
        self.table = table
        leaves = (n for formula in formulas for n in _cheaper(formula).walk())
        self.consts = list(dict.fromkeys([0.0, *(n.value for n in leaves if n.is_const)]))
        self.tape: list[tuple[int, ...]] = []
        self.gather: list[tuple[int, ...]] = []
        self.known: dict[Node, int] = {}
        self.next_row = 0
        self.highest = len(self.consts)

    def start_state(self) -> None:
        self.known = {}
        self.next_row = len(self.consts)

    def _row(self, node: Node) -> int:
        self.known[node] = self.next_row
        self.next_row += 1
        self.highest = max(self.highest, self.next_row)
        if self.highest > MAX_ROWS:
            raise SimulationError(f"formulas of one state need more than {MAX_ROWS} registers; simplify or merge them")
        return self.known[node]

    def lower(self, node: Node) -> int:
        """Register row that holds the formula's value."""
        return self._lower(_cheaper(node))

    def _lower(self, node: Node) -> int:
        if node.is_const:
            return self.consts.index(node.value)
        if node in self.known:
            return self.known[node]
        if node.op in ARITY:
            args = [self._lower(a) for a in node.args]
            row = self._row(node)
            self.tape.append((OPCODES[node.op], row, *(args + [args[0]] * 2)[:3]))
            return row
        leaf = self._leaf(node)
        row = self._row(node)
        self.gather.append((*leaf, row))
        return row

    def _leaf(self, node: Node) -> tuple[int, int, int]:
        if node.op == "attribute":
            return FROM_ATTRIBUTE, self.attributes.index(node.name), 0
        if node.op != "memory":
            raise SimulationError(f"a formula still holds {node.op} {node.name!r}: bind the study first")
        if node.name == "at_entry":
            return (FROM_ELAPSED, 0, 0) if node.of == "elapsed" else (FROM_AGE, self.attributes.index("age"), 0)
        kind = _FIELD_OF[node.name]
        if kind == "previous":
            return FROM_PREVIOUS, self.table.index(kind, 0), self.states.index(node.of)
        source = self.table.index(kind, 0 if kind == "events" else self.states.index(node.of))
        return (FROM_TIME_SINCE if kind in ("last_entry", "last_exit") else FROM_FIELD), source, 0


def _table_arrays(clocks: tuple[BoundClock, ...]) -> tuple[F, F, dict[str, tuple[list[float], int, int]]]:
    """Flat cumulative hazards and rates of all tables on uniform cells; clock -> (kernel parameters, start, stride)."""
    cum: list[F] = [np.zeros(1)]
    rate: list[F] = [np.zeros(1)]
    where: dict[str, tuple[list[float], int, int]] = {}
    start = 1
    for k in (k for k in clocks if k.hazard.family == "table"):
        edges = np.asarray(k.hazard.edges)
        widths = np.diff(edges)
        width = float(widths.min())
        cells = np.rint(widths / width)
        if not np.allclose(cells * width, widths, rtol=1e-9) or cells.sum() > MAX_TABLE_CELLS:
            raise SimulationError(f"clock {k.name}: table cells must be whole multiples of the shortest cell")
        for row in k.hazard.rates:
            fine = np.repeat(np.asarray(row), cells.astype(int))
            rate.append(fine)
            cum.append(np.concatenate([[0.0], np.cumsum(fine * width)[:-1]]))
        n = int(cells.sum())
        where[k.name] = ([float(edges[0]), width, 1.0 / width, float(n)], start, n if k.hazard.by else 0)
        start += n * len(k.hazard.rates)
    return np.concatenate(cum), np.concatenate(rate), where


def _rearmable(layout: Layout) -> list[int]:
    """Per arc, 1 if a clock that has just fired along it may be armed again later."""
    n = len(layout.states)
    reach = np.eye(n, dtype=np.int64)
    for _, s, t in layout.arcs:
        reach[s, t] = 1
    for _ in range(n):
        reach = np.minimum(reach @ reach, 1)
    return [int(any(reach[t, s2] for k2, s2, _ in layout.arcs if k2 == k)) for k, _, t in layout.arcs]


def _rows(values: Sequence[Sequence[int]], width: int) -> I:
    return np.array(values, dtype=np.int64).reshape(-1, width)


class _Accumulators:
    """Which row of a patient's accumulators holds what, and how outcomes are sums of them."""

    def __init__(self, layout: Layout, one_rate: bool) -> None:
        self.layout = layout
        self.one_rate = one_rate  # one discount rate: the kernel keeps one set of discounted times
        self.names: dict[tuple[str, int], int] = {}
        for kind, size in (("time", len(layout.states)), ("fired", len(layout.clocks)), ("cost", len(layout.states))):
            for i in range(size):
                self.get(kind, i)
        for i in range(len(layout.states)):
            self.get("effect", i)
        self.weights: dict[str, dict[int, float]] = {o: {} for o in layout.outcomes}
        self.constant = dict.fromkeys(layout.outcomes, 0.0)

    def get(self, kind: str, key: int) -> int:
        if self.one_rate and kind in ("effect", "entry_effect"):
            kind = kind.replace("effect", "cost")
        return self.names.setdefault((kind, key), len(self.names))

    def add(self, outcome: str, row: int, weight: float) -> None:
        if weight != 0.0:
            self.weights[outcome][row] = self.weights[outcome].get(row, 0.0) + weight

    def sums(self) -> OutcomeSums:
        outcomes = self.layout.outcomes
        pairs = [(row, weight) for o in outcomes for row, weight in sorted(self.weights[o].items())]
        return OutcomeSums(
            ptr=np.concatenate([[0], np.cumsum([len(self.weights[o]) for o in outcomes])]).astype(np.int64),
            row=np.array([row for row, _ in pairs], dtype=np.int64),
            weight=np.array([weight for _, weight in pairs], dtype=np.float64),
            constant=np.array([self.constant[o] for o in outcomes]),
        )


class _ArmCompiler:
    """Builds one arm's tables state by state."""

    def __init__(self, study: BoundStudy, arm: BoundArm, layout: Layout, table: FieldTable) -> None:
        self.study, self.arm, self.layout, self.table = study, arm, layout, table
        d = study.discounting
        self.low = _Lowering(study, table, _formulas(arm))
        self.acc = _Accumulators(layout, d.costs == d.effects)
        self.formulas: list[tuple[str, str, Node]] = []
        self.flow: list[tuple[int, ...]] = []
        self.lump: list[tuple[int, ...]] = []
        self.checks: list[tuple[int, ...]] = []
        rewards = 1 + len(study.categories)
        self.reward_row = np.zeros((len(layout.states), rewards), dtype=np.int64)
        self.lump_row = np.full((len(layout.states), rewards), -1, dtype=np.int64)
        self.ratio = [-1] * len(layout.arcs)
        self.states: list[list[int]] = []

    def _check(self, what: str, state: BoundState, node: Node, row: int, is_ratio: bool) -> None:
        self.checks.append((row, len(self.formulas), int(is_ratio)))
        self.formulas.append((what, state.name, node))

    def _outcomes_of(self, reward: int) -> list[tuple[str, str]]:
        """(undiscounted, discounted) outcomes a reward adds to."""
        if reward == 0:
            return [("qaly", "qaly_disc")]
        name = self.study.categories[reward - 1]
        return [("cost", "cost_disc"), (f"cost:{name}", f"cost_disc:{name}")]

    def _marks(self) -> tuple[int, int, int, int, int]:
        return len(self.low.tape), len(self.low.gather), len(self.flow), len(self.lump), len(self.checks)

    def add_state(self, s: int) -> None:
        state = self.arm.states[s]
        self.low.start_state()
        before = self._marks()
        arcs = [a for a, (_, source, _) in enumerate(self.layout.arcs) if source == s]
        for a in arcs:
            clock = self.arm.clocks[self.layout.arcs[a][0]]
            if not (clock.ratio.is_const and clock.ratio.value == 1.0):
                self.ratio[a] = self.low.lower(clock.ratio)
                self._check(f"ratio of clock {clock.name}", state, clock.ratio, self.ratio[a], True)
        none = Node("const")
        flows = [state.utility, *(state.costs.get(c, none) for c in self.study.categories)]
        lumps = [state.entry_qaly, *(state.entry_costs.get(c, none) for c in self.study.categories)]
        for r, (rate, lump) in enumerate(zip(flows, lumps, strict=True)):
            self._add_flow(s, r, rate)
            self._add_lump(s, r, lump)
        worthless = state.absorbing and state.dead and all(n.is_const and n.value == 0.0 for n in (*flows, *lumps))
        spans = [mark for pair in zip(before, self._marks(), strict=True) for mark in pair]
        first = sum(1 for _, source, _ in self.layout.arcs if source < s)
        entry = [self.acc.names.get((kind, s), -1) for kind in ("entry_cost", "entry_effect")]
        if self.acc.one_rate:
            entry[1] = -1
        self.states.append([int(worthless), first, first + len(arcs), *spans, *entry])

    def _add_flow(self, s: int, r: int, node: Node) -> None:
        unit = self.study.years_per_unit if r == 0 else 1.0
        row = self.reward_row[s, r] = self.low.lower(node)
        if node.is_const:
            for plain, discounted in self._outcomes_of(r):
                self.acc.add(plain, self.acc.get("time", s), node.value * unit)
                self.acc.add(discounted, self.acc.get("cost" if r else "effect", s), node.value * unit)
            return
        sums = self.acc.get("flow", r), self.acc.get("flow_disc", r)
        self.flow.append((int(row), *sums, int(r == 0)))
        self._check(
            f"cost {self.study.categories[r - 1]}" if r else "utility", self.arm.states[s], node, int(row), False
        )
        for plain, discounted in self._outcomes_of(r):
            self.acc.weights[plain][sums[0]] = self.acc.weights[discounted][sums[1]] = unit

    def _add_lump(self, s: int, r: int, node: Node) -> None:
        if node.is_const and node.value == 0.0:
            return
        row = self.lump_row[s, r] = self.low.lower(node)
        if node.is_const:
            arrivals = self.acc.get("entry_cost" if r else "entry_effect", s)
            for plain, discounted in self._outcomes_of(r):
                self.acc.add(discounted, arrivals, node.value)
                for k, clock in enumerate(self.arm.clocks):
                    if clock.target == self.arm.states[s].name:
                        self.acc.add(plain, self.acc.get("fired", k), node.value)
            return
        sums = self.acc.get("lump", r), self.acc.get("lump_disc", r)
        self.lump.append((int(row), *sums, int(r == 0)))
        what = f"amount at entry ({self.study.categories[r - 1] if r else 'QALY'})"
        self._check(what, self.arm.states[s], node, int(row), False)
        for plain, discounted in self._outcomes_of(r):
            self.acc.weights[plain][sums[0]] = self.acc.weights[discounted][sums[1]] = 1.0

    def add_counts(self) -> None:
        """Life-years, time in states, arrivals, firings and start costs."""
        for s, state in enumerate(self.arm.states):
            self.acc.add(f"time:{state.name}", self.acc.get("time", s), 1.0)
            if not state.dead:
                self.acc.add("ly", self.acc.get("time", s), self.study.years_per_unit)
                self.acc.add("ly_disc", self.acc.get("effect", s), self.study.years_per_unit)
        for k, clock in enumerate(self.arm.clocks):
            self.acc.add(f"events:{clock.name}", self.acc.get("fired", k), 1.0)
            self.acc.add(f"entries:{clock.target}", self.acc.get("fired", k), 1.0)
        for category, amount in self.arm.once.items():
            for outcome in ("cost", "cost_disc", f"cost:{category}", f"cost_disc:{category}"):
                self.acc.constant[outcome] += amount

    def arc_tables(self) -> tuple[I, F, F, F]:
        """arcs, arc_par, table_cum and table_rate of Arrays."""
        cum, rate, where = _table_arrays(self.arm.clocks)
        names = [a.name for a in self.study.population.attributes]
        par = np.zeros((len(self.layout.arcs), 4))
        rows = []
        for a, ((k, _, target), rearms) in enumerate(zip(self.layout.arcs, _rearmable(self.layout), strict=True)):
            clock, level = self.arm.clocks[k], (-1, 0, -1)
            if clock.hazard.family == "table":
                par[a], start, stride = where[clock.name]
                level = start, stride, names.index(clock.hazard.by) if clock.hazard.by else -1
            else:
                values = [clock.hazard.params[p] for p in core.PARAMETERS[clock.hazard.family]]
                par[a, : len(values)] = values
            rows.append((k, target, SCALES[clock.scale], FAMILIES[clock.hazard.family], self.ratio[a], *level, rearms))
        return _rows(rows, 9), par, cum, rate

    def finish(self, cell: float) -> Program:
        arcs, par, cum, rate = self.arc_tables()
        study, names = self.study, [a.name for a in self.study.population.attributes]
        sizes = [len(self.layout.states), len(self.layout.clocks), len(self.layout.arcs), len(self.table.fields)]
        sizes += [len(self.low.consts), self.reward_row.shape[1], names.index("age") if "age" in names else -1]
        forces = study.discounting.forces(study.years_per_unit)
        annual = float(study.discounting.method == "annual")
        arrays = Arrays(
            sizes=np.array(sizes, dtype=np.int64),
            arcs=arcs,
            arc_par=par,
            states=_rows(self.states, 15),
            tape=_rows(self.low.tape, 5),
            gather=_rows(self.low.gather, 4),
            fields=_rows([(FIELD_KINDS[kind], s) for kind, s in self.table.fields], 2),
            flow=_rows(self.flow, 4),
            lump=_rows(self.lump, 4),
            checks=_rows(self.checks, 3),
            reward_row=self.reward_row,
            lump_row=self.lump_row,
            consts=np.array(self.low.consts),
            table_cum=cum,
            table_rate=rate,
            stream=np.array([stream_id("clock", k) for k in self.layout.clocks], dtype=np.uint64),
            numbers=np.array([study.horizon, *forces, annual, study.years_per_unit, cell]),
        )
        return Program(arrays, self.acc.sums(), tuple(self.formulas), self.low.highest, len(self.acc.names))


def compile_arm(study: BoundStudy, arm: BoundArm, *, layout: Layout, table: FieldTable, cell: float) -> Program:
    """Arrays of one arm; ``cell``: width of the elapsed-time grid in study time units. SimulationError beyond limits."""
    if len(layout.states) > MAX_STATES or len(layout.clocks) > MAX_CLOCKS:
        raise SimulationError(f"at most {MAX_STATES} states and {MAX_CLOCKS} clocks are supported")
    compiler = _ArmCompiler(study, arm, layout, table)
    for s in range(len(layout.states)):
        compiler.add_state(s)
    compiler.add_counts()
    return compiler.finish(cell)
