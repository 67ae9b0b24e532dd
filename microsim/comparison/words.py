"""The verdict in plain sentences. Computes nothing; every number comes from the tests and decisions."""

from __future__ import annotations

import math
from collections.abc import Mapping

from microsim.comparison.verdict import ADEQUATE, NOT_ADEQUATE, Decision, Test


def money(value: float, currency: str) -> str:
    """A money amount with its currency's name, rounded to whole units below a billion."""
    sign = "−" if value < 0 else ""
    return f"{sign}{abs(value):,.0f} {currency.split()[0]}"


def headline_sentence(headline: str, correction: str) -> str:
    cohort = f"a memoryless cohort with carried rates ({correction} counting)"
    if headline == ADEQUATE:
        return f"Memory does not matter here: {cohort} is adequate for this decision."
    if headline == NOT_ADEQUATE:
        return f"Memory matters here: {cohort} is not adequate for this decision."
    return f"Unresolved: this run cannot tell whether {cohort} is adequate for this decision."


def test_sentence(test: Test, labels: Mapping[str, str], causes: Mapping[str, float], currency: str) -> str:
    """One strategy at one threshold: both models' answer, the gap, its error, its causes and the tolerance."""
    parts = ", ".join(f"{name} {money(value, currency)}" for name, value in causes.items())
    end = {
        ADEQUATE: "within the tolerance",
        NOT_ADEQUATE: "outside the tolerance",
    }.get(test.verdict, "too close to the tolerance to call")
    needed = ""
    if not math.isnan(test.patients_needed):
        needed = (
            f"; about {test.patients_needed:,.0f} patients would tell"
            if math.isfinite(test.patients_needed)
            else "; no number of patients would tell"
        )
    return (
        f"At {money(test.threshold, currency)} per QALY, {labels[test.strategy]}: incremental net benefit "
        f"{money(test.full, currency)} by the individual-level model, {money(test.cohort, currency)} by the cohort. "
        f"Gap {money(test.gap, currency)} (standard error {money(test.se, currency)}; {parts}), {end} of "
        f"±{money(test.tolerance, currency)}{needed}."
    )


def decision_sentence(decision: Decision, names: tuple[str, ...], labels: Mapping[str, str], currency: str) -> str:
    """Which strategy each model picks at a threshold, and what deciding by the cohort costs."""
    at = f"At {money(decision.threshold, currency)} per QALY"
    full, cohort = labels[names[decision.full.strategy]], labels[names[decision.cohort.strategy]]
    open_full = "" if decision.full.resolved else " (unresolved: the lead is within simulation error)"
    open_cohort = "" if decision.cohort.resolved else " (unresolved: the lead is within simulation error)"
    if not decision.differs:
        return f"{at} both models choose {full}{open_full or open_cohort}."
    cost = f"Deciding by the cohort would forgo {money(decision.regret, currency)} per patient"
    error = f"(standard error {money(decision.regret_se, currency)})"
    return (
        f"{at} the individual-level model chooses {full}{open_full}, the cohort {cohort}{open_cohort}. {cost} {error}"
        + ("." if decision.resolved else "; unresolved.")
    )
