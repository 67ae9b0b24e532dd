"""Full incremental analysis of any number of strategies: dominance, extended dominance, ICERs along the frontier."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Position:
    """Where a strategy stands. status: "reference" (cheapest on the frontier), "frontier", "dominated" or "extendedly
    dominated"; by: the strategy (or pair) that dominates it; icer: money per QALY against the previous one on the
    frontier, nan otherwise."""

    strategy: str
    cost: float
    qaly: float
    status: str
    by: str
    icer: float


def _undominated(points: list[tuple[str, float, float]]) -> tuple[list[tuple[str, float, float]], dict[str, str]]:
    """Cheapest first; drop whoever costs at least as much for no more effect. Of exact ties the first named stays."""
    kept: list[tuple[str, float, float]] = []
    dropped: dict[str, str] = {}
    for name, cost, qaly in sorted(points, key=lambda p: (p[1], -p[2])):
        if kept and qaly <= kept[-1][2]:
            dropped[name] = kept[-1][0]
        else:
            kept.append((name, cost, qaly))
    return kept, dropped


def _convex(points: list[tuple[str, float, float]]) -> tuple[list[tuple[str, float, float]], dict[str, str]]:
    """Lower convex hull: ICERs never fall along it. Who lies above the line between two neighbours is extendedly dominated;
    who lies on it stays."""
    hull: list[tuple[str, float, float]] = []
    dropped: dict[str, str] = {}
    for point in points:
        while len(hull) >= 2 and _slope(hull[-2], hull[-1]) > _slope(hull[-1], point):
            middle = hull.pop()
            dropped[middle[0]] = f"{hull[-1][0]} and {point[0]}"
        hull.append(point)
    return hull, dropped


def _slope(a: tuple[str, float, float], b: tuple[str, float, float]) -> float:
    return (b[1] - a[1]) / (b[2] - a[2])


def incremental_analysis(
    strategies: Sequence[str], costs: Sequence[float], qalys: Sequence[float]
) -> tuple[Position, ...]:
    """Positions in order of cost. A pair along the frontier is compared with its neighbour, never with everything."""
    points = list(zip(strategies, map(float, costs), map(float, qalys), strict=True))
    kept, dominated = _undominated(points)
    hull, extended = _convex(kept)
    order = {name: i for i, (name, _, _) in enumerate(hull)}
    out = []
    for name, cost, qaly in sorted(points, key=lambda p: (p[1], -p[2])):
        if name in dominated:
            out.append(Position(name, cost, qaly, "dominated", dominated[name], math.nan))
        elif name in extended:
            out.append(Position(name, cost, qaly, "extendedly dominated", extended[name], math.nan))
        else:
            i = order[name]
            icer = math.nan if i == 0 else _slope(hull[i - 1], hull[i])
            out.append(Position(name, cost, qaly, "frontier" if i else "reference", "", icer))
    return tuple(out)
