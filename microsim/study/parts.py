"""What a validated study is made of: parsed formulas, tables and settings, frozen, before any number is chosen.

load.py fills these; bind.py reads them. Times are in study time units unless a name says otherwise; nothing here
knows where the study lies on disk.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from microsim.study.bound import CohortSettings, Decision, Discounting
from microsim.study.dimensions import Dim
from microsim.study.expression import Node
from microsim.study.fit_task import FitTask
from microsim.study.formula import Formula
from microsim.study.locate import Lines
from microsim.study.schema import StudyFile


@dataclass(frozen=True, slots=True)
class Input:
    """A row of inputs.csv. node: value in study units, possibly a formula over other inputs; low, high in study
    units; ``factor`` is what a plain value was multiplied by; row: line of the file, header = 1."""

    name: str
    text: str
    node: Node
    unit: str
    dim: Dim
    factor: float
    low: float | None
    high: float | None
    law: str
    source: str
    label: str
    row: int


@dataclass(frozen=True, slots=True)
class LawSpec:
    """kind: a kind of bound.Law or "mean and sd" form of it (then params are mean, sd). scales: power of the study
    time unit to be turned into years, per parameter (only for the age attribute)."""

    kind: str
    params: Mapping[str, Formula]
    scales: Mapping[str, float]
    within: tuple[float, float] | None


@dataclass(frozen=True, slots=True)
class Attribute:
    """law None: read from the population file."""

    name: str
    label: str
    law: LawSpec | None
    levels: tuple[str, ...]
    dim: Dim


@dataclass(frozen=True, slots=True)
class HazardSpec:
    """kind: "fit", "table" or a family. params: formulas; scale: study time units per time unit of the parameters.

    form: "" or how the parameters differ from the family's own ("mean", "probability"); per: for "probability", the
    period. edges, rates, by: of a table, in study units; beyond: whether its last rate continues.
    unit: time unit as written, "" if none.
    """

    kind: str
    fit: str = ""
    params: Mapping[str, Formula] | None = None
    form: str = ""
    scale: float = 1.0
    per: float = 1.0
    by: str | None = None
    edges: tuple[float, ...] = ()
    rates: tuple[tuple[float, ...], ...] = ()
    file: str = ""
    beyond: bool = False
    unit: str = ""


@dataclass(frozen=True, slots=True)
class State:
    name: str
    label: str
    start: Formula
    absorbing: bool
    dead: bool
    utility: Formula
    costs: Mapping[str, Formula]
    entry_costs: Mapping[str, Formula]
    entry_qaly: Formula


@dataclass(frozen=True, slots=True)
class Clock:
    name: str
    label: str
    sources: tuple[str, ...]
    target: str
    scale: str
    hazard: HazardSpec
    ratio: Formula
    background: bool


@dataclass(frozen=True, slots=True)
class Difference:
    """One change of a strategy. how: "set", "times" or "plus"; path: ("states", name, "utility") and the like."""

    path: tuple[str, ...]
    how: str
    formula: Formula


@dataclass(frozen=True, slots=True)
class Strategy:
    """inputs: name -> formula over the base inputs; hazards: clock -> hazard that replaces the base one."""

    name: str
    label: str
    inputs: Mapping[str, Formula]
    differences: tuple[Difference, ...]
    hazards: Mapping[str, HazardSpec]
    once: Mapping[str, Formula]


@dataclass(frozen=True, slots=True)
class Fit:
    """A fit asked for. coefficients: names its covariates bring into formulas; task: its data, None if faulty."""

    name: str
    family: str
    source: str
    target: str
    time: str
    coefficients: tuple[str, ...]
    task: FitTask | None


@dataclass(frozen=True, slots=True)
class Study:
    """A study, complete and free of faults. ``inputs`` are ordered so that each depends on earlier ones only.

    folder: name of the study's folder (no path); defaults: (key, value taken) for what was not said; content_hash:
    sha256 over study.toml and every data file used; text: the validated file; lines: where keys stand in it.
    """

    text: StudyFile
    folder: str
    content_hash: str
    defaults: tuple[tuple[str, str], ...]
    warnings: tuple[str, ...]
    lines: Lines
    files: tuple[str, ...]
    time_unit: str
    years_per_unit: float
    horizon: float
    decision: Decision
    discounting: Discounting
    cohort: CohortSettings
    patients: int
    seed: int
    inputs_file: str
    inputs: tuple[Input, ...]
    attributes: tuple[Attribute, ...]
    correlation: tuple[tuple[float, ...], ...] | None
    rows: Mapping[str, tuple[float, ...]] | None
    states: tuple[State, ...]
    clocks: tuple[Clock, ...]
    fits: tuple[Fit, ...]
    strategies: tuple[Strategy, ...]
    categories: tuple[str, ...]

    @property
    def title(self) -> str:
        return self.text.title

    @property
    def input_names(self) -> tuple[str, ...]:
        return tuple(i.name for i in self.inputs)
