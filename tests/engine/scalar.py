"""A slow second engine, one patient at a time in plain Python, sharing only random numbers and attributes.

Hazards come from ``hazards.families`` (SciPy), discount integrals from quadrature-free closed forms written again here.
Written from the definition of clocks and thresholds, not from the compiled engine. ``redraw`` and ``drop_ratio`` are
deliberate mistakes for negative controls.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np

from microsim import rng
from microsim.engine.population import sample, sample_start
from microsim.hazards.families import cumulative, inverse
from microsim.study.bound import BoundArm, BoundClock, BoundStudy
from microsim.study.expression import Node, evaluate


@dataclass
class Patient:
    attributes: dict[str, float]
    state: str
    time: float = 0.0
    visits: dict[str, int] = field(default_factory=dict)
    spent: dict[str, float] = field(default_factory=dict)
    entered: dict[str, float] = field(default_factory=dict)
    left: dict[str, float] = field(default_factory=dict)
    stay: dict[str, float] = field(default_factory=dict)
    previous: str = ""
    events: int = 0

    def read(self, node: Node, age_units: float) -> float:
        if node.op == "attribute":
            return self.attributes[node.name]
        s = node.of
        return {
            "visits": lambda: float(self.visits.get(s, 0)),
            "time_in": lambda: self.spent.get(s, 0.0),
            "since_entry": lambda: self.time - self.entered.get(s, -math.inf),
            "since_exit": lambda: self.time - self.left.get(s, -math.inf),
            "last_stay": lambda: self.stay.get(s, 0.0),
            "came_from": lambda: float(self.previous == s),
            "events": lambda: float(self.events),
            "at_entry": lambda: self.time if s == "elapsed" else self.attributes["age"] * age_units + self.time,
        }[node.name]()


def _age_at_entry_years(study: BoundStudy) -> float:
    return 1.0 / study.years_per_unit


@dataclass
class Run:
    """sojourns: (patient, state, clock or "", entry, exit); outcomes: name -> list per patient."""

    sojourns: list[tuple[int, str, str, float, float]]
    outcomes: dict[str, list[float]]


def _discount(study: BoundStudy, rate: float, t: float) -> tuple[float, float]:
    """(factor at t, integral from 0 to t)."""
    years = study.years_per_unit
    if study.discounting.method == "annual":
        n = math.floor(t * years)
        whole = sum((1 + rate) ** -k for k in range(n)) / years
        return (1 + rate) ** -n, whole + (t - n / years) * (1 + rate) ** -n
    force = math.log1p(rate) * years
    return math.exp(-force * t), t if force == 0 else -math.expm1(-force * t) / force


def run_scalar(
    study: BoundStudy, arm: BoundArm, *, patients: int, seed: int, redraw: bool = False, drop_ratio: bool = False
) -> Run:
    ids = np.arange(patients)
    values = sample(study.population, ids, seed=seed)
    starts = sample_start(arm, ids, seed=seed)
    out = Run([], {})
    for i in ids:
        attributes = {a.name: float(values[j, i]) for j, a in enumerate(study.population.attributes)}
        patient = Patient(attributes, arm.states[starts[i]].name)
        for name, value in _one(study, arm, int(i), patient, seed, out.sojourns, redraw, drop_ratio).items():
            out.outcomes.setdefault(name, []).append(value)
    return out


def _one(study, arm, i, p, seed, log, redraw, drop_ratio) -> dict[str, float]:
    states = {s.name: s for s in arm.states}
    fired = {k.name: 0 for k in arm.clocks}
    left: dict[str, float] = {}
    armings = 0
    total = dict.fromkeys(["ly", "ly_disc", "qaly", "qaly_disc", "cost", "cost_disc"], 0.0)
    for c in study.categories:
        total[f"cost:{c}"] = total[f"cost_disc:{c}"] = arm.once.get(c, 0.0)
        total["cost"] += arm.once.get(c, 0.0)
        total["cost_disc"] += arm.once.get(c, 0.0)
    total |= {f"time:{s}": 0.0 for s in states} | {f"entries:{s}": 0.0 for s in states}
    total |= {f"events:{k.name}": 0.0 for k in arm.clocks}
    p.visits[p.state] = 1
    p.entered[p.state] = 0.0
    while True:
        s = states[p.state]
        value = lambda node: float(evaluate(node, lambda leaf: p.read(leaf, 1.0 / study.years_per_unit)))  # noqa: E731
        if p.events:
            for r, node in [("qaly", s.entry_qaly), *(("cost:" + c, n) for c, n in s.entry_costs.items())]:
                _add(study, total, r, value(node), value(node) * _discount(study, _rate(study, r), p.time)[0])
        best, which = math.inf, None
        armed: list[tuple[BoundClock, float, float]] = []
        for k in arm.clocks:
            if p.state not in k.sources:
                continue
            if k.name not in left or redraw:
                extra = 1000 * armings if redraw else 0
                left[k.name] = float(rng.thresholds([i], seed=seed, clock=k.name, firing=fired[k.name] + extra)[0])
            ratio = 1.0 if drop_ratio else value(k.ratio)
            origin = _origin(study, p, k)
            armed.append((k, ratio, origin))
            level = np.array([int(p.attributes[k.hazard.by])]) if k.hazard.by else None
            before = float(cumulative(k.hazard, origin, level=level)[0])
            need = math.inf if ratio == 0 else before + left[k.name] / ratio
            at = float(inverse(k.hazard, need, level=level)[0]) - origin if math.isfinite(need) else math.inf
            if at < best:
                best, which = at, k
        armings += 1
        end = p.time + best
        if end > study.horizon:
            end, which = study.horizon, None
        stay = end - p.time
        total[f"time:{s.name}"] += stay
        if not s.dead:
            total["ly"] += stay * study.years_per_unit
            total["ly_disc"] += _flow(study, "qaly", p.time, end) * study.years_per_unit
        u = value(s.utility) * study.years_per_unit
        _add(study, total, "qaly", u * stay, u * _flow(study, "qaly", p.time, end))
        for c, node in s.costs.items():
            _add(study, total, f"cost:{c}", value(node) * stay, value(node) * _flow(study, f"cost:{c}", p.time, end))
        if not (s.absorbing and s.dead):
            log.append((i, s.name, which.name if which else "", p.time, end))
        if which is None:
            return total
        for k, ratio, origin in armed:
            level = np.array([int(p.attributes[k.hazard.by])]) if k.hazard.by else None
            used = cumulative(k.hazard, origin + stay, level=level) - cumulative(k.hazard, origin, level=level)
            left[k.name] = max(left[k.name] - ratio * float(used[0]), 0.0)
        del left[which.name]
        fired[which.name] += 1
        total[f"events:{which.name}"] += 1
        total[f"entries:{which.target}"] += 1
        p.spent[p.state] = p.spent.get(p.state, 0.0) + stay
        p.stay[p.state], p.left[p.state], p.previous = stay, end, p.state
        p.state, p.time = which.target, end
        p.entered[p.state], p.visits[p.state] = end, p.visits.get(p.state, 0) + 1
        p.events += 1


def _origin(study: BoundStudy, p: Patient, k: BoundClock) -> float:
    if k.scale == "sojourn":
        return 0.0
    return p.time if k.scale == "elapsed" else p.attributes["age"] / study.years_per_unit + p.time


def _rate(study: BoundStudy, reward: str) -> float:
    return study.discounting.effects if reward == "qaly" else study.discounting.costs


def _flow(study: BoundStudy, reward: str, a: float, b: float) -> float:
    rate = _rate(study, reward)
    return _discount(study, rate, b)[1] - _discount(study, rate, a)[1]


def _add(study: BoundStudy, total: dict[str, float], reward: str, plain: float, discounted: float) -> None:
    if reward == "qaly":
        total["qaly"] += plain
        total["qaly_disc"] += discounted
        return
    for name in ("cost", reward):
        total[name] += plain
        total[name.replace("cost", "cost_disc", 1)] += discounted
