from __future__ import annotations

from itertools import combinations

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from report.conftest import Edge, Graph, Node, make_graph

from microsim.report.figure_pathway import pathway_figure
from microsim.report.pathway_layout import PORT_PITCH, Placed, Rect, depths, place, point_at


def _measure(text: str, size: float) -> float:
    return 0.6 * size * len(text)


def _clashes(placed: Placed) -> list[str]:
    found = []
    rects = [(node.name, box) for node, box in placed.boxes]
    rects += [(arrow.edge.label, arrow.label) for arrow in placed.arrows]
    for (first, a), (second, b) in combinations(rects, 2):
        if a.overlap(b) > 1e-9:
            found.append(f"{first} on {second}")
    return found


def _entangled() -> Graph:
    names = ("Stable", "Progressed", "Relapse", "Remission")
    alive = [Node(n, n, n == "Stable", False) for n in names]
    pairs = [(a, b) for a in names for b in names if a != b]
    edges = [Edge(f"{a}-{b}", f"From {a}", a, b, "sojourn") for a, b in pairs[:8]]
    edges += [Edge("background", "Other death", a, "Dead", "age", True) for a in names]
    return Graph((*alive, Node("Dead", "Dead", False, True)), tuple(edges))


@pytest.mark.parametrize("graph", [make_graph(), _entangled()], ids=["three states", "five states"])
def test_no_label_lies_on_a_state_or_another_label(graph: Graph) -> None:
    assert _clashes(place(graph, measure=_measure)) == []


def test_an_overlap_would_be_seen() -> None:
    assert Rect(0, 0, 10, 10).overlap(Rect(9, 0, 10, 10)) == pytest.approx(10.0)
    assert Rect(0, 0, 10, 10).overlap(Rect(10, 0, 10, 10)) == 0.0
    placed = place(make_graph(), measure=_measure)
    node, box = placed.boxes[0]
    moved = Placed(((node, placed.boxes[1][1]), *placed.boxes[1:]), placed.arrows, placed.bounds)
    assert box != placed.boxes[1][1]
    assert _clashes(moved) == ["Home on Hospital"]


def test_states_stand_by_their_distance_and_the_exits_last() -> None:
    assert depths(make_graph()) == {"Home": 0, "Hospital": 1, "Dead": 2}


def test_the_commonest_start_leads() -> None:
    nodes = (Node("Mild", "Mild", 0.2, False), Node("Well", "Well", 0.8, False), Node("Dead", "Dead", False, True))
    graph = Graph(nodes, (Edge("a", "a", "Well", "Mild", "sojourn"), Edge("b", "b", "Mild", "Dead", "sojourn")))
    assert depths(graph) == {"Well": 0, "Mild": 1, "Dead": 2}


@st.composite
def graphs(draw: st.DrawFn) -> Graph:
    size = draw(st.integers(2, 5))
    names = [f"S{k}" for k in range(size)]
    pairs = [(a, b) for a in names[:-1] for b in names if a != b]
    kept = draw(st.lists(st.sampled_from(pairs), min_size=1, max_size=8, unique=True))
    nodes = tuple(Node(n, n, k == 0, k == size - 1) for k, n in enumerate(names))
    return Graph(nodes, tuple(Edge(f"{a}{b}", f"{a} to {b}", a, b, "sojourn") for a, b in kept))


@settings(max_examples=25, deadline=None, derandomize=True)
@given(graphs())
def test_any_small_pathway_is_laid_out_without_clashes(graph: Graph) -> None:
    placed = place(graph, measure=_measure)
    assert _clashes(placed) == []
    boxes = {node.name: box for node, box in placed.boxes}
    touched: dict[tuple[float, float], int] = {}
    for arrow in placed.arrows:
        for name, point in ((arrow.edge.source, arrow.curve[0]), (arrow.edge.target, arrow.curve[-1])):
            box = boxes[name]
            assert abs(abs(point[0] - box.x) - box.width / 2) < 1e-9
            assert abs(point[1] - box.y) <= box.height / 2
            touched[point] = touched.get(point, 0) + 1
        left, bottom, right, top = placed.bounds
        assert left < arrow.label.x < right
        assert bottom < arrow.label.y < top
        nearest = min(
            abs(x - arrow.label.x) + abs(y - arrow.label.y)
            for x, y in (point_at(arrow.curve, k / 400) for k in range(401))
        )
        assert nearest < PORT_PITCH / 2
    assert set(touched.values()) == {1}


def test_text_on_the_drawing_stays_inside_it() -> None:
    figure = pathway_figure(make_graph())
    figure.draw_without_rendering()
    frame = figure.bbox
    for text in figure.axes[0].texts:
        box = text.get_window_extent()
        assert frame.x0 <= box.x0
        assert box.x1 <= frame.x1
        assert frame.y0 <= box.y0
        assert box.y1 <= frame.y1


def test_the_share_of_patients_that_start_in_a_state_is_written_in_it() -> None:
    nodes = (Node("Well", "Well", 0.7, False), Node("Ill", "Ill", 0.3, False), Node("Dead", "Dead", False, True))
    edges = tuple(Edge("death", "Death", name, "Dead", "age", True) for name in ("Well", "Ill"))
    graph = Graph(nodes, edges)
    words = [t.get_text() for t in pathway_figure(graph).axes[0].texts]
    assert "start, 70 %" in words
    assert "start, 30 %" in words
    assert words.count("attained age") == 2
