"""The formula tree: what a parsed formula is, and how to evaluate it over arrays.

The tree is the only form in which formulas travel between rooms. It can be folded (inputs replaced by numbers) and
evaluated with NumPy; the compiled engine lowers it to a register tape elsewhere. It knows nothing of files or text.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]

# Arithmetic of the formula language: operator -> number of operands. Truth is 1.0 / 0.0.
ARITY = {
    "add": 2, "sub": 2, "mul": 2, "div": 2, "pow": 2, "neg": 1,
    "exp": 1, "log": 1, "sqrt": 1, "abs": 1, "min": 2, "max": 2,
    "lt": 2, "le": 2, "gt": 2, "ge": 2, "eq": 2, "ne": 2, "and": 2, "or": 2, "not": 1, "where": 3,
}  # fmt: skip

# Memory of a patient that a formula may read; all are constant from one entry to the next.
#   visits(S)       entries to S so far, the present one and the start included
#   time_in(S)      time spent in S in completed sojourns
#   since_entry(S)  time from the last entry to S to the entry of the present state (inf if never; 0 if S is present)
#   since_exit(S)   time from the last exit from S to the entry of the present state (inf if never)
#   last_stay(S)    length of the last completed sojourn in S (0 if none)
#   came_from(S)    1 if the previous state was S
#   events()        transitions so far
#   at_entry(c)     clock c in {elapsed, age} at entry to the present state
MEMORY = ("visits", "time_in", "since_entry", "since_exit", "last_stay", "came_from", "events", "at_entry")


@dataclass(frozen=True, slots=True)
class Node:
    """op: "const" (value), "input" (name), "attribute" (name), "memory" (name one of MEMORY, of = state or clock),
    or a key of ARITY with args."""

    op: str
    args: tuple[Node, ...] = ()
    value: float = 0.0
    name: str = ""
    of: str = ""

    def walk(self) -> Iterator[Node]:
        yield self
        for a in self.args:
            yield from a.walk()

    @property
    def is_const(self) -> bool:
        return self.op == "const"


def const(value: float) -> Node:
    return Node("const", value=float(value))


_NUMPY: dict[str, Callable[..., Array]] = {
    "add": np.add, "sub": np.subtract, "mul": np.multiply, "div": np.divide, "pow": np.power, "neg": np.negative,
    "exp": np.exp, "log": np.log, "sqrt": np.sqrt, "abs": np.abs, "min": np.minimum, "max": np.maximum,
    "lt": np.less, "le": np.less_equal, "gt": np.greater, "ge": np.greater_equal, "eq": np.equal, "ne": np.not_equal,
    "and": lambda a, b: (a != 0) & (b != 0), "or": lambda a, b: (a != 0) | (b != 0), "not": lambda a: a == 0,
    "where": lambda c, a, b: np.asarray(np.where(c != 0, a, b)),
}  # fmt: skip


def apply(op: str, *args: Array | float) -> Array:
    """One arithmetic operation by its NumPy meaning, as float64; invalid values become nan or inf, silently."""
    with np.errstate(all="ignore"):
        return np.asarray(_NUMPY[op](*(np.asarray(a, dtype=np.float64) for a in args)), dtype=np.float64)


def evaluate(node: Node, lookup: Callable[[Node], Array | float]) -> Array:
    """Value of the tree; ``lookup`` gives the value of every input, attribute and memory leaf."""
    if node.op == "const":
        return np.asarray(node.value)
    if node.op in ARITY:
        return apply(node.op, *(evaluate(a, lookup) for a in node.args))
    return np.asarray(lookup(node), dtype=np.float64)


def fold(node: Node, inputs: Mapping[str, float]) -> Node:
    """Replace inputs by numbers and compute every subtree that is then constant. Raises KeyError if one is missing."""
    if node.op == "input":
        return const(inputs[node.name])
    if node.op not in ARITY:
        return node
    args = tuple(fold(a, inputs) for a in node.args)
    if all(a.is_const for a in args):
        return const(float(apply(node.op, *(a.value for a in args))))
    return Node(node.op, args)
