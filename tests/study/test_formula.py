"""Formula text to trees: equal to Python's own arithmetic, closed to everything else."""

from __future__ import annotations

import ast
import math
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from microsim.study.dimensions import MONEY, MONEY_PER_TIME, PLAIN, TIME
from microsim.study.expression import Node, evaluate, fold
from microsim.study.formula import FormulaError, Scope, Symbol, parse

SCOPE = Scope(
    symbols={
        "a": Symbol("input"), "b": Symbol("input"), "rate_c": Symbol("input", MONEY_PER_TIME),
        "cost": Symbol("input", MONEY), "stay": Symbol("input", TIME), "age": Symbol("attribute"),
        "sex": Symbol("attribute", PLAIN, ("female", "male")),
    },
    states=("Home", "Hospital"), memory=True,
)  # fmt: skip
VALUES = {"a": 1.75, "b": -0.5}
PYTHON = {
    "min": min, "max": max, "abs": abs, "exp": math.exp, "clip": lambda x, low, high: min(max(x, low), high), **VALUES,
}  # fmt: skip


def _texts() -> st.SearchStrategy[str]:
    number = st.floats(0.01, 9.0).map(lambda x: f"{x:.3f}") | st.integers(0, 9).map(str)
    leaf = number | st.sampled_from(["a", "b"])

    def grow(inner: st.SearchStrategy[str]) -> st.SearchStrategy[str]:
        two = st.tuples(inner, st.sampled_from(["+", "-", "*", "/", "<", "<=", ">", "!=", "=="]), inner)
        return st.one_of(
            two.map(lambda t: f"({t[0]} {t[1]} {t[2]})"),
            st.tuples(inner, inner).map(lambda t: f"min({t[0]}, {t[1]}, 3)"),
            st.tuples(inner, inner).map(lambda t: f"max({t[0]}, {t[1]})"),
            st.tuples(inner, inner, inner).map(lambda t: f"({t[0]} if {t[1]} > 0 else {t[2]})"),
            st.tuples(inner, inner).map(lambda t: f"(0 < {t[0]} < {t[1]})"),
            inner.map(lambda t: f"-{t}"),
            inner.map(lambda t: f"+abs({t})"),
            inner.map(lambda t: f"({t}) ** 2"),
            inner.map(lambda t: f"clip({t}, -1, 2)"),
            inner.map(lambda t: f"(not {t} > 1)"),
        )

    return st.recursive(leaf, grow, max_leaves=12)


@settings(max_examples=300, deadline=None)
@given(_texts())
def test_arithmetic_agrees_with_python(text: str) -> None:
    try:
        wanted = float(eval(text, {"__builtins__": {}}, PYTHON))
    except (ZeroDivisionError, OverflowError):
        return
    node = parse(text, SCOPE).node
    assert float(fold(node, VALUES).value) == pytest.approx(wanted, rel=1e-12, abs=1e-300)
    assert float(evaluate(node, lambda n: VALUES[n.name])) == pytest.approx(wanted, rel=1e-12, abs=1e-300)


@settings(max_examples=300, deadline=None)
@given(st.text(max_size=40) | st.text(alphabet="ab()[]{}.,:'\"*+-/ =<>!~^&|@0123456789_", max_size=40))
def test_any_text_is_a_formula_or_a_formula_error(text: str) -> None:
    try:
        formula = parse(text, SCOPE)
    except FormulaError as e:
        assert e.problem and e.remedy
    else:
        assert isinstance(formula.node, Node)


@pytest.mark.parametrize(
    "text",
    [
        "__import__('os').system('touch {mark}')", "open('{mark}', 'w')", "(lambda: open('{mark}', 'w'))()",
        "[open('{mark}', 'w') for _ in (1,)]", "min.__class__", "a.__class__.__mro__", "exec('1')", "f'{{a}}'",
        "(a := 1)", "a[0]", "{{}}", "(1, 2)", "min(*a)", "min(a, key=b)", "1 if a", "a; b", "import os", "1j", "...",
        "b'x'", "True", "None", "a @ b", "a % b", "a // b", "a | b", "a ^ b", "~a", "a is b", "a in b", "", "   ",
        "1e999", "a)(b", "a) + (b", "# a", "exp", "visits", "Home", "min(a)", "clip(a, 1)", "exp(a, b)", "exp()",
        "visits()", "visits(Home, Home)", "visits(1)", "visits(Nowhere)", "at_entry(Home)", "events(Home)", "min()(a)",
        "sex", "sex + 1", "sex == 1", "sex < 'male'", "'male' == 'male'", "'male'", "a == 'male'", "sex == sex",
        "sex == 'mal'", "exp(cost)", "cost + rate_c", "cost ** a", "a ** cost", "log(stay)", "cost < stay",
        "cost if a else rate_c", "min(cost, a)", "1 + cost * rate_c < cost",
    ],
)  # fmt: skip
def test_what_is_not_arithmetic_is_refused_and_never_runs(text: str, tmp_path: Path) -> None:
    mark = tmp_path / "mark"
    with pytest.raises(FormulaError):
        parse(text.format(mark=mark), SCOPE)
    assert not mark.exists()


def test_the_whitelist_names_every_node_type_it_accepts() -> None:
    """Every expression node of Python's grammar not in this list is refused."""
    accepted = {"BoolOp", "BinOp", "UnaryOp", "IfExp", "Compare", "Call", "Constant", "Name"}
    samples = {
        "NamedExpr": "(x := 1)", "Lambda": "lambda: 1", "Dict": "{1: 2}", "Set": "{1}", "ListComp": "[x for x in a]",
        "SetComp": "{x for x in a}", "DictComp": "{x: 1 for x in a}", "GeneratorExp": "(x for x in a)",
        "JoinedStr": "f'{a}'", "Attribute": "a.b", "Subscript": "a[1]", "List": "[1]", "Tuple": "(1, 2)",
        "Await": "await a", "Yield": "(yield)", "YieldFrom": "(yield from a)", "Starred": "(*a,)", "Slice": "a[1:2]",
        "FormattedValue": "f'{a}'",
    }  # fmt: skip
    kinds = {c.__name__ for c in ast.expr.__subclasses__()} - accepted
    kinds -= {
        "Num",
        "Str",
        "Bytes",
        "NameConstant",
        "Ellipsis",
        "TemplateStr",
        "Interpolation",
    }  # aliases, later syntax
    assert kinds == set(samples)
    for text in samples.values():
        with pytest.raises(FormulaError):
            parse(text, SCOPE)


def test_deep_nesting_is_refused_without_a_crash() -> None:
    with pytest.raises(FormulaError, match=r"nested too deeply|not a formula"):
        parse("-" * 1500 + "1", SCOPE)
    with pytest.raises(FormulaError, match=r"nested too deeply|not a formula"):
        parse("(" * 300 + "1" + ")" * 300, SCOPE)
    with pytest.raises(FormulaError, match="longer than"):
        parse("1+" * 5000 + "1", SCOPE)


def test_errors_suggest_the_nearest_name_and_tell_the_column() -> None:
    with pytest.raises(FormulaError) as caught:
        parse("1 + rate_k", SCOPE)
    assert (caught.value.position, caught.value.remedy) == (5, "Did you mean 'rate_c'?")
    with pytest.raises(FormulaError) as caught:
        parse("visits(Hosptal)", SCOPE)
    assert (caught.value.position, caught.value.remedy) == (8, "Did you mean 'Hospital'?")
    with pytest.raises(FormulaError) as caught:
        parse("mim(a, b)", SCOPE)
    assert caught.value.remedy == "Did you mean 'min'?"


def test_dimensions_follow_arithmetic() -> None:
    assert parse("rate_c * stay + 2 * cost", SCOPE).dim == MONEY
    assert parse("cost / stay", SCOPE).dim == MONEY_PER_TIME
    assert parse("sqrt(cost * cost)", SCOPE).dim == MONEY
    assert parse("stay ** 2 / stay", SCOPE).dim == TIME
    assert parse("stay ** -1 * cost", SCOPE).dim == MONEY_PER_TIME
    assert parse("time_in(Home)", SCOPE).dim == TIME
    assert parse("at_entry(elapsed) + since_entry(Home)", SCOPE).dim == TIME
    assert parse("cost > 3", SCOPE).dim == PLAIN
    assert parse("cost if a > 1 else 0", SCOPE).dim == MONEY
    assert parse("2 * 3", SCOPE).dim is None
    assert parse("exp(0.5)", SCOPE).dim is None


def test_a_level_is_compared_by_its_code() -> None:
    node = parse("sex == 'male'", SCOPE).node
    assert node.args[1].value == 1.0
    codes = np.array([0.0, 1.0])
    assert evaluate(node, lambda n: codes).tolist() == [0.0, 1.0]
    assert evaluate(parse("'male' != sex", SCOPE).node, lambda n: codes).tolist() == [1.0, 0.0]


def test_age_at_entry_reads_in_years_in_every_study() -> None:
    months = Scope(SCOPE.symbols, SCOPE.states, True, 1 / 12)
    node = parse("at_entry(age)", months).node
    assert float(evaluate(node, lambda n: 840.0)) == pytest.approx(70.0)
    assert parse("at_entry(age)", SCOPE).node == Node("memory", name="at_entry", of="age")


def test_memory_is_refused_where_it_is_not_available() -> None:
    scope = Scope({"a": Symbol("input")}, ("Home",), memory=False, barred={"age": "it differs between patients"})
    for text in ("visits(Home)", "events()", "age"):
        with pytest.raises(FormulaError):
            parse(text, scope)


def test_formulas_may_run_over_several_lines() -> None:
    assert fold(parse("a\n + b", SCOPE).node, VALUES).value == 1.25
