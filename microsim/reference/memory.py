"""What one patient carries: attributes and history, and the value of a formula read from them at entry to a state.

The memory functions are defined in study/expression.py. Knows nothing of hazards or money.
"""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Mapping
from dataclasses import dataclass, field

from microsim.errors import SimulationError
from microsim.study.expression import Node, evaluate


@dataclass(slots=True)
class Memory:
    """attributes: name -> value; years_per_unit: years in one study time unit. Times are in study time units."""

    patient: int
    attributes: Mapping[str, float]
    years_per_unit: float
    state: str = ""
    previous: str = ""
    entered: float = 0.0
    events: int = 0
    visits: defaultdict[str, int] = field(default_factory=lambda: defaultdict(int))
    time_in: defaultdict[str, float] = field(default_factory=lambda: defaultdict(float))
    last_stay: defaultdict[str, float] = field(default_factory=lambda: defaultdict(float))
    last_entry: dict[str, float] = field(default_factory=dict)
    last_exit: dict[str, float] = field(default_factory=dict)

    def enter(self, state: str, now: float) -> None:
        """Arrive in a state, at model start or by a transition."""
        self.state, self.entered = state, now
        self.visits[state] += 1
        self.last_entry[state] = now

    def leave(self, now: float) -> None:
        """Complete the sojourn in the present state by a transition."""
        stay = now - self.entered
        self.events += 1
        self.time_in[self.state] += stay
        self.last_stay[self.state] = stay
        self.last_exit[self.state] = now
        self.previous = self.state

    def clock(self, scale: str, now: float) -> float:
        """Where a clock on the given scale stands at model time ``now``."""
        if scale == "sojourn":
            return now - self.entered
        if scale == "elapsed":
            return now
        return self.attributes["age"] / self.years_per_unit + now

    def value(self, formula: Node, *, what: str) -> float:
        """The formula at entry to the present state. SimulationError unless it is a finite number."""
        result = float(evaluate(formula, self._leaf))
        if not math.isfinite(result):
            raise SimulationError(f"patient {self.patient}, state {self.state}: {what} is not a finite number")
        return result

    def _leaf(self, node: Node) -> float:
        if node.op == "attribute":
            return float(self.attributes[node.name])
        if node.op != "memory":
            raise SimulationError(f"a formula still holds {node.op} {node.name!r}: bind the study first")
        match node.name:
            case "visits":
                return float(self.visits[node.of])
            case "time_in":
                return self.time_in[node.of]
            case "since_entry":
                return self.entered - self.last_entry.get(node.of, -math.inf)
            case "since_exit":
                return self.entered - self.last_exit.get(node.of, -math.inf)
            case "last_stay":
                return self.last_stay[node.of]
            case "came_from":
                return float(self.previous == node.of)
            case "events":
                return float(self.events)
        return self.clock(node.of, self.entered)
