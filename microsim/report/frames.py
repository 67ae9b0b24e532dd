"""Numbers and names into the words and digits a reader sees; every page and the terminal share these.

Formats only: no estimate is made here and no table is altered.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from typing import Any

import pandas as pd

from microsim.report.inputs import ResultLike, table

MINUS = "−"
NO_BREAK_HYPHEN = "\u2011"
BY_CONSTRUCTION = "by construction"

MODELS = {
    "individual": "Individual-level",
    "memoryless own": "Memoryless cohort, own rates",
    "memoryless carried": "Memoryless cohort, carried rates",
    "memoryless refit": "Memoryless cohort, refitted rates",
}
USES = {"own": "own rates", "carried": "carried rates", "refit": "refitted rates"}
CYCLE_RULES = {
    "": "",
    "continuous": "continuous time",
    "none": "cycles, no correction",
    "half-cycle": "cycles, half-cycle",
    "simpson": "cycles, Simpson",
}
BASES = {
    "continuous": "in continuous time",
    "none": "in uncorrected cycles",
    "half-cycle": "in cycles with half-cycle correction",
    "simpson": "in cycles with Simpson's correction",
}
SCALES = {"sojourn": "time since entry", "elapsed": "time since model start", "age": "attained age"}
OUTCOMES = {
    "ly": "Life-years",
    "ly_disc": "Life-years, discounted",
    "qaly": "QALYs",
    "qaly_disc": "QALYs, discounted",
    "cost": "Cost",
    "cost_disc": "Cost, discounted",
}
VERDICT_MARKS = {"adequate": "≈", "not adequate": "≠", "unresolved": "?"}


def missing(value: object) -> bool:
    """True for None, NaN and empty text."""
    return value is None or value == "" or (isinstance(value, float) and math.isnan(value))


def _signed(text: str) -> str:
    return text.replace("-", MINUS)


def number(value: float, *, figures: int = 4) -> str:
    """``figures`` significant digits, thousands separated, whole numbers never cut; "–" for a missing value."""
    value = float(value)
    if math.isnan(value):
        return "–"
    if math.isinf(value):
        return "∞" if value > 0 else MINUS + "∞"
    if value == 0:
        return "0"
    magnitude = math.floor(math.log10(abs(value)))
    if magnitude < -4:
        return _signed(f"{value:.{figures - 1}g}")
    return fixed(value, max(0, figures - 1 - magnitude))


def trimmed(value: float) -> str:
    """As ``number``, without zeros at the end of its decimals."""
    text = number(value)
    return text.rstrip("0").rstrip(".") if "." in text else text


def fixed(value: float, decimals: int) -> str:
    """A fixed number of decimals, thousands separated, without a signed zero."""
    text = f"{float(value):,.{decimals}f}"
    return text.lstrip("-") if not text.strip("-0.,") else _signed(text)


def decimals_for(standard_error: float) -> int:
    """Decimals that show two significant digits of the error, at most six."""
    if not math.isfinite(standard_error) or standard_error <= 0:
        return 0
    return min(6, max(0, 1 - math.floor(math.log10(standard_error))))


def with_error(value: float, standard_error: float, *, signed: bool = False) -> str:
    """``6.214 (0.013)``: the value to the precision its standard error supports, the error in brackets.

    Without a positive error the value stands alone, to four significant digits.
    """
    value, error = float(value), float(standard_error)
    if math.isfinite(value) and math.isfinite(error) and error > 0:
        decimals = decimals_for(error)
        body = f"{fixed(value, decimals)} ({fixed(error, decimals)})"
    else:
        body = number(value)
    return "+" + body if signed and value > 0 else body


def money(value: float) -> str:
    """Whole units from 100 upwards, else four significant digits."""
    value = float(value)
    return fixed(value, 0) if math.isfinite(value) and abs(value) >= 100 else number(value)


def currency_of(result: ResultLike) -> str:
    return str(result.summary.get("currency", ""))


def labels_of(result: ResultLike, kind: str) -> Mapping[str, str]:
    labels: Mapping[str, Mapping[str, str]] = result.summary.get("labels", {})
    return labels.get(kind, {})


def label(result: ResultLike, kind: str, name: object) -> str:
    """Label of a strategy, state or clock (``kind`` is the plural), or its name."""
    return labels_of(result, kind).get(str(name), "") or str(name)


def model_label(model: object) -> str:
    return MODELS.get(str(model), str(model).capitalize())


def outcome_label(result: ResultLike, outcome: str) -> str:
    """Words for an outcome name; parts after a colon are looked up among states and clocks."""
    head, _, part = outcome.partition(":")
    if not part:
        return OUTCOMES.get(head, head.replace("_", " ").capitalize())
    if head in ("cost", "cost_disc"):
        return f"{part.replace('_', ' ').capitalize()}{', discounted' if head == 'cost_disc' else ''}"
    kind = "clocks" if head == "events" else "states"
    return label(result, kind, part)


def quantity_label(result: ResultLike, outcome: str) -> str:
    """Words for an outcome that stands without its group's heading."""
    group = {"time": "Time: ", "entries": "Arrivals: ", "events": "Events: "}.get(outcome.partition(":")[0], "")
    return group + outcome_label(result, outcome)


def outcome_group(outcome: str) -> str:
    """Heading under which the full table lists an outcome."""
    head, _, part = outcome.partition(":")
    groups = {"time": "Time in state", "entries": "Arrivals in state", "events": "Events of transition"}
    if head in groups:
        return groups[head]
    if head in ("cost", "cost_disc"):
        return "Costs by category" if part else "Costs"
    return "Survival and quality of life"


def rows_of(frame: pd.DataFrame) -> list[Any]:
    """Rows as named tuples, whatever their columns hold."""
    return list(frame.itertuples(index=False))


def ordered(values: Iterable[Any]) -> list[Any]:
    """Distinct values in order of first appearance."""
    return list(dict.fromkeys(values))


def stated_rule(result: ResultLike) -> str:
    """The cycle rule the verdict is given on: the study's setting, else the one the split names, else any there is."""
    settings: Mapping[str, Any] = result.summary.get("settings", {})
    rules = ordered(table(result, "net_benefit")["cycle_rule"]) + ordered(table(result, "gap")["cycle_rule"])
    for key in ("correction", "cycle_rule"):
        if settings.get(key) in rules:
            return str(settings[key])
    named = [rule for rule in rules if rule not in ("", "continuous")]
    return str(named[0]) if named else "continuous"


def at_stated_rule(frame: pd.DataFrame, rule: str) -> pd.DataFrame:
    """Individual-level rows and those of cohorts under one cycle rule."""
    return frame[(frame["cycle_rule"] == rule) | (frame["model"] == "individual")]


def verdict_use(result: ResultLike) -> str:
    """The use of rates a verdict rests on: one that practice can build before the own-rates one."""
    uses = ordered(table(result, "gap")["use"])
    named = result.summary.get("settings", {}).get("use")
    return next((use for use in (named, "refit", "carried", *uses) if use in uses), "carried")


def by_construction(row: Any, term: str) -> bool:
    """Whether a term of the split is zero by the way the models are made; the flag is the comparison's, not ours."""
    return bool(getattr(row, f"{term}_by_construction", False))


def verdict_basis(result: ResultLike) -> str:
    """The cohort calculation the verdict is about, in words."""
    rule, use = stated_rule(result), verdict_use(result)
    return f"memoryless cohort with {USES.get(use, use)}, {BASES.get(rule, rule)}"


def flat(mapping: Mapping[str, Any], prefix: str = "") -> list[tuple[str, str]]:
    """Nested mapping as dotted keys and printed values, in order."""
    rows: list[tuple[str, str]] = []
    for key, value in mapping.items():
        name = f"{prefix}{key}"
        if isinstance(value, Mapping):
            rows += flat(value, name + ".")
        else:
            rows.append((name, plain(value)))
    return rows


def plain(value: object) -> str:
    """A manifest value as text: lists joined, integers and floats exact enough to be typed back."""
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return f"{value:.10g}"
    if isinstance(value, Sequence) and not isinstance(value, str):
        return ", ".join(plain(part) for part in value)
    return "–" if value is None else str(value)
