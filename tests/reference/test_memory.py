"""Every memory function on one path written out by hand."""

from __future__ import annotations

import math

import pytest
from bound_builder import attribute, memory, op

from microsim.errors import SimulationError
from microsim.reference.memory import Memory
from microsim.study.expression import Node


def _path() -> Memory:
    """A from 0 to 2, B to 3.5, A to 4, A (a transition to itself) to 7, then B. Time in months, age 60 years."""
    m = Memory(3, {"age": 60.0}, 1 / 12)
    m.enter("A", 0.0)
    for until, target in ((2.0, "B"), (3.5, "A"), (4.0, "A"), (7.0, "B")):
        m.leave(until)
        m.enter(target, until)
    return m


EXPECTED = [
    ("visits", "A", 3.0), ("visits", "B", 2.0), ("visits", "C", 0.0),
    ("time_in", "A", 5.5), ("time_in", "B", 1.5), ("time_in", "C", 0.0),
    ("since_entry", "A", 3.0), ("since_entry", "B", 0.0),
    ("since_exit", "A", 0.0), ("since_exit", "B", 3.5),
    ("last_stay", "A", 3.0), ("last_stay", "B", 1.5), ("last_stay", "C", 0.0),
    ("came_from", "A", 1.0), ("came_from", "B", 0.0),
    ("events", "", 4.0), ("at_entry", "elapsed", 7.0), ("at_entry", "age", 727.0),
]  # fmt: skip


@pytest.mark.parametrize(("name", "of", "expected"), EXPECTED)
def test_memory_functions_follow_their_definitions(name: str, of: str, expected: float) -> None:
    assert _path().value(memory(name, of), what="x") == pytest.approx(expected, rel=1e-14)


@pytest.mark.parametrize("name", ["since_entry", "since_exit"])
def test_what_never_happened_is_infinitely_long_ago(name: str) -> None:
    never = memory(name, "C")
    assert _path().value(op("min", never, 5.0), what="x") == 5.0
    with pytest.raises(SimulationError, match="patient 3, state B: utility is not a finite number"):
        _path().value(never, what="utility")


def test_at_the_start_there_is_one_visit_and_no_past() -> None:
    m = Memory(0, {}, 1.0)
    m.enter("A", 0.0)
    values = {
        n: m.value(memory(n, "A"), what="x") for n in ("visits", "events", "came_from", "since_entry", "last_stay")
    }
    assert values == {"visits": 1.0, "events": 0.0, "came_from": 0.0, "since_entry": 0.0, "last_stay": 0.0}
    assert math.isinf(m.entered - m.last_exit.get("A", -math.inf))


def test_clocks_stand_where_their_scale_says() -> None:
    m = _path()
    assert [m.clock(scale, 9.0) for scale in ("sojourn", "elapsed", "age")] == pytest.approx([2.0, 9.0, 729.0])


def test_attributes_are_read_and_unbound_inputs_refused() -> None:
    assert _path().value(attribute("age"), what="x") == 60.0
    with pytest.raises(SimulationError, match="bind the study first"):
        _path().value(Node("input", name="c_home"), what="x")
