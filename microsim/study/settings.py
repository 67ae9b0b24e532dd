"""Settings of study.toml (decision, discounting, cohort, run) -> their bound form, with the defaults told.

Checks single values and their order; knows nothing of states or data.
"""

from __future__ import annotations

import itertools

from microsim.study.bound import CohortSettings, Decision, Discounting
from microsim.study.context import Context
from microsim.study.dimensions import factor_between
from microsim.study.formula import nearest
from microsim.study.schema import Duration, StudyFile


def length(ctx: Context, key: str, *, value: float | Duration) -> float:
    """A length of time in study units; must be positive."""
    duration = value.value * factor_between(value.unit, ctx.study_unit) if isinstance(value, Duration) else float(value)
    if duration <= 0:
        ctx.fault(key, "the length must be positive", "Correct it.", value=f"{duration:g}")
    return duration


def decision(ctx: Context, text: StudyFile) -> Decision:
    d = text.decision
    names = list(text.strategies)
    if d.comparator is not None and d.comparator not in names:
        ctx.fault("decision.comparator", f"unknown strategy {d.comparator!r}", nearest(d.comparator, names))
    thresholds = tuple(float(t) for t in d.thresholds)
    if not thresholds:
        ctx.fault("decision.thresholds", "no threshold is given", "Give at least one, in money per QALY.")
    elif min(thresholds) <= 0:
        ctx.fault("decision.thresholds", "a threshold must be positive", "Correct it.", value=d.thresholds)
    elif any(a >= b for a, b in itertools.pairwise(thresholds)):
        ctx.fault(
            "decision.thresholds", "thresholds must increase", "Sort them and remove doubles.", value=d.thresholds
        )
    for name in ("share", "amount"):
        amount = getattr(d.materiality, name)
        if amount < 0:
            ctx.fault(f"decision.materiality.{name}", "a materiality cannot be negative", "Correct it.", value=amount)
    if d.materiality.share == 0 and d.materiality.amount == 0:
        ctx.warnings.append("decision.materiality: it is zero, so no cohort model can be called adequate")
    if not 0 < d.alpha < 0.5:
        ctx.fault("decision.alpha", "alpha lies between 0 and 0.5", "Write for example 0.05.", value=d.alpha)
    comparator = d.comparator or (names[0] if names else "")
    return Decision(comparator, thresholds, float(d.materiality.share), float(d.materiality.amount), float(d.alpha))


def discounting(ctx: Context, text: StudyFile) -> Discounting:
    d = text.discounting
    for name in ("costs", "effects"):
        rate = getattr(d, name)
        if not 0 <= rate < 1:
            ctx.fault(
                f"discounting.{name}", "a discount rate lies in [0, 1)", "Write 0.035 for 3.5 % a year.", value=rate
            )
    return Discounting(float(d.costs), float(d.effects), d.method)


def cohort(ctx: Context, text: StudyFile, *, horizon: float) -> CohortSettings:
    cycle = length(ctx, "cohort.cycle", value=text.cohort.cycle)
    if cycle > horizon > 0:
        found = f"{cycle:g} against {horizon:g} {text.time}s"
        ctx.fault("cohort.cycle", "the cycle is longer than the horizon", "Shorten the cycle.", value=found)
    return CohortSettings(cycle, text.cohort.correction)


def tell_defaults(ctx: Context, text: StudyFile) -> None:
    """Add every setting that was not said, with the value taken."""
    names = list(text.strategies)
    said: list[tuple[str, bool, object]] = [
        ("invented", "invented" in text.model_fields_set, "false"),
        ("decision.comparator", text.decision.comparator is not None, names[0] if names else ""),
    ]
    tables = (
        ("decision", text.decision, ("alpha",)),
        ("decision.materiality", text.decision.materiality, ("share", "amount")),
        ("discounting", text.discounting, ("costs", "effects", "method")),
        ("cohort", text.cohort, ("cycle", "correction")),
        ("run", text.run, ("patients", "seed")),
    )  # fmt: skip
    for key, table, fields in tables:
        for field in fields:
            value = getattr(table, field)
            shown = f"{value.value:g} {value.unit}" if isinstance(value, Duration) else value
            said.append((f"{key}.{field}", field in table.model_fields_set, shown))
    for key, is_said, value in said:
        if not is_said:
            ctx.default(key, value)
