"""A pathway graph into boxes, curves and label places on paper, in points.

States stand in layers from left to right by their distance from where patients start; arrows leave and reach a box at
ports of their own, and bend around what lies between. Pure geometry: it draws nothing and knows no plotting library.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from itertools import pairwise

from microsim.report.inputs import EdgeLike, GraphLike, NodeLike

Point = tuple[float, float]
Measure = Callable[[str, float], float]

PORT_PITCH = 27.0
LABEL_HEIGHT = 21.0
_BOX_MIN_HEIGHT = 44.0
_ROW_GAP = 30.0
_SWEEPS = 8
_CROSSING = 120.0
_WIDENINGS = 6


@dataclass(frozen=True, slots=True)
class Rect:
    """Centre and full size, in points."""

    x: float
    y: float
    width: float
    height: float

    def overlap(self, other: Rect) -> float:
        """Shared area."""
        across = min(self.x + self.width / 2, other.x + other.width / 2) - max(
            self.x - self.width / 2, other.x - other.width / 2
        )
        along = min(self.y + self.height / 2, other.y + other.height / 2) - max(
            self.y - self.height / 2, other.y - other.height / 2
        )
        return max(0.0, across) * max(0.0, along)


@dataclass(frozen=True, slots=True)
class Arrow:
    """``curve``: start, then two handles and an end for every cubic piece; ``label``: the place of its text."""

    edge: EdgeLike
    curve: tuple[Point, ...]
    label: Rect


@dataclass(frozen=True, slots=True)
class Placed:
    """Everything in points; ``bounds`` is (left, bottom, right, top) around it all."""

    boxes: tuple[tuple[NodeLike, Rect], ...]
    arrows: tuple[Arrow, ...]
    bounds: tuple[float, float, float, float]


@dataclass(slots=True)
class _Slot:
    """A place in a layer: a state, or the passage of a long arrow."""

    key: str
    layer: int
    node: NodeLike | None = None
    height: float = PORT_PITCH
    y: float = 0.0


@dataclass(frozen=True, slots=True)
class _Route:
    """An edge and the slots it runs through, ends included."""

    edge: EdgeLike
    stops: tuple[str, ...]


def place(graph: GraphLike, *, measure: Measure) -> Placed:
    """Lay the graph out; ``measure(text, size)`` gives a text's width in points at a font size.

    The gap between layers grows until no label touches a box or another label.
    """
    slots, routes = _slots_and_routes(graph)
    layers = _order(slots, routes)
    width = max((measure(n.label or n.name, 9.0) for n in graph.nodes), default=40.0) + 26
    text = max((edge_text_width(e, measure) for e in graph.edges), default=30.0)
    gap = text + 44
    best, best_clash = None, float("inf")
    for _ in range(_WIDENINGS):
        placed, clash = _attempt(graph, slots, routes, layers, width=width, gap=gap, measure=measure)
        if clash < best_clash:
            best, best_clash = placed, clash
        if clash == 0:
            break
        gap *= 1.25
    assert best is not None
    return best


def edge_text_width(edge: EdgeLike, measure: Measure) -> float:
    return max(measure(edge.label or edge.clock, 7.5), measure(edge.scale, 6.3)) + 6


def depths(graph: GraphLike) -> dict[str, int]:
    """Layer of every state: steps from where most patients start, states without exit together in the last layer."""
    first = max(graph.nodes, key=lambda n: float(n.start or 0)).name
    depth = {first: 0}
    queue = [first]
    while queue:
        name = queue.pop(0)
        for edge in graph.edges:
            if edge.source == name and edge.target not in depth:
                depth[edge.target] = depth[name] + 1
                queue.append(edge.target)
    for node in graph.nodes:
        depth.setdefault(node.name, 0)
    last = max((depth[n.name] for n in graph.nodes if not n.absorbing), default=-1) + 1
    return {n.name: last if n.absorbing else depth[n.name] for n in graph.nodes}


def _slots_and_routes(graph: GraphLike) -> tuple[dict[str, _Slot], list[_Route]]:
    depth = depths(graph)
    slots = {n.name: _Slot(n.name, depth[n.name], n) for n in graph.nodes}
    routes = []
    for index, edge in enumerate(graph.edges):
        begin, end = depth[edge.source], depth[edge.target]
        step = 1 if end > begin else -1
        passing = []
        for layer in range(begin + step, end, step) if begin != end else ():
            key = f"\0{index}:{layer}"
            slots[key] = _Slot(key, layer)
            passing.append(key)
        routes.append(_Route(edge, (edge.source, *passing, edge.target)))
    for node in graph.nodes:
        right, left = _ports(node.name, slots, routes)
        slots[node.name].height = max(_BOX_MIN_HEIGHT, PORT_PITCH * max(len(right), len(left)) + 6)
    return slots, routes


def _order(slots: dict[str, _Slot], routes: list[_Route]) -> list[list[_Slot]]:
    """Layers with an order that keeps arrows short and few of them crossing, and a height for every slot."""
    layers: list[list[_Slot]] = [[] for _ in range(max(s.layer for s in slots.values()) + 1)]
    for slot in slots.values():
        layers[slot.layer].append(slot)
    steps: list[list[tuple[_Slot, _Slot]]] = [[] for _ in layers]
    for route in routes:
        for a, b in pairwise(route.stops):
            left, right = sorted((slots[a], slots[b]), key=lambda s: s.layer)
            steps[left.layer].append((left, right))
    for layer in layers:
        _stack(layer)
    cost = _strain(steps)
    for _ in range(_SWEEPS):
        before = cost
        for layer in layers:
            for slot in list(layer):
                cost = _settle(slot, layer, steps, cost)
        if cost >= before:
            break
    return layers


def _settle(slot: _Slot, layer: list[_Slot], steps: list[list[tuple[_Slot, _Slot]]], cost: float) -> float:
    """Try the slot at every height of its layer, leave it at the best, return the strain there."""
    best, home = cost, layer.index(slot)
    layer.remove(slot)
    for position in range(len(layer) + 1):
        layer.insert(position, slot)
        _stack(layer)
        strain = _strain(steps)
        if strain < best - 1e-9:
            best, home = strain, position
        layer.pop(position)
    layer.insert(home, slot)
    _stack(layer)
    return best


def _strain(steps: list[list[tuple[_Slot, _Slot]]]) -> float:
    """Total rise of all arrows plus a charge for every crossing."""
    total = 0.0
    for gap in steps:
        for index, (a, b) in enumerate(gap):
            total += abs(a.y - b.y)
            for c, d in gap[:index]:
                total += _CROSSING if (a.y - c.y) * (b.y - d.y) < 0 else 0.0
    return total


def _stack(layer: list[_Slot]) -> None:
    top = (sum(s.height for s in layer) + _ROW_GAP * (len(layer) - 1)) / 2
    for slot in layer:
        slot.y = top - slot.height / 2
        top -= slot.height + _ROW_GAP


def _ports(name: str, slots: dict[str, _Slot], routes: list[_Route]) -> tuple[list[int], list[int]]:
    """Ends of arrows on the right and left side, as 2 * route (leaving) or 2 * route + 1 (arriving)."""
    right: list[int] = []
    left: list[int] = []
    layer = slots[name].layer
    for index, route in enumerate(routes):
        for end, (own, other) in enumerate(((0, 1), (-1, -2))):
            if route.stops[own] == name:
                side = right if slots[route.stops[other]].layer >= layer else left
                side.append(2 * index + end)
    return right, left


def _attempt(
    graph: GraphLike, slots: dict[str, _Slot], routes: list[_Route], layers: list[list[_Slot]], *,
    width: float, gap: float, measure: Measure,
) -> tuple[Placed, float]:  # fmt: skip
    x_of = [index * (width + gap) for index in range(len(layers))]
    boxes = {n.name: Rect(x_of[slots[n.name].layer], slots[n.name].y, width, slots[n.name].height) for n in graph.nodes}
    ends = _port_places(graph, slots, routes, boxes)
    curves = [_curve(route, slots, x_of, ends[2 * i], ends[2 * i + 1]) for i, route in enumerate(routes)]
    labels, clash = _label_places(routes, curves, list(boxes.values()), measure)
    arrows = tuple(Arrow(r.edge, c, p) for r, c, p in zip(routes, curves, labels, strict=True))
    return Placed(tuple((n, boxes[n.name]) for n in graph.nodes), arrows, _bounds(boxes, arrows)), clash


def _port_places(
    graph: GraphLike, slots: dict[str, _Slot], routes: list[_Route], boxes: dict[str, Rect]
) -> dict[int, Point]:
    """Where every arrow end touches its box, sorted by the height of the other end so that arrows do not cross."""
    places: dict[int, Point] = {}
    for node in graph.nodes:
        box = boxes[node.name]

        def rank(port: int, own: str = node.name) -> tuple[float, int]:
            stops = routes[port // 2].stops
            other = stops[1] if port % 2 == 0 else stops[-2]
            beside = slots[other].layer == slots[own].layer
            return (-slots[other].y, port // 2 if not beside or slots[other].y < slots[own].y else -(port // 2))

        for side, sign in zip(_ports(node.name, slots, routes), (1.0, -1.0), strict=True):
            for order, port in enumerate(sorted(side, key=rank)):
                offset = ((len(side) - 1) / 2 - order) * PORT_PITCH
                places[port] = (box.x + sign * box.width / 2, box.y + offset)
    return places


def _curve(route: _Route, slots: dict[str, _Slot], x_of: list[float], begin: Point, end: Point) -> tuple[Point, ...]:
    first, last = slots[route.stops[0]].layer, slots[route.stops[-1]].layer
    if first == last:
        bulge = 34.0 + 0.28 * abs(end[1] - begin[1])
        return (begin, (begin[0] + bulge, begin[1]), (end[0] + bulge, end[1]), end)
    middle = [(x_of[slots[k].layer], slots[k].y) for k in route.stops[1:-1]]
    points = [begin, *middle, end]
    curve: list[Point] = [begin]
    for (x0, y0), (x1, y1) in pairwise(points):
        reach = 0.45 * (x1 - x0)
        curve += [(x0 + reach, y0), (x1 - reach, y1), (x1, y1)]
    return tuple(curve)


def point_at(curve: tuple[Point, ...], share: float) -> Point:
    """Point of the curve at a share of its pieces, 0 to 1."""
    pieces = (len(curve) - 1) // 3
    piece = min(int(share * pieces), pieces - 1)
    t = share * pieces - piece
    weights = ((1 - t) ** 3, 3 * t * (1 - t) ** 2, 3 * t * t * (1 - t), t**3)
    corner = curve[3 * piece : 3 * piece + 4]
    return (
        sum(w * p[0] for w, p in zip(weights, corner, strict=True)),
        sum(w * p[1] for w, p in zip(weights, corner, strict=True)),
    )


def _label_places(
    routes: list[_Route], curves: list[tuple[Point, ...]], boxes: list[Rect], measure: Measure
) -> tuple[list[Rect], float]:
    """A place on its own curve for every label, longest text first; also the area of overlap that is left."""
    shares = sorted((0.06 + 0.02 * k for k in range(45)), key=lambda s: abs(s - 0.5))
    samples = [[point_at(c, k / 40) for k in range(41)] for c in curves]
    places: dict[int, Rect] = {}
    clash = 0.0
    for index in sorted(range(len(routes)), key=lambda i: -edge_text_width(routes[i].edge, measure)):
        size = Rect(0, 0, edge_text_width(routes[index].edge, measure), LABEL_HEIGHT)
        best, cost, area = size, float("inf"), 0.0
        for share in shares:
            x, y = point_at(curves[index], share)
            spot = replace(size, x=x, y=y)
            shared = sum(spot.overlap(r) for r in [*boxes, *places.values()])
            crossed = sum(
                1 for other, line in enumerate(samples) if other != index for p in line if spot.overlap(Rect(*p, 3, 3))
            )
            total = 100 * shared + 6 * crossed + 8 * abs(share - 0.5)
            if total < cost:
                best, cost, area = spot, total, shared
            if shared == 0 and crossed == 0:
                break
        places[index] = best
        clash += area
    return [places[i] for i in range(len(routes))], clash


def _bounds(boxes: dict[str, Rect], arrows: tuple[Arrow, ...]) -> tuple[float, float, float, float]:
    rects = [*boxes.values(), *(a.label for a in arrows)]
    points = [p for a in arrows for p in (point_at(a.curve, k / 40) for k in range(41))]
    xs = [r.x + s * r.width / 2 for r in rects for s in (-1, 1)] + [p[0] for p in points]
    ys = [r.y + s * r.height / 2 for r in rects for s in (-1, 1)] + [p[1] for p in points]
    return (min(xs) - 8, min(ys) - 8, max(xs) + 8, max(ys) + 8)
