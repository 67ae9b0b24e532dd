"""Lowering: numbering agrees with the kernels, and the register tape computes what the formula tree means."""

from __future__ import annotations

import numpy as np
import pytest
from bound_builder import ONE, attribute, clock, hazard, op, state, study
from hypothesis import given, settings
from hypothesis import strategies as st

from microsim import program
from microsim.engine import columns, queue, tape
from microsim.engine.run import Wants, simulate
from microsim.errors import SimulationError
from microsim.hazards import kernels
from microsim.study.bound import BoundAttribute, BoundStudy, Law
from microsim.study.expression import ARITY, Node, const, evaluate


def test_numbers_agree_with_the_kernels() -> None:
    assert program.OPCODES == tape.OPCODES
    assert program.FAMILIES == kernels.CODES
    assert program.FIXED_FIELDS == columns.FIXED
    assert set(program.OPCODES) == set(ARITY)
    s = _formula_study([ONE])
    layout, table = program.make_layout(s), program.field_table(s)
    p = program.compile_arm(s, s.arms[0], layout=layout, table=table, cell=0.1)
    assert p.arrays.arcs.shape[1] == columns.REARMS + 1
    assert p.arrays.states.shape[1] == columns.ENTRY_EFFECT + 1


def _formula_study(formulas: list[Node]) -> BoundStudy:
    """One state whose flows are the formulas of two attributes; everybody stays for one unit of time."""
    costs = {f"c{i}": f for i, f in enumerate(formulas)}
    states = (state("Here", start=1.0, costs=costs), state("Gone", absorbing=True))
    attributes = (
        BoundAttribute("a", Law("normal", {"mean": 0.0, "sd": 2.0})),
        BoundAttribute("b", Law("uniform", {"low": 0.1, "high": 3.0})),
    )
    return study(
        (states, (clock("never", "Here", "Gone", hazard("exponential", rate=1e-12)),)),
        horizon=1.0,
        attributes=attributes,
    )


_LEAVES = st.one_of(
    st.floats(-3, 3).map(lambda v: const(round(v, 3))), st.sampled_from([attribute("a"), attribute("b"), const(2.0)])
)
_SMOOTH = [
    "add",
    "sub",
    "mul",
    "min",
    "max",
    "neg",
    "abs",
    "lt",
    "le",
    "gt",
    "ge",
    "eq",
    "ne",
    "and",
    "or",
    "not",
    "where",
]


def _trees(children: st.SearchStrategy[Node]) -> st.SearchStrategy[Node]:
    return st.sampled_from(_SMOOTH).flatmap(
        lambda name: st.tuples(*[children] * ARITY[name]).map(lambda args: Node(name, tuple(args)))
    )


@settings(max_examples=60, deadline=None, derandomize=True)
@given(st.lists(st.recursive(_LEAVES, _trees, max_leaves=12), min_size=1, max_size=4))
def test_the_tape_computes_what_the_tree_means(formulas: list[Node]) -> None:
    kept = []
    s = _formula_study(formulas)
    simulate(s, patients=80, seed=3, wants=Wants(tallies=False, outcomes=lambda first, c: kept.append(c)))
    from microsim.engine.population import sample

    values = sample(s.population, np.arange(80), seed=3)
    outcomes = np.concatenate([c.outcomes[0] for c in kept], axis=1)
    names = kept[0].layout.outcomes
    for i, f in enumerate(formulas):
        expected = evaluate(f, lambda n: values[{"a": 0, "b": 1}[n.name]])
        got = outcomes[names.index(f"cost:c{i}")]
        np.testing.assert_allclose(got, np.broadcast_to(expected, got.shape), rtol=1e-12, atol=1e-12)


def test_functions_and_powers_of_the_tape_agree_with_numpy() -> None:
    a, b = attribute("a"), attribute("b")
    formulas = [
        op("exp", a),
        op("log", b),
        op("sqrt", b),
        op("div", a, b),
        op("pow", b, a),
        op("pow", a, 2.0),
        op("pow", a, 3.0),
    ]
    test_the_tape_computes_what_the_tree_means.hypothesis.inner_test(formulas)


def test_a_study_beyond_the_limits_is_refused() -> None:
    states = [state(f"S{i}", start=float(i == 0)) for i in range(70)]
    clocks = [clock(f"k{i}", f"S{i}", f"S{i + 1}", hazard("exponential", rate=1.0)) for i in range(69)]
    with pytest.raises(SimulationError, match="at most 64 states"):
        simulate(study((states, clocks)), patients=80, seed=1)


def test_a_new_study_compiles_nothing() -> None:
    simulate(_formula_study([ONE]), patients=80, seed=1)
    simulate(_formula_study([op("mul", attribute("a"), 2.0), ONE]), patients=100, seed=1)
    assert len(queue.run_chunk.signatures) == 1
