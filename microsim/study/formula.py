"""Formula text -> tree of arithmetic with its dimension, through a whitelist of Python's expression syntax.

The text is only ever parsed, never compiled or run. What is not on the list is refused with its position and, for an
unknown name, the nearest known one. Which names exist is told by a Scope; files and studies are unknown here.
"""

from __future__ import annotations

import ast
import difflib
import keyword
import math
import warnings
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field

from microsim.study.dimensions import PLAIN, TIME, AnyDim, Dim, DimensionMismatch, combine
from microsim.study.expression import ARITY, MEMORY, Node, const, fold

FUNCTIONS = ("min", "max", "exp", "log", "sqrt", "abs", "clip")
CLOCK_NAMES = ("elapsed", "age")
MAX_LENGTH = 4000

_BINARY: dict[type[ast.operator], str] = {
    ast.Add: "add", ast.Sub: "sub", ast.Mult: "mul", ast.Div: "div", ast.Pow: "pow",
}  # fmt: skip
_COMPARE: dict[type[ast.cmpop], str] = {
    ast.Lt: "lt", ast.LtE: "le", ast.Gt: "gt", ast.GtE: "ge", ast.Eq: "eq", ast.NotEq: "ne",
}  # fmt: skip
_MEMORY_DIM = {"time_in": TIME, "since_entry": TIME, "since_exit": TIME, "last_stay": TIME}


@dataclass(frozen=True, slots=True)
class Symbol:
    """A name a formula may use. op: "input" or "attribute"; levels: names of codes 0..k-1 if categorical, else ()."""

    op: str
    dim: Dim = PLAIN
    levels: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Scope:
    """What a formula may read. memory: whether a patient's history is available; years_per_unit turns study time
    into years for ``at_entry(age)``, which reads in years like the attribute; barred: names known elsewhere in the
    study but not available here, with the reason."""

    symbols: Mapping[str, Symbol]
    states: tuple[str, ...] = ()
    memory: bool = False
    years_per_unit: float = 1.0
    barred: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Formula:
    """text as written; node; dim (None = a bare number)."""

    text: str
    node: Node
    dim: AnyDim


class FormulaError(ValueError):
    """problem and remedy in words; position: 1-based column in the formula, 0 if unknown."""

    def __init__(self, problem: str, remedy: str, *, position: int = 0) -> None:
        self.problem, self.remedy, self.position = problem, remedy, position
        super().__init__(f"{problem} (column {position}). {remedy}")


@dataclass(frozen=True, slots=True)
class _Typed:
    node: Node
    dim: AnyDim
    levels: tuple[str, ...] = ()
    text: str | None = None


def nearest(word: str, known: Iterable[str]) -> str:
    """ "did you mean" sentence, or the list of what is known."""
    names = sorted(set(known))
    close = difflib.get_close_matches(word, names, n=1, cutoff=0.6)
    if not close:
        folded = {n.casefold(): n for n in names}
        close = [folded[c] for c in difflib.get_close_matches(word.casefold(), list(folded), n=1, cutoff=0.6)]
    if close:
        return f"Did you mean {close[0]!r}?"
    shown = ", ".join(names[:12]) + (", ..." if len(names) > 12 else "")
    return f"Known here: {shown}." if names else "Nothing may be named here."


def name_problem(name: str) -> str:
    """Why a word cannot be a name in formulas, or ""."""
    if not name.isidentifier() or not name.isascii():
        return "is not a name (letters, digits and _ only, not starting with a digit)"
    if keyword.iskeyword(name):
        return "is a reserved word of the formula language"
    if name in FUNCTIONS or name in MEMORY:
        return "is the name of a function of the formula language"
    return ""


def parse(text: str | float, scope: Scope) -> Formula:
    """Parse and check one formula; numbers pass through. Raises FormulaError."""
    if not isinstance(text, str):
        return Formula(repr(text), const(float(text)), None)
    if "#" in text and "\n" in text.strip():
        raise FormulaError("a comment inside a formula of several lines", "Put comments outside the formula.")
    source = text.strip().replace("\n", " ")
    if not source:
        raise FormulaError("the formula is empty", "Write a number or a formula.")
    if len(source) > MAX_LENGTH:
        raise FormulaError(f"the formula is longer than {MAX_LENGTH} characters", "Split it into inputs.")
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            tree = ast.parse(source, mode="eval")
        typed = _Reader(scope, source.encode()).read(tree.body)
    except SyntaxError as e:
        raise FormulaError(
            "this is not a formula", "Check operators and brackets.", position=max(e.offset or 0, 0)
        ) from None
    except (RecursionError, MemoryError):
        raise FormulaError("the formula is nested too deeply", "Split it into inputs.") from None
    except ValueError as e:
        if isinstance(e, FormulaError):
            raise
        raise FormulaError("this is not a formula", "Remove characters that cannot be printed.") from None
    if typed.text is not None or typed.levels:
        raise FormulaError("the formula gives a word, not a number", 'Compare it, for example sex == "female".')
    return Formula(source, typed.node, typed.dim)


class _Reader:
    """Walks Python's syntax tree; every node type not named here is refused."""

    def __init__(self, scope: Scope, source: bytes) -> None:
        self.scope, self.source = scope, source

    def read(self, e: ast.expr) -> _Typed:
        if isinstance(e, ast.Constant):
            return self._constant(e)
        if isinstance(e, ast.Name):
            return self._name(e)
        if isinstance(e, ast.BinOp):
            return self._binary(e)
        if isinstance(e, ast.UnaryOp):
            return self._unary(e)
        if isinstance(e, ast.BoolOp):
            op = "and" if isinstance(e.op, ast.And) else "or"
            return self._chain(op, [self.number(v) for v in e.values], e)
        if isinstance(e, ast.Compare):
            return self._comparison(e)
        if isinstance(e, ast.IfExp):
            return self._apply("where", [self.number(e.test), self.number(e.body), self.number(e.orelse)], e)
        if isinstance(e, ast.Call):
            return self._call(e)
        if isinstance(e, ast.Attribute):
            raise self._error(e, f"reading .{e.attr} of something is not allowed", "Formulas use plain names.")
        raise self._error(e, f"{type(e).__name__} is not part of the formula language", "Use arithmetic only.")

    def _error(self, e: ast.expr, problem: str, remedy: str) -> FormulaError:
        # Python counts columns in bytes of UTF-8; people count letters.
        return FormulaError(problem, remedy, position=len(self.source[: e.col_offset].decode(errors="ignore")) + 1)

    def number(self, e: ast.expr) -> _Typed:
        """A sub-formula that must be a number: words and categories are only ever compared."""
        typed = self.read(e)
        if typed.text is not None:
            raise self._error(
                e, f"the word {typed.text!r} is used as a number", "Words are only compared, with == or !=."
            )
        if typed.levels:
            example = f'{typed.node.name} == "{typed.levels[0]}"'
            raise self._error(e, f"{typed.node.name} is categorical and used as a number", f"Compare it: {example}.")
        return typed

    def _constant(self, e: ast.Constant) -> _Typed:
        if isinstance(e.value, str):
            return _Typed(const(0.0), None, text=e.value)
        if isinstance(e.value, bool) or not isinstance(e.value, int | float):
            raise self._error(e, f"{e.value!r} is not a number", "Write 1 for true and 0 for false.")
        try:
            value = float(e.value)
        except OverflowError:
            value = math.inf
        if not math.isfinite(value):
            raise self._error(e, "the number is too large", "Write a finite number.")
        return _Typed(const(value), None)

    def _name(self, e: ast.Name) -> _Typed:
        symbol = self.scope.symbols.get(e.id)
        if symbol is not None:
            return _Typed(Node(symbol.op, name=e.id), symbol.dim, levels=symbol.levels)
        if e.id in self.scope.barred:
            raise self._error(e, f"{e.id} cannot be used here: {self.scope.barred[e.id]}", "Use inputs only.")
        if e.id in MEMORY or e.id in FUNCTIONS:
            raise self._error(e, f"{e.id} is a function", f"Write it with brackets: {e.id}(...).")
        if e.id in self.scope.states:
            raise self._error(e, f"the state {e.id} is used as a number", f"Ask for example visits({e.id}).")
        raise self._error(e, f"unknown name {e.id!r}", nearest(e.id, self.scope.symbols))

    def _binary(self, e: ast.BinOp) -> _Typed:
        op = _BINARY.get(type(e.op))
        if op is None:
            remedy = "For a power write **." if isinstance(e.op, ast.BitXor) else "Use + - * / **."
            raise self._error(e, f"the operator {type(e.op).__name__} is not part of the formula language", remedy)
        return self._apply(op, [self.number(e.left), self.number(e.right)], e)

    def _unary(self, e: ast.UnaryOp) -> _Typed:
        operand = self.number(e.operand)
        if isinstance(e.op, ast.UAdd):
            return operand
        if isinstance(e.op, ast.USub):
            return self._apply("neg", [operand], e)
        if isinstance(e.op, ast.Not):
            return self._apply("not", [operand], e)
        raise self._error(e, "the operator ~ is not part of the formula language", "For a negation write not.")

    def _comparison(self, e: ast.Compare) -> _Typed:
        sides = [e.left, *e.comparators]
        typed = [self.read(s) for s in sides]
        parts = []
        for i, op_type in enumerate(e.ops):
            op = _COMPARE.get(type(op_type))
            if op is None:
                raise self._error(e, f"{type(op_type).__name__} is not a comparison here", "Use < <= > >= == !=.")
            parts.append(self._compared(op, (typed[i], typed[i + 1]), where=(sides[i], sides[i + 1])))
        return self._chain("and", parts, e)

    def _compared(self, op: str, pair: tuple[_Typed, _Typed], *, where: tuple[ast.expr, ast.expr]) -> _Typed:
        words = [t for t in pair if t.text is not None]
        categories = [t for t in pair if t.levels]
        if not words and not categories:
            return self._apply(op, list(pair), where[0])
        if len(words) != 1 or len(categories) != 1:
            problem = "a word can only be compared with a categorical attribute, and the other way round"
            raise self._error(where[0], problem, 'Write for example sex == "female".')
        if op not in ("eq", "ne"):
            raise self._error(where[0], "categories have no order", "Use == or !=.")
        word, category = words[0].text or "", categories[0]
        if word not in category.levels:
            at = where[pair.index(words[0])]
            raise self._error(at, f"{category.node.name} has no level {word!r}", nearest(word, category.levels))
        return _Typed(Node(op, (category.node, const(float(category.levels.index(word))))), PLAIN)

    def _call(self, e: ast.Call) -> _Typed:
        if not isinstance(e.func, ast.Name):
            raise self._error(e, "only the named functions can be called", nearest("", (*FUNCTIONS, *MEMORY)))
        name = e.func.id
        if e.keywords or any(isinstance(a, ast.Starred) for a in e.args):
            raise self._error(e, f"{name} takes plain arguments only", "List the arguments, separated by commas.")
        if name in MEMORY:
            return self._memory(name, e)
        if name not in FUNCTIONS:
            raise self._error(e, f"unknown function {name!r}", nearest(name, (*FUNCTIONS, *MEMORY)))
        args = [self.number(a) for a in e.args]
        if name in ("min", "max"):
            if len(args) < 2:
                raise self._error(e, f"{name} needs at least two arguments", "Write for example min(a, b).")
            return self._chain(name, args, e)
        if len(args) != (3 if name == "clip" else 1):
            wanted = "clip(x, low, high)" if name == "clip" else f"{name}(x)"
            raise self._error(e, f"{name} has {len(args)} arguments", f"Write {wanted}.")
        if name == "clip":
            return self._apply("min", [self._apply("max", args[:2], e), args[2]], e)
        return self._apply(name, args, e)

    def _memory(self, name: str, e: ast.Call) -> _Typed:
        if not self.scope.memory:
            problem = f"{name}() is memory of a patient and not available here"
            raise self._error(e, problem, "Use inputs only.")
        words = [a.id if isinstance(a, ast.Name) else "" for a in e.args]
        if name == "events":
            if words:
                raise self._error(e, "events() takes no argument", "Write events().")
            return _Typed(Node("memory", name=name), PLAIN)
        known = CLOCK_NAMES if name == "at_entry" else self.scope.states
        if len(words) != 1 or not words[0]:
            what = "one of elapsed, age" if name == "at_entry" else "one state"
            raise self._error(e, f"{name}() needs {what}", f"Write for example {name}({known[0] if known else '...'}).")
        if words[0] not in known:
            what = "time scale" if name == "at_entry" else "state"
            raise self._error(e.args[0], f"unknown {what} {words[0]!r}", nearest(words[0], known))
        node = Node("memory", name=name, of=words[0])
        if name != "at_entry":
            return _Typed(node, _MEMORY_DIM.get(name, PLAIN))
        return _Typed(node, TIME) if words[0] == "elapsed" else self._age_at_entry(node, e)

    def _age_at_entry(self, node: Node, e: ast.expr) -> _Typed:
        if "age" not in self.scope.symbols:
            raise self._error(e, "at_entry(age) needs an attribute named age", "Add [attributes.age].")
        if self.scope.years_per_unit == 1.0:
            return _Typed(node, PLAIN)
        return _Typed(Node("mul", (node, const(self.scope.years_per_unit))), PLAIN)

    def _chain(self, op: str, parts: list[_Typed], e: ast.expr) -> _Typed:
        out = parts[0]
        for p in parts[1:]:
            out = self._apply(op, [out, p], e)
        return out

    def _apply(self, op: str, parts: list[_Typed], e: ast.expr) -> _Typed:
        assert len(parts) == ARITY[op]
        exponent = None
        if op == "pow" and not any(n.op in ("input", "attribute", "memory") for n in parts[1].node.walk()):
            value = fold(parts[1].node, {}).value
            exponent = value if math.isfinite(value) else None
        try:
            dim = combine(op, [p.dim for p in parts], exponent=exponent)
        except DimensionMismatch as m:
            raise self._error(e, str(m), self._unit_remedy(parts)) from None
        return _Typed(Node(op, tuple(p.node for p in parts)), dim)

    def _unit_remedy(self, parts: list[_Typed]) -> str:
        leaves = [n for p in parts for n in p.node.walk()]
        if any((n.op == "attribute" and n.name == "age") or (n.name == "at_entry" and n.of == "age") for n in leaves):
            return "Age is a plain number of years here: inputs beside it have the unit -."
        return "Check the units of the inputs used."
