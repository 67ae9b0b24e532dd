"""Study -> PathwayGraph: states and transitions with their labels, for whoever draws them."""

from __future__ import annotations

from dataclasses import dataclass

from microsim.study.parts import HazardSpec, Study


@dataclass(frozen=True, slots=True)
class PathwayNode:
    """start: whether a patient can begin here."""

    name: str
    label: str
    start: bool
    absorbing: bool
    dead: bool


@dataclass(frozen=True, slots=True)
class PathwayEdge:
    """One clock out of one source. hazard: in words, e.g. "weibull, shape 1.3, scale 9 (days)", "fit home_stay"."""

    source: str
    target: str
    clock: str
    label: str
    scale: str
    background: bool
    hazard: str
    ratio: str


@dataclass(frozen=True, slots=True)
class PathwayGraph:
    nodes: tuple[PathwayNode, ...]
    edges: tuple[PathwayEdge, ...]


def hazard_words(spec: HazardSpec) -> str:
    """A hazard in a few words."""
    if spec.kind == "fit":
        return f"fit {spec.fit}"
    if spec.kind == "table":
        return f"table {spec.file}" + (f" by {spec.by}" if spec.by else "")
    unit = f" per {spec.unit}" if spec.kind == "exponential" and spec.unit else f" ({spec.unit}s)" if spec.unit else ""
    params = ", ".join(f"{name} {formula.text}" for name, formula in (spec.params or {}).items())
    return f"{'constant' if spec.kind == 'exponential' else spec.kind}, {params}{unit}"


def pathway(study: Study) -> PathwayGraph:
    """Nodes in the order of states, edges in the order of clocks and their sources."""
    nodes = tuple(
        PathwayNode(s.name, s.label, not (s.start.node.is_const and s.start.node.value == 0.0), s.absorbing, s.dead)
        for s in study.states
    )
    edges = tuple(
        PathwayEdge(source, k.target, k.name, k.label, k.scale, k.background, hazard_words(k.hazard), k.ratio.text)
        for k in study.clocks
        for source in k.sources
    )
    return PathwayGraph(nodes, edges)
