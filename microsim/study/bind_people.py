"""Attributes with formulas -> laws with numbers, for a BoundPopulation.

Laws given by mean and standard deviation are turned into their own parameters here. Age is in years.
"""

from __future__ import annotations

import math
from collections.abc import Mapping

from microsim.study.bound import BoundAttribute, BoundPopulation, Law
from microsim.study.numbers import Numbers
from microsim.study.parts import Attribute, LawSpec, Study

_POSITIVE = {
    "normal": ("sd",), "lognormal": ("sdlog",), "gamma": ("shape", "rate"), "beta": ("a", "b"),
}  # fmt: skip


def bind_population(study: Study, numbers: Numbers) -> BoundPopulation:
    """The population every strategy shares."""
    attributes = tuple(
        BoundAttribute(a.name, None if a.law is None else _law(a, a.law, numbers=numbers), a.levels, a.label)
        for a in study.attributes
    )
    return BoundPopulation(attributes, study.correlation, study.rows)


def _law(attribute: Attribute, spec: LawSpec, *, numbers: Numbers) -> Law:
    key = f"attributes.{attribute.name}"
    path = key if spec.kind == "constant" else f"{key}.{spec.kind}"
    p = {n: numbers.number(f, f"{path}.{n}") * spec.scales.get(n, 1.0) for n, f in spec.params.items()}
    if spec.kind == "choice":
        return Law("choice", _choice(p, key=path, numbers=numbers))
    own = _own_parameters(spec.kind, p, key=path, numbers=numbers)
    if any(math.isinf(v) for v in own.values()):
        numbers.fault(path, "its parameters are too extreme to compute with", "Correct them.", value=p)
    for name in _POSITIVE.get(spec.kind, ()):
        if own.get(name, 1.0) <= 0:
            numbers.fault(f"{path}.{name}", f"{name} must be positive", "Correct it.", value=f"{own[name]:g}")
    if spec.kind == "uniform" and own.get("low", 0.0) >= own.get("high", 1.0):
        found = f"{own['low']:g} to {own['high']:g}"
        numbers.fault(path, "low is not below high", "Swap or correct them.", value=found)
    return Law(spec.kind, own, spec.within)


def _choice(p: Mapping[str, float], *, key: str, numbers: Numbers) -> dict[str, float]:
    for level, value in p.items():
        if not 0 <= value <= 1 and not math.isnan(value):
            numbers.fault(f"{key}.{level}", "a probability lies in [0, 1]", "Correct it.", value=f"{value:g}")
    total = math.fsum(p.values())
    if p and abs(total - 1) > 1e-9:
        found = ", ".join(f"{n} {v:g}" for n, v in p.items())
        numbers.fault(key, f"the probabilities sum to {total:g}, not 1", "Correct them.", value=found)
    return {f"p{i}": v for i, v in enumerate(p.values())}


def _own_parameters(kind: str, p: dict[str, float], *, key: str, numbers: Numbers) -> dict[str, float]:
    """Method of moments for lognormal, gamma and beta given by mean and sd; other parameters pass through."""
    if kind not in ("lognormal", "gamma", "beta") or set(p) != {"mean", "sd"}:
        return p
    mean, sd = p["mean"], p["sd"]
    for name, value in p.items():
        if value <= 0:
            numbers.fault(f"{key}.{name}", f"{name} must be positive", "Correct it.", value=f"{value:g}")
            mean = sd = math.nan
    if kind == "lognormal":
        spread = sd / mean
        variance = math.log1p(spread * spread)
        return {"meanlog": math.log(mean) - variance / 2, "sdlog": math.sqrt(variance)}
    if kind == "gamma":
        return {"shape": (mean / sd) * (mean / sd), "rate": mean / sd / sd}
    if mean >= 1 or sd * sd >= mean * (1 - mean):
        numbers.fault(key, "no beta law has this mean and sd", "The mean lies below 1 and sd^2 below mean (1 - mean).",
                      value=f"mean {mean:g}, sd {sd:g}")  # fmt: skip
        return {"a": math.nan, "b": math.nan}
    size = mean * (1 - mean) / sd / sd - 1
    return {"a": mean * size, "b": (1 - mean) * size}
