"""Parsed formulas + values of inputs -> numbers and folded trees, with a fault where a number is impossible.

Used twice: at loading, when coefficients of fits are still unknown (``partial``), and at binding, when all is known.
Unknown numbers are nan, and no check complains about them.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

from microsim.errors import FaultList
from microsim.hazards.core import PARAMETERS, Hazard
from microsim.study.context import STUDY_FILE
from microsim.study.dimensions import PER_TIME, TIME
from microsim.study.expression import Node, fold
from microsim.study.formula import Formula
from microsim.study.locate import Lines
from microsim.study.parts import HazardSpec
from microsim.study.read_hazards import parameter_dim

UNKNOWN_HAZARD = Hazard("exponential", {"rate": math.nan})


@dataclass(frozen=True, slots=True)
class Numbers:
    """values: inputs and coefficients by name, in study units."""

    values: Mapping[str, float]
    faults: FaultList
    lines: Lines
    partial: bool

    def fault(self, key: str, problem: str, remedy: str, *, value: object = "") -> None:
        self.faults.add(STUDY_FILE, key, problem, remedy, value=value, where=self.lines.where(key))

    def folded(self, node: Node, key: str, *, text: str) -> Node:
        """The tree with all inputs as numbers; left as it is where some are not known yet."""
        if self.partial and any(n.op == "input" and n.name not in self.values for n in node.walk()):
            return node
        out = fold(node, self.values)
        # text is empty where a fault was found before; its nan needs no second one.
        if text and any(n.is_const and not math.isfinite(n.value) for n in out.walk()) and self._values_known(node):
            found = next(n.value for n in out.walk() if n.is_const and not math.isfinite(n.value))
            self.fault(
                key,
                f"the formula {text!r} gives {found}",
                "Check for a division by zero or the log of a negative number.",
            )
        return out

    def _values_known(self, node: Node) -> bool:
        """False where an input itself is faulty: it has its own fault."""
        return all(math.isfinite(self.values[n.name]) for n in node.walk() if n.op == "input")

    def number(self, formula: Formula, key: str) -> float:
        """Value of a formula over inputs; nan if not known or not finite."""
        node = self.folded(formula.node, key, text=formula.text)
        return node.value if node.is_const and math.isfinite(node.value) else math.nan

    def hazard(self, spec: HazardSpec, key: str, *, fits: Mapping[str, Hazard]) -> Hazard:
        """The hazard in study time units, its parameters checked."""
        if spec.kind == "table":
            return Hazard("table", by=spec.by, edges=spec.edges, rates=spec.rates)
        fitted = spec.kind == "fit"
        hazard = fits.get(spec.fit, UNKNOWN_HAZARD) if fitted else Hazard(spec.kind, self._parameters(spec, key))
        problems = parameter_problems(hazard)
        if not self.partial and fitted:
            problems += [(n, "the fit gave no number") for n, v in hazard.params.items() if math.isnan(v)]
        for name, problem in problems:
            self.fault(
                key,
                problem,
                "Correct the number or the formula.",
                value=f"{hazard.family} {name} = {hazard.params[name]:g}",
            )
        return hazard

    def _parameters(self, spec: HazardSpec, key: str) -> dict[str, float]:
        prefix = f"{key}.{spec.kind}"
        p = {n: self.number(f, f"{prefix}.{n}") for n, f in (spec.params or {}).items()}
        if spec.form == "probability":
            q = p["probability"]
            if not 0 <= q < 1 and not math.isnan(q):
                self.fault(f"{key}.probability", "a probability lies in [0, 1), with 1 excluded: it has no finite rate",
                           "Correct it.", value=f"{q:g}")  # fmt: skip
                q = math.nan
            return {"rate": -math.log1p(-q) / spec.per}
        if spec.form == "mean":
            mean, sdlog = p["mean"] * spec.scale, p["sdlog"]
            if mean <= 0:
                self.fault(f"{prefix}.mean", "a mean time must be positive", "Correct it.", value=f"{mean:g}")
                mean = math.nan
            return {"meanlog": math.log(mean) - sdlog * sdlog / 2, "sdlog": sdlog}
        return {n: to_study_units(spec.kind, n, value=v, scale=spec.scale) for n, v in p.items()}


def to_study_units(family: str, parameter: str, *, value: float, scale: float) -> float:
    """A parameter written in another time unit; scale: study units per such unit."""
    if (family, parameter) == ("lognormal", "meanlog"):
        return value + math.log(scale)
    dim = parameter_dim(family, parameter)
    return value * scale if dim == TIME else value / scale if dim == PER_TIME else value


_POSITIVE = {
    ("weibull", "shape"),
    ("weibull", "scale"),
    ("loglogistic", "shape"),
    ("loglogistic", "scale"),
    ("lognormal", "sdlog"),
}
_NOT_NEGATIVE = {("exponential", "rate"), ("gompertz", "rate")}


def parameter_problems(hazard: Hazard) -> list[tuple[str, str]]:
    """(parameter, problem) of a family hazard; unknown (nan) parameters have none."""
    out = []
    for name in PARAMETERS.get(hazard.family, ()):
        value = hazard.params[name]
        if (hazard.family, name) in _POSITIVE and value <= 0:
            out.append((name, f"the {name} of a {hazard.family} hazard must be positive"))
        if (hazard.family, name) in _NOT_NEGATIVE and value < 0:
            out.append((name, f"the {name} of a {hazard.family} hazard cannot be negative"))
        if math.isinf(value):
            out.append((name, f"the {name} of a {hazard.family} hazard is not finite"))
    return out
