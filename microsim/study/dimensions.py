"""Units of measurement: unit text -> a factor to study units and a dimension, and how dimensions combine in formulas.

A dimension is a power of money and a power of time. ``None`` stands for a bare number in a formula, which takes
whatever dimension its place asks for. Knows nothing of files, names or patients.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction

# Lengths in years. 365.25 days is the mean Julian year; a month is a twelfth of it.
YEARS = {"year": 1.0, "month": 1.0 / 12.0, "week": 7.0 / 365.25, "day": 1.0 / 365.25}
PLAIN_UNITS = ("", "-", "1", "ratio", "probability", "utility", "QALY", "count")


@dataclass(frozen=True, slots=True)
class Dim:
    """money ** money * time ** time."""

    money: Fraction = Fraction(0)
    time: Fraction = Fraction(0)

    def times(self, other: Dim, *, sign: int = 1) -> Dim:
        return Dim(self.money + sign * other.money, self.time + sign * other.time)

    def power(self, exponent: Fraction) -> Dim:
        return Dim(self.money * exponent, self.time * exponent)

    def __str__(self) -> str:
        if self == PLAIN:
            return "a plain number"
        over = [_power_text(n, p) for n, p in (("money", self.money), ("time", self.time)) if p > 0]
        under = [_power_text(n, -p) for n, p in (("money", self.money), ("time", self.time)) if p < 0]
        return " * ".join(over or ["1"]) + "".join(f" / {u}" for u in under)


AnyDim = Dim | None

PLAIN = Dim()
MONEY = Dim(money=Fraction(1))
TIME = Dim(time=Fraction(1))
PER_TIME = Dim(time=Fraction(-1))
MONEY_PER_TIME = Dim(Fraction(1), Fraction(-1))


class DimensionMismatch(ValueError):
    """Two quantities that cannot stand together; the text says why."""


class UnknownUnit(ValueError):
    """A word in a unit that is neither money, time nor a plain unit; ``word`` is it."""

    def __init__(self, word: str) -> None:
        self.word = word
        super().__init__(word)


def _power_text(name: str, power: Fraction) -> str:
    return name if power == 1 else f"{name}^{power}"


def describe(dim: AnyDim) -> str:
    return "a number" if dim is None else str(dim)


def years_in(unit: str) -> float:
    """Length of a time unit in years. Raises UnknownUnit."""
    if unit not in YEARS:
        raise UnknownUnit(unit)
    return YEARS[unit]


def factor_between(unit: str, study_unit: str) -> float:
    """How many study units one ``unit`` lasts."""
    return 1.0 if unit == study_unit else years_in(unit) / years_in(study_unit)


def parse_unit(text: str, *, study_unit: str, money: str) -> tuple[float, Dim]:
    """Factor to study units and dimension of e.g. "EUR/day", "/year", "count". Raises UnknownUnit."""
    factor, dim = 1.0, PLAIN
    for i, group in enumerate(text.strip().split("/")):
        sign = 1 if i == 0 else -1
        for word in (w.strip() for w in group.split("*")):
            # A probability per time does not scale with time as a rate does, so it is never converted.
            if word == "probability" and text.strip() != word:
                raise UnknownUnit(word)
            if word in PLAIN_UNITS:
                continue
            if word == money:
                dim = dim.times(MONEY, sign=sign)
            elif word in YEARS:
                dim = dim.times(TIME, sign=sign)
                factor *= factor_between(word, study_unit) ** sign
            else:
                raise UnknownUnit(word)
    return factor, dim


def same(dims: Sequence[AnyDim], what: str) -> AnyDim:
    """The common dimension of quantities that are added, compared or chosen between."""
    known = [d for d in dims if d is not None]
    for d in known[1:]:
        if d != known[0]:
            raise DimensionMismatch(f"{what} {known[0]} and {d} is not possible")
    return known[0] if known else None


def _plain(dims: Sequence[AnyDim], what: str) -> AnyDim:
    for d in dims:
        if d not in (None, PLAIN):
            raise DimensionMismatch(f"{what} needs a plain number, not {d}")
    return None if all(d is None for d in dims) else PLAIN


_SAME = {"add": "adding", "sub": "subtracting", "min": "the minimum of", "max": "the maximum of"}
_COMPARE = ("lt", "le", "gt", "ge", "eq", "ne")


def combine(op: str, dims: Sequence[AnyDim], *, exponent: float | None = None) -> AnyDim:
    """Dimension of an operation of expression.ARITY; ``exponent``: value of a constant power.

    Raises DimensionMismatch.
    """
    if op in _SAME:
        return same(dims, _SAME[op])
    if op in ("neg", "abs"):
        return dims[0]
    if op in _COMPARE:
        same(dims, "comparing")
        return PLAIN
    if op == "where":
        return same(dims[1:], "choosing between")
    if op in ("and", "or", "not"):
        return PLAIN
    if op in ("mul", "div"):
        if dims[0] is None and dims[1] is None:
            return None
        return (dims[0] or PLAIN).times(dims[1] or PLAIN, sign=1 if op == "mul" else -1)
    if op == "sqrt":
        return None if dims[0] is None else dims[0].power(Fraction(1, 2))
    if op == "pow":
        return _power(dims, exponent)
    return _plain(dims, op)


def _power(dims: Sequence[AnyDim], exponent: float | None) -> AnyDim:
    _plain(dims[1:], "an exponent")
    base = dims[0]
    if base is None or base == PLAIN:
        return base if dims[1] is None else PLAIN
    if exponent is None:
        raise DimensionMismatch(f"{base} can only be raised to a power written as a number")
    return base.power(Fraction(exponent).limit_denominator(1000))
