"""BoundStudy -> ReferenceRun: the life of each patient as one SimPy process, written to be read.

A patient enters a state, sees which of its clocks would fire first, waits for it, pays for the stay, and moves on. The
clocks that lost keep what is left of their thresholds. Must not know the compiled engine.
"""

from __future__ import annotations

import math
from collections.abc import Generator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt
import simpy

from microsim import rng
from microsim.errors import SimulationError
from microsim.reference import hazards
from microsim.reference.ledger import Ledger, stack
from microsim.reference.memory import Memory
from microsim.reference.population import sample_attributes, sample_start
from microsim.study.bound import BoundArm, BoundClock, BoundStudy


class Sojourn(NamedTuple):
    """A stay in a state. clock: what ended it, "" at the horizon; entry, exit in study time units; hazard: that of the
    clock at the moment it fired, per study time unit (0 at the horizon)."""

    patient: int
    state: str
    clock: str
    entry: float
    exit: float
    hazard: float


@dataclass(frozen=True, slots=True)
class ReferenceRun:
    """sojourns: by patient, then time. outcomes: name -> float64[patient], names as in ``Layout.outcomes``."""

    arm: str
    patients: tuple[int, ...]
    sojourns: tuple[Sojourn, ...]
    outcomes: Mapping[str, npt.NDArray[np.float64]]


class Threshold:
    """What a clock still has to consume before it fires, for one patient; a new one is read only after a firing."""

    def __init__(self, clock: str, patient: int, *, seed: int, draw: int) -> None:
        self.clock, self.patient, self.seed, self.draw = clock, patient, seed, draw
        self.firing = 0
        self.read()

    def read(self) -> None:
        read = rng.thresholds(self.patient, seed=self.seed, clock=self.clock, firing=self.firing, draw=self.draw)
        self.left = float(read)

    def consume(self, amount: float) -> None:
        """Another clock fired first. Rounding may take away a little more than there was."""
        self.left = max(self.left - amount, 0.0)

    def fire(self) -> None:
        self.firing += 1
        self.read()


class Patient:
    """One patient in one arm; ``live`` is the process, ``sojourns`` and ``ledger`` are what it leaves behind."""

    def __init__(self, study: BoundStudy, arm: BoundArm, memory: Memory, *, seed: int, draw: int) -> None:
        self.horizon = study.horizon
        self.arm = arm
        self.memory = memory
        self.states = {s.name: s for s in arm.states}
        self.thresholds = {k.name: Threshold(k.name, memory.patient, seed=seed, draw=draw) for k in arm.clocks}
        self.ledger = Ledger(study, arm)
        self.sojourns: list[Sojourn] = []

    def live(self, env: simpy.Environment, start: str) -> Generator[simpy.Event, Any, None]:
        """From model start in the state ``start`` to the horizon."""
        self.memory.enter(start, env.now)
        while True:
            clocks = [k for k in self.arm.clocks if self.memory.state in k.sources]
            ratios = {k.name: self.ratio(k) for k in clocks}
            waits = {k.name: self.wait(k, ratios[k.name]) for k in clocks}
            # min keeps the first of equals, so ties go by clock order
            first = min(clocks, key=lambda k: waits[k.name], default=None)
            if first is None or env.now + waits[first.name] > self.horizon:
                self.stay(until=self.horizon)
                return
            yield env.timeout(waits[first.name])
            self.stay(until=env.now, fired=first, ratio=ratios[first.name])
            for k in clocks:
                if k is first:
                    self.thresholds[k.name].fire()
                else:
                    self.thresholds[k.name].consume(ratios[k.name] * self.consumed(k, until=env.now))
            self.memory.leave(env.now)
            self.memory.enter(first.target, env.now)
            self.ledger.arrival(self.states[first.target], first.name, self.memory)

    def ratio(self, clock: BoundClock) -> float:
        """The clock's ratio, fixed at entry to the present state. SimulationError below zero."""
        value = self.memory.value(clock.ratio, what=f"ratio of clock {clock.name}")
        if value < 0.0:
            raise SimulationError(
                f"patient {self.memory.patient}, state {self.memory.state}: ratio of clock {clock.name} is negative"
            )
        return value

    def wait(self, clock: BoundClock, ratio: float) -> float:
        """Time from entry until the clock would fire if no other did; inf beyond the horizon or where it never does."""
        if ratio == 0.0:
            return math.inf
        now = self.memory.entered
        return hazards.wait_for(
            clock.hazard,
            self.memory.clock(clock.scale, now),
            self.thresholds[clock.name].left / ratio,
            within=self.horizon - now,
            level=self.level(clock),
        )

    def consumed(self, clock: BoundClock, *, until: float) -> float:
        """H(c1) - H(c0) of the clock over the present sojourn, without its ratio."""
        c0 = self.memory.clock(clock.scale, self.memory.entered)
        c1 = self.memory.clock(clock.scale, until)
        return hazards.consumed(clock.hazard, c0, c1, level=self.level(clock))

    def level(self, clock: BoundClock) -> int:
        """Row of the clock's table that applies to this patient."""
        return int(self.memory.attributes[clock.hazard.by]) if clock.hazard.by else 0

    def stay(self, *, until: float, fired: BoundClock | None = None, ratio: float = 0.0) -> None:
        """Record the present sojourn and what it was worth."""
        m = self.memory
        name, rate = "", 0.0
        if fired is not None:
            name = fired.name
            rate = ratio * hazards.rate(fired.hazard, m.clock(fired.scale, until), level=self.level(fired))
        self.sojourns.append(Sojourn(m.patient, m.state, name, m.entered, until, rate))
        self.ledger.sojourn(self.states[m.state], m, until)


def run_reference(study: BoundStudy, *, patients: Sequence[int], seed: int, draw: int = 0, arm: str) -> ReferenceRun:
    """Run the numbered patients through the named arm.

    patients: numbers below 2**32; seed below 2**64. SimulationError if the arm is unknown or a formula is not usable.
    """
    chosen = next((a for a in study.arms if a.name == arm), None)
    if chosen is None:
        raise SimulationError(f"no strategy named {arm!r}; there are {', '.join(a.name for a in study.arms)}")
    attributes = sample_attributes(study.population, patients, seed=seed, draw=draw)
    starts = sample_start(chosen, patients, seed=seed, draw=draw)
    env = simpy.Environment()
    people = []
    for i, (number, start) in enumerate(zip(patients, starts, strict=True)):
        own = {name: float(values[i]) for name, values in attributes.items()}
        person = Patient(study, chosen, Memory(number, own, study.years_per_unit), seed=seed, draw=draw)
        env.process(person.live(env, start))
        people.append(person)
    env.run()
    return ReferenceRun(
        arm=arm,
        patients=tuple(patients),
        sojourns=tuple(s for person in people for s in person.sojourns),
        outcomes=stack([person.ledger.outcomes for person in people]),
    )
